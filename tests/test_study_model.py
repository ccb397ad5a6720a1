"""The cost model finds the coefficients that rows were made with, and is told apart from measurements."""

from __future__ import annotations

import pytest

from lattice.batch.sites import make_site
from lattice.study.extrapolate import predict, site_machine, turning_points
from lattice.study.model import back_test, calibrate, machine_of, phase_seconds
from tests.study_rows import COEFFICIENTS, modelled_row


def test_calibration_finds_the_coefficients() -> None:
    model = calibrate([modelled_row(1), modelled_row(2), modelled_row(4)])
    names = {"tangent": "loops", "halo": "halo", "FFT": "FFT", "coarse solve": "coarse solve", "rest": "rest"}
    for source, phase in names.items():
        assert model.phases[phase].coefficient == pytest.approx(COEFFICIENTS[source], rel=1e-9)


def test_back_test_predicts_larger_points_from_smaller_ones() -> None:
    trials = back_test([modelled_row(1, 128), modelled_row(1), modelled_row(2), modelled_row(4, 512)])
    assert {t.row["digest"] for t in trials} == {"2-256", "4-512"}
    assert max(t.error for t in trials) < 1e-9


def test_back_test_needs_three_points() -> None:
    assert back_test([modelled_row(1), modelled_row(2)]) == []


def test_back_test_shows_a_phase_that_the_model_does_not_know() -> None:
    slow = modelled_row(4)
    slow["seconds"]["FFT"] = dict.fromkeys(slow["seconds"]["FFT"], 10.0 * slow["seconds"]["FFT"]["max"])
    trials = back_test([modelled_row(1, 128), modelled_row(1), slow])
    assert max(t.error for t in trials if t.phase == "FFT") > 0.5


def test_prediction_meets_measured_points_and_goes_on_beyond() -> None:
    rows = [modelled_row(n) for n in (1, 2, 4, 8)]
    model = calibrate(rows)
    found = predict(model, rows, machine_of(rows[-1]))
    for prediction, row in zip(found, rows, strict=False):
        assert prediction.whole == pytest.approx(sum(phase_seconds(row).values()), rel=1e-9)
        assert prediction.low < prediction.whole < prediction.high
    assert [p.ranks for p in found] == [1, 2, 4, 8, 16, 32, 64, 128]  # transforms: 129 columns, one each
    # Messages of the transforms grow with the ranks, everything else falls: they take over.
    assert found[-1].bottleneck == "FFT"
    assert turning_points(found)[-1][1] == "FFT"


def test_counts_of_oversubscribed_points_are_used_but_not_their_times() -> None:
    rows = [modelled_row(n) for n in (1, 2, 4)]
    crowded = modelled_row(8, oversubscribed=True)
    for statistics in crowded["seconds"].values():
        statistics.update(dict.fromkeys(statistics, 1e3))
    model = calibrate(rows)
    found = predict(model, [*rows, crowded], machine_of(rows[-1]))
    true = predict(model, [*rows, modelled_row(8)], machine_of(rows[-1]))
    assert [p.whole for p in found] == pytest.approx([p.whole for p in true])


def test_a_sites_numbers_replace_the_measured_ones() -> None:
    measured = machine_of(modelled_row(2))
    tables = {"scheduler": "local", "machine": {"latency_us": 1.5, "link_gb_s": 12.5}}
    found = site_machine(make_site(tables, "site").machine, measured)
    assert (found.latency, found.link, found.triad) == (1.5e-6, 12.5e9, measured.triad)
    assert found.source == "stated in the site file"
    assert "no network" in site_machine(None, measured).source
