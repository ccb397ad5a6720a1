"""What `compute_everywhere.py` computes, for it and for the tests that read its results."""

from __future__ import annotations

from lattice.geometry.lattice import Lattice

PRODUCTS = {
    "kuramoto-sivashinsky": Lattice(23, 1, 22),
    "kolmogorov": Lattice(20, 9, 12, 2),
}
SOLVES = ("film direct", "film patches", "shear direct", "shear patches")
