"""Metrics and fits of scaling studies against published figures, identities and SciPy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import curve_fit

from lattice.study.fits import amdahl_times, fit_amdahl, fit_gustafson
from lattice.study.metrics import karp_flatt, standings
from tests.study_rows import modelled_row, row, spread


def amdahl(serial: float, ranks: int) -> float:
    """Return Amdahl's speed-up (AFIPS Conf. Proc. 30 (1967) 483, from memory)."""
    return 1.0 / (serial + (1.0 - serial) / ranks)


@pytest.mark.parametrize("ranks", [2, 7, 64])
def test_karp_and_flatt_give_back_amdahls_serial_fraction(ranks: int) -> None:
    # The identity their metric is made from (Comm. ACM 33 (1990) 539, from memory).
    assert karp_flatt(amdahl(0.05, ranks), ranks) == pytest.approx(0.05, rel=1e-12)


def test_gustafsons_law_gives_the_speed_ups_of_his_paper() -> None:
    # Comm. ACM 31 (1988) 532, from memory: 1024 processors, serial fractions of 0.4 to 0.8 %, scaled
    # speed-ups of 1016 to 1021.
    for speed_up in (1016, 1020, 1021):
        fit = fit_gustafson([1, 1024], [1.0, speed_up])
        assert fit is not None
        assert 0.0025 < fit.serial < 0.0085


def test_fit_and_band_of_amdahls_law_are_those_of_scipy() -> None:
    ranks = [1, 1, 2, 2, 4, 4, 8, 8]
    seconds = [10.0, 10.2, 5.4, 5.3, 3.1, 3.0, 1.9, 2.0]
    fit = fit_amdahl(ranks, seconds)
    assert fit is not None
    found, covariance = curve_fit(lambda p, a, b: a + b / p, np.array(ranks, dtype=float), seconds)
    assert fit.parameters == pytest.approx(found, rel=1e-6)
    assert fit.covariance == pytest.approx(covariance, rel=1e-5)
    middle, low, high = amdahl_times(fit, [2.0])
    gradient = np.array([1.0, 0.5])
    half = 2.4469 * np.sqrt(gradient @ covariance @ gradient)  # Student's t, 6 degrees, 97.5 % (any table)
    assert (high - middle)[0] == pytest.approx(half, rel=1e-4)
    assert (middle - low)[0] == pytest.approx(half, rel=1e-4)


def test_one_rank_count_gives_no_law() -> None:
    assert fit_amdahl([2, 2], [1.0, 1.1]) is None
    assert fit_gustafson([1, 1], [1.0, 1.0]) is None


def test_strong_efficiency_is_the_ratio_of_rank_seconds() -> None:
    one, two = standings([row(1, {"rest": 10.0}), row(2, {"rest": 6.25})])
    assert (one.efficiency, two.efficiency) == pytest.approx((1.0, 0.8))
    assert two.speed_up == pytest.approx(1.6)


def test_weak_efficiency_is_the_ratio_of_seconds_and_is_told_per_iteration_too() -> None:
    points = [
        row(1, {"rest": 4.0}, kind="weak-area"),
        row(2, {"rest": 5.0}, kind="weak-area", growth=2.0, iterations=15),
    ]
    _, two = standings(points)
    assert two.efficiency == pytest.approx(0.8)
    assert two.per_iteration == pytest.approx(1.2)
    assert two.speed_up == pytest.approx(1.6)


def test_the_shortest_repeat_counts() -> None:
    points = standings([row(1, {"rest": 3.0}), row(1, {"rest": 2.0}), row(1, {"rest": 7.0})])
    assert [(p.best, p.middle, p.repeats) for p in points] == [(2.0, 3.0, 3)]


def test_oversubscribed_points_have_no_efficiency() -> None:
    rows = [row(1, {"rest": 4.0}), row(2, {"rest": 2.0}), row(4, {"rest": 1.0}, oversubscribed=True)]
    points = standings(rows)
    assert [p.efficiency is None for p in points] == [False, False, True]
    assert points[2].speed_up is points[2].karp_flatt is points[2].pop is None


def test_a_point_whose_cores_other_work_shared_has_no_efficiency() -> None:
    busy = row(2, {"rest": 2.0}, cores=2, load_average=5.2)
    _, two = standings([row(1, {"rest": 4.0}, cores=2, load_average=1.2), busy])
    assert two.efficiency is None
    _, two = standings([row(1, {"rest": 4.0}, cores=2), row(2, {"rest": 2.0}, cores=2, load_average=2.4)])
    assert two.efficiency == pytest.approx(1.0)


def test_an_oversubscribed_point_is_no_reference() -> None:
    rows = [row(1, {"rest": 4.0}, oversubscribed=True), row(2, {"rest": 2.0})]
    assert [p.efficiency for p in standings(rows)] == [None, 1.0]


def test_pops_efficiencies_multiply_to_the_strong_efficiency() -> None:
    # POP's hierarchy is built so (POP Standard Metrics, 2016, from memory): with an instrument that costs
    # nothing, global efficiency = strong efficiency where the reference spends no time in MPI.
    for point in standings([modelled_row(1), modelled_row(2), modelled_row(4)]):
        assert point.pop is not None
        assert point.pop.parallel == pytest.approx(point.pop.load_balance * point.pop.communication)
        assert point.pop.whole == pytest.approx(point.efficiency, rel=1e-9)


def test_load_balance_is_mean_over_largest() -> None:
    uneven = {"min": 1.0, "median": 1.5, "max": 2.0, "mean": 1.5}
    _, two = standings(
        [row(1, {"rest": 3.0}, useful_seconds=spread(3.0)), row(2, {"rest": 2.5}, useful_seconds=uneven)]
    )
    assert two.pop is not None
    assert (two.pop.load_balance, two.pop.communication) == pytest.approx((0.75, 0.8))
    assert two.pop.computation_scaling == pytest.approx(1.0)
