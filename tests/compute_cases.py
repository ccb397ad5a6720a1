"""What `compute_everywhere.py` computes, for it and for the tests that read its results."""

from __future__ import annotations

from lattice.geometry.lattice import Lattice

# The law and its lattice; the last two are cut in time and in space, across the levels of a gauge.
PRODUCTS = {
    "film": ("kuramoto-sivashinsky", Lattice(23, 1, 22)),
    "shear in time": ("kolmogorov", Lattice(20, 9, 12, 2)),
    "shear in space": ("kolmogorov", Lattice(4, 21, 9, 2)),
}
SOLVES = ("film direct", "film patches", "shear direct", "shear patches")
