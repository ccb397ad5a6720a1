"""Every law, on every axis, at every order: the residual converges at the nominal order.

By manufactured solutions, see `tests.manufactured`. The NumPy path computes the residual here; that the
generated loops equal it is shown in test_kernels.
"""

from __future__ import annotations

import numpy as np
import pytest

from lattice.geometry.lattice import Lattice
from lattice.geometry.stencils import SPACE_ORDERS, TIME_ORDERS
from tests.manufactured import errors
from tests.problems import NAMED, OWN, Array, law_of

# Observed between these numbers of nodes, where the next term of the error costs less than 0.19 of the
# order. The axes that are not refined have order 8 on a field of one wave.
SPACE_NODES = (48, 64)
TIME_LEVELS = {2: (32, 48), 4: (32, 48), 6: (40, 60)}
WITHIN = 0.2

NAMED_CASES = [
    (name, axis, order)
    for name in NAMED
    for axis in "xy"[: law_of(name).dimensions]
    for order in SPACE_ORDERS
]
OWN_CASES = [(name, axis, 4) for name in OWN for axis in "xy"[: law_of(name).dimensions]]


def observed(coarse: Array, fine: Array, nodes: tuple[int, int]) -> Array:
    """Return the order p of every equation's error E = C h**p."""
    return np.asarray(np.log(coarse / fine) / np.log(nodes[1] / nodes[0]))


@pytest.mark.parametrize(("name", "axis", "order"), NAMED_CASES + OWN_CASES)
def test_a_steady_residual_converges_in_space(name: str, axis: str, order: int) -> None:
    law = law_of(name)
    found = []
    for nodes in SPACE_NODES:
        many = {"x": 64, "y": 64 if law.dimensions == 2 else 1, axis: nodes}
        orders = {"x": 8, "y": 8, axis: order}
        lattice = Lattice(1, many["y"], many["x"], law.dimensions, 2, orders["x"], orders["y"])
        found.append(errors(name, lattice, "xy"[: law.dimensions], axis))
    assert np.abs(observed(found[0], found[1], SPACE_NODES) - order).max() < WITHIN, found


@pytest.mark.parametrize("order", TIME_ORDERS)
@pytest.mark.parametrize("name", NAMED)
def test_a_periodic_residual_converges_in_time(name: str, order: int) -> None:
    law = law_of(name)
    found = []
    for levels in TIME_LEVELS[order]:
        rows, columns = (32, 32) if law.dimensions == 2 else (1, 64)
        lattice = Lattice(levels, rows, columns, law.dimensions, order, 8, 8)
        found.append(errors(name, lattice, "txy"[: 1 + law.dimensions], "t"))
    evolving = np.array(law.evolving)
    orders = observed(found[0], found[1], TIME_LEVELS[order])[evolving]
    assert np.abs(orders - order).max() < WITHIN, found
    # A constraint is collocated at the nodes: no error in time, and next to none in space here.
    assert np.all(found[1][~evolving] < 1e-9)


@pytest.mark.parametrize("name", OWN)
def test_the_whole_residual_of_any_formula_converges_on_all_axes_together(name: str) -> None:
    law = law_of(name)
    axes, nodes = "txy"[: 1 + law.dimensions], (40, 60)
    found = [
        errors(name, Lattice(n, n if law.dimensions == 2 else 1, n, law.dimensions, 4, 4, 4), axes, axes)
        for n in nodes
    ]
    assert np.abs(observed(found[0], found[1], nodes) - 4).max() < WITHIN, found
