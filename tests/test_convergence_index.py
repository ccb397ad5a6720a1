"""Observed order, extrapolation and grid convergence index against published worked examples."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lattice.check.convergence import (
    Series,
    band_of,
    convergence_kind,
    grid_convergence_index,
    observed_order,
    richardson,
)


def test_the_spatial_convergence_tutorial_is_reproduced():
    # "Examining Spatial (Grid) Convergence", NASA Glenn's tutorial on verification: pressure recovery of an inlet
    # on grids doubled twice; all figures from memory.
    coarse, medium, fine = 0.96178, 0.96854, 0.97050
    order = observed_order((coarse, medium, fine), (2.0, 2.0))
    assert order == pytest.approx(1.786170, abs=1e-6)
    assert richardson(fine, medium, 2.0, order) == pytest.approx(0.97130, abs=5e-6)
    index = grid_convergence_index(fine, medium, 2.0, order, 1.25)
    coarser = grid_convergence_index(medium, coarse, 2.0, order, 1.25)
    assert 100.0 * index == pytest.approx(0.103083, abs=1e-6)
    assert 100.0 * coarser == pytest.approx(0.356249, abs=1e-6)
    assert coarser / (2.0**order * index) == pytest.approx(fine / medium, rel=1e-9)  # 1.0020: "near 1"


def test_the_reattachment_length_of_the_reporting_procedure_is_reproduced():
    # Celik et al., J. Fluids Eng. 130 (2008) 078001, table 1 (from memory): 18000, 8000 and 4500 cells in two
    # dimensions; 6.063, 5.972, 5.863; p = 1.53, extrapolated 6.1685, index of the finest 2.2 %.
    ratios = (math.sqrt(8000 / 4500), math.sqrt(18000 / 8000))
    order = observed_order((5.863, 5.972, 6.063), ratios)
    assert order == pytest.approx(1.53, abs=0.01)
    assert richardson(6.063, 5.972, ratios[1], order) == pytest.approx(6.1685, abs=5e-4)
    assert 100.0 * grid_convergence_index(6.063, 5.972, ratios[1], order, 1.25) == pytest.approx(
        2.2, abs=0.05
    )


@given(
    order=st.floats(1.0, 8.0),
    ratios=st.tuples(st.floats(1.3, 2.0), st.floats(1.3, 2.0)),
    error=st.floats(1e-3, 1.0),
)
def test_an_exact_power_law_is_found(order, ratios, error):
    spacings = np.array([ratios[0] * ratios[1], ratios[1], 1.0])
    values = 3.0 + error * spacings**order
    found = observed_order(tuple(values), ratios)
    assert found == pytest.approx(order, rel=1e-4)
    band = band_of(Series("q", tuple(values), ratios, order, 0.0))
    assert band.best == pytest.approx(3.0, abs=1e-3 * error)
    assert abs(3.0 - values[0]) <= band.half
    assert band.near_nominal


def test_an_unexpected_order_widens_the_band():
    def half(order: float) -> float:
        values = tuple(1.0 + 0.01 * h**order for h in (4.0, 2.0, 1.0))
        return band_of(Series("q", values, (2.0, 2.0), 4.0, 0.0)).half / abs(values[0] - values[1])

    assert half(1.5) > 2.0 * half(4.0)
    assert half(7.0) > 2.0 * half(4.0)


@pytest.mark.parametrize(
    ("values", "kind"),
    [
        ((1.16, 1.04, 1.01), "monotone"),
        ((1.1, 0.9, 1.0), "oscillating"),
        ((1.0, 1.1, 1.4), "diverging"),
        ((1.0, 1.0 + 1e-13, 1.0), "exact"),
    ],
)
def test_kinds_of_convergence_are_told_apart(values, kind):
    # Their definition by the ratio of the differences: common practice in grid convergence studies.
    assert convergence_kind(values, (2.0, 2.0), 1e-12) == kind
    band = band_of(Series("q", values, (2.0, 2.0), 2.0, 1e-12))
    assert band.kind == kind
    assert band.near_nominal == (kind in ("monotone", "exact"))


def test_a_diverging_quantity_has_a_band_as_wide_as_its_spread():
    band = band_of(Series("q", (1.0, 1.1, 1.4), (2.0, 2.0), 2.0, 0.0))
    assert band.half == pytest.approx(3.0 * 0.4)
    assert band.order is None
