"""Transforms and transfers of distributed fields, on every number of ranks.

Wanted spectra are NumPy's of the whole field; wanted fields are sums of waves evaluated on either lattice.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from lattice.spectral.transform import most_pencils, pencil_grid
from tests.preconditioned import results

CASES = ("time and x", "time, y and x", "blocks along y", "blocks along x", "y and x")
# Sums of 12 waves of size about one through two transforms: some ten times the rounding of one.
ROUNDING = 1e-13


# 4 ranks, too: a composite count can be split over two axes.
@pytest.fixture(scope="module", params=[1, 2, 3, 4, 5])
def found(request):
    return results(request.param)["pairs"]


@pytest.mark.parametrize("case", CASES)
def test_spectra_are_those_of_the_whole_field(found, case):
    assert found[case]["transform spectrum"] < ROUNDING
    assert found[case]["transform field"] < ROUNDING
    assert found[case]["transform spectrum changed"] == 0.0


def test_some_blocks_agree_with_pencils_and_some_are_moved():
    moved = {(case, n): results(n)["pairs"][case]["transform moved"] for n in (2, 4, 5) for case in CASES}
    assert moved["time and x", 2] == 0.0
    assert moved["blocks along x", 5] == 1.0


@pytest.mark.parametrize("case", CASES)
@pytest.mark.parametrize("kind", ["field", "rows"])
def test_transfer_is_exact_on_waves_that_both_lattices_carry(found, case, kind):
    assert found[case][f"restricted {kind}"] < ROUNDING
    assert found[case][f"prolonged {kind}"] < ROUNDING


@pytest.mark.parametrize("case", CASES)
def test_prolongation_is_the_transpose_of_restriction_in_the_mean_product(found, case):
    # <R f, c>/coarse nodes = <f, P c>/fine nodes; both are means of random numbers, far above rounding.
    assert found[case]["least product"] > 1e-5
    for kind in ("field", "rows"):
        assert found[case][f"transposes {kind}"] < 1e-15


@pytest.mark.parametrize("case", CASES)
def test_waves_at_the_coarse_nyquist_number_are_dropped_both_ways(found, case):
    # A shift of half a step would turn such a wave into one the lattice cannot show.
    assert found[case]["restricted Nyquist"] < ROUNDING
    assert found[case]["prolonged Nyquist"] < ROUNDING


def test_ranks_that_cannot_share_a_single_axis_are_refused(ranks):
    message = results(ranks)["refusal"]
    assert message == "" if ranks == 1 else "cannot share the transforms" in message and "direct" in message


@pytest.mark.parametrize("shape", [(24, 30), (7, 9), (16, 12, 12), (5, 40, 6)])
def test_every_pencil_grid_leaves_each_rank_a_part(shape):
    most = most_pencils(shape)
    sizes = (*shape[:-1], shape[-1] // 2 + 1)
    for count in range(1, most + 1):
        grid = pencil_grid(count, shape, ())
        if grid is None:
            continue
        assert math.prod(grid) == count and grid[-1] == 1
        # Whole along one axis in turn, from the last to the first; the ranks of each move on to the next.
        for whole in range(len(shape)):
            parts = [*grid[:whole], 1, *grid[whole : len(shape) - 1]]
            assert all(p <= n for p, n in zip(parts, sizes, strict=True))
    assert pencil_grid(most + 1, shape, ()) is None
    assert np.prod(pencil_grid(most, shape, ())) == most
