"""Nothing depends on the number of ranks: products, conditions, preconditioned solves.

Products are compared with NumPy's on the whole arrays, on one rank and by another evaluation.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.compute_cases import PRODUCTS, SOLVES
from tests.parallel import results, state


@pytest.mark.parametrize("case", PRODUCTS)
def test_products_equal_those_of_the_whole_arrays(ranks: int, case: str) -> None:
    found = results(ranks)["products"][case]
    assert found["levels on more ranks than one"] == (ranks > 1 and case == "shear in space")
    for kind in ("residual", "tangent", "adjoint", "matrix"):
        assert found[kind] < 1e-13, kind


@pytest.mark.parametrize("case", PRODUCTS)
def test_the_bordered_adjoint_is_the_transpose_on_any_ranks(ranks: int, case: str) -> None:
    assert results(ranks)["products"][case]["bordered adjoint"] < 1e-13


@pytest.mark.parametrize("case", PRODUCTS)
def test_borders_are_the_same_on_all_ranks_and_for_any_number_of_them(ranks: int, case: str) -> None:
    found, alone = results(ranks)["products"][case], results(1)["products"][case]
    assert found["row spread"] == found["column spread"] == 0.0
    numbers = [key for key in alone if key[-1].isdigit()]
    assert len(numbers) >= 6
    for key in numbers:
        # Sums over all nodes: their order differs.
        assert found[key] == pytest.approx(alone[key], rel=1e-12, abs=1e-14), key


@pytest.mark.parametrize("solve", SOLVES)
def test_a_solve_ends_alike_on_all_ranks(ranks: int, solve: str) -> None:
    found = results(ranks)["solves"][solve]
    assert found["converged"], found["reason"]
    assert found["alike"]


@pytest.mark.parametrize("solve", SOLVES)
def test_the_solution_does_not_depend_on_the_ranks(ranks: int, solve: str) -> None:
    case, kind = solve.split()
    found, alone = state(case, kind, ranks), state(case, "direct", 1)
    assert np.abs(found - alone).max() < 1e-10 * np.abs(alone).max()
    values, wanted = (
        results(ranks)["solves"][solve]["values"],
        results(1)["solves"][f"{case} direct"]["values"],
    )
    assert values == pytest.approx(wanted, rel=1e-10, abs=1e-12)


@pytest.mark.parametrize("solve", [s for s in SOLVES if s.endswith("direct")])
def test_newtons_path_does_not_depend_on_the_ranks(ranks: int, solve: str) -> None:
    found, alone = (results(r)["solves"][solve]["residuals"] for r in (ranks, 1))
    assert len(found) == len(alone)
    # The linear solves stop at 1e-6 of their right-hand side.
    assert found[:-1] == pytest.approx(alone[:-1], rel=1e-3)


def test_the_film_case_is_a_state_that_changes_in_time() -> None:
    # The period by independent recomputation; a lattice of fourth order as coarse as this one is 2 % off.
    film = state("film", "direct", 1)
    assert results(1)["solves"]["film direct"]["values"]["period"] == pytest.approx(17.672, rel=0.03)
    assert np.std(film, axis=0).max() > 0.1


def test_the_shear_case_is_the_laminar_flow() -> None:
    # One-line algebra: lap(om)/Re = cos(y) has om = -(Re/k2) cos(y), where the second difference of
    # spacing h makes -k2 cos(y) of cos(y), k2 = (2 - 2 cos h)/h**2.
    vorticity = state("shear", "direct", 1)[..., 0]
    h = 2.0 * np.pi / vorticity.shape[1]
    wanted = -3.0 * h**2 / (2.0 - 2.0 * np.cos(h)) * np.cos(h * np.arange(vorticity.shape[1]))
    assert np.abs(vorticity - wanted[None, :, None]).max() < 1e-10
