"""What a certificate says of published states, and what it refuses and why."""

from __future__ import annotations

import json
from dataclasses import replace

import h5py
import numpy as np
import pytest

from lattice.check.thresholds import read_thresholds
from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.store.certificates import read_certificate
from tests.checking import FILM, check, criterion, failed, odd_film, store, travelling_wave
from tests.solving import TURN, Solved, mean_square, nodes, solve

# Travelling waves of the film law, by alpha = (L/pi)^2: L, |c|, <u^2>. Independent recomputation (32 complex
# modes, residual below 1e-14), not published.
WAVES = [
    pytest.param(11.5429484715, 0.2263360073, 0.9451636980, id="alpha=13.5"),
    pytest.param(12.1673360279, 0.3877627861, 1.3351206129, id="alpha=15", marks=pytest.mark.long),
]
# Time-periodic odd states: that they exist at nu = 0.127 and 0.125 is proved by P. Zgliczynski, Found. Comput.
# Math. 4 (2004) 157-185 and Topol. Methods Nonlinear Anal. 36 (2010) 197-262 (the values of nu from memory);
# nu = 0.130 besides. L, T, <u^2>, <u_x^2>: independent recomputation, not published.
ODD = [
    pytest.param(
        17.426420614060, 15.3240978080, 2.3609154737, 1.6071490683, id="nu=0.130", marks=pytest.mark.long
    ),
    pytest.param(17.631043132046, 17.6719178249, 2.0493857238, 1.4328914645, id="nu=0.127"),
    pytest.param(
        17.771531752633, 19.8144559229, 1.8289773868, 1.3010053394, id="nu=0.125", marks=pytest.mark.long
    ),
]


def inside(certificate, name: str, exact: float) -> None:
    """Assert that an exact value lies in the band of the state and in that of the extrapolated value."""
    band = certificate.findings.bands[name]
    assert abs(band.value - exact) <= band.half, f"{name}: {band}, exact {exact}"
    assert abs(band.best - exact) <= band.best_half, f"{name}: {band}, exact {exact}"


@pytest.mark.parametrize(("length", "speed", "square"), WAVES)
def test_travelling_waves_lie_inside_their_bands(tmp_path, length, speed, square):
    lattice, wave = travelling_wave(32, length, speed)
    found = check(store(tmp_path / "wave.h5", FILM, lattice, wave, ("drift_x",)))
    assert found.verdict == "certified", found.reasons
    inside(found, "drift_x", np.sign(wave.values["drift_x"]) * speed)
    inside(found, "mean_square", square)
    assert all(b.order == pytest.approx(4.0, abs=0.5) for b in found.findings.bands.values() if b.order)
    # <u_x^2> = <u_xx^2> (derived from the law): what is gained is lost.
    inside(found, "production", found.findings.bands["dissipation"].best)


@pytest.mark.parametrize(("length", "period", "square", "slope"), ODD)
def test_proved_periodic_states_lie_inside_their_bands(tmp_path, length, period, square, slope):
    lattice, state = odd_film(length, 36, 28)
    found = check(store(tmp_path / "odd.h5", FILM, lattice, state, ("period", "drift_x")))
    assert found.verdict == "certified", found.reasons
    for name, exact in (("period", period), ("mean_square", square), ("production", slope)):
        inside(found, name, exact)
    inside(found, "interface_excess", 0.5 * slope)
    # The correction to first order, without any solve, comes near, too: within a fifth of the true error.
    quick = check(tmp_path / "odd.h5", refinements=0).findings.bands["period"]
    assert quick.best == pytest.approx(period, abs=0.2 * abs(quick.value - period))
    # Marched, slices miss each other by no more than the error of both ends, the first one grown.
    march = found.findings.march
    assert march.largest <= (1.0 + march.largest_growth) * found.findings.correction
    # Independent recomputation, to 1e-15: half a period later the state is half a length further on.
    assert "u(t + T/2, x + Lx/2) = u(t, x)" in found.findings.periodicity.symmetries


@pytest.fixture(scope="module")
def odd(tmp_path_factory):
    """Solve the state at nu = 0.127 once; return its file, lattice and state."""
    lattice, state = odd_film(17.631043132046, 36, 28, order=4)
    path = store(tmp_path_factory.mktemp("odd") / "state.h5", FILM, lattice, state, ("period", "drift_x"))
    return path, lattice, state


def test_a_certificate_is_kept_and_holds_until_the_state_changes(odd, tmp_path):
    _, lattice, state = odd
    path = store(tmp_path / "state.h5", FILM, lattice, state, ("period", "drift_x"))
    assert read_certificate(path) is None
    made = check(path, refinements=0)
    stored = read_certificate(path)
    assert stored is not None
    assert stored.valid
    assert stored.record == json.loads(json.dumps(made.record))
    assert check(path, refinements=0, store=False).record["inputs"] == stored.record["inputs"]
    with h5py.File(path, "r+") as file:
        file["u"][3, 5] += 1e-12
    changed = read_certificate(path)
    assert not changed.valid
    assert changed.changed == ("field",)


def test_changed_scalars_end_a_certificate(odd, tmp_path):
    _, lattice, state = odd
    path = store(tmp_path / "state.h5", FILM, lattice, state, ("period", "drift_x"))
    record = check(path, refinements=0).record
    moved = replace(state, values={**state.values, "period": state.values["period"] + 1e-9})
    store(path, FILM, lattice, moved, ("period", "drift_x"))
    assert read_certificate(path) is None  # a file written anew carries none
    from lattice.store.certificates import attach_certificate

    attach_certificate(path, record)
    assert read_certificate(path).changed == ("scalars",)


def test_a_residual_of_1e_4_is_refused_for_it(odd, tmp_path):
    _, lattice, state = odd
    x = nodes(lattice.nx, TURN)
    field = state.field + 1e-4 * np.cos(3 * x)[None, None, :, None]
    found = check(store(tmp_path / "rough.h5", FILM, lattice, replace(state, field=field), ("period",)))
    assert found.verdict == "not certified"
    assert "residual" in failed(found)
    assert 1e-6 < criterion(found, "residual").value < 1e-2


def test_a_blend_of_two_states_is_refused_for_its_residual(odd, tmp_path):
    _, lattice, state = odd
    other = np.roll(state.field, lattice.nt // 4, axis=0)
    weight = 0.5 - 0.5 * np.cos(nodes(lattice.nt, TURN))[:, None, None, None]
    blend = weight * state.field + (1.0 - weight) * other
    found = check(store(tmp_path / "blend.h5", FILM, lattice, replace(state, field=blend), ("period",)))
    assert found.verdict == "not certified"
    assert {"residual", "march"} <= failed(found)


def test_a_state_of_other_parameters_is_refused_for_its_residual(odd, tmp_path):
    _, lattice, state = odd
    other = replace(state, values={**state.values, "dispersion": 0.3})
    found = check(store(tmp_path / "other.h5", FILM, lattice, other, ("period", "drift_x")))
    assert {"residual", "march"} <= failed(found)


def test_a_state_of_another_law_than_it_names_is_refused_for_that(odd, tmp_path):
    _, lattice, state = odd
    text = ("u_t + u*u_x + u_xx + dispersion*u_xxx + u_xxxx + 0.1*u = 0",)
    path = store(tmp_path / "foreign.h5", FILM, lattice, state, ("period", "drift_x"), text=text)
    assert "law" in failed(check(path))


def test_an_under_resolved_state_is_refused_for_its_resolution(tmp_path):
    lattice, state = odd_film(17.631043132046, 24, 20, order=2)
    found = check(store(tmp_path / "coarse.h5", FILM, lattice, state, ("period", "drift_x")))
    assert found.verdict == "not certified"
    assert "residual" not in failed(found)
    assert "representation" in failed(found)
    assert "march" in failed(found)


def test_a_repeated_state_is_refused_for_its_repeats(odd, tmp_path):
    _, lattice, state = odd
    twice = replace(state, field=np.tile(state.field, (2, 1, 1, 1)))
    twice = replace(twice, values={**state.values, "period": 2.0 * state.values["period"]})
    path = store(tmp_path / "twice.h5", FILM, replace(lattice, nt=2 * lattice.nt), twice, ("period",))
    found = check(path)
    assert failed(found) == {"periodicity"}
    assert "2 times in time" in criterion(found, "periodicity").why


def test_a_steady_state_dressed_as_periodic_is_refused(tmp_path):
    length, nx = 7.0248147310, 32
    x = nodes(nx, TURN)
    start = 2.4 * np.sin(x) - 0.35 * np.sin(2 * x)
    steady = solve(FILM, Lattice(1, 1, nx), start[None, None, :], ("drift_x",), length_x=length)
    assert mean_square(steady.field, length) == pytest.approx(2.910, abs=2e-3)
    dressed = Solved(np.repeat(steady.field, 8, axis=0), {**steady.values, "period": 5.0}, steady.result)
    found = check(store(tmp_path / "dressed.h5", FILM, Lattice(8, 1, nx), dressed, ("drift_x",)))
    assert "periodicity" in failed(found)
    assert "nt = 1" in criterion(found, "periodicity").why


def test_thresholds_are_read_and_judged(tmp_path):
    file = tmp_path / "strict.toml"
    file.write_text("march = 0.001\nmarch_wide = 0.002\n")
    assert read_thresholds(file, ["tail=1e-6"]).march_wide == 0.002
    for bad in (["marsh=1"], ["march=-1"], ["march=x"], ["march"], ["march=0.5"]):
        with pytest.raises(InputError):
            read_thresholds(None, bad)


def test_a_stricter_threshold_refuses_what_passed(odd):
    path, _, _ = odd
    strict = check(
        path,
        refinements=0,
        store=False,
        thresholds=read_thresholds(None, ["balance=1e-9", "balance_wide=2e-9"]),
    )
    assert failed(strict) == {"balances"}


def test_a_state_of_the_coarse_lattice_only_is_refused_for_refinement(tmp_path):
    # u = 0 sheds steady states at L = 2 pi; on N nodes with differences of order 2 at 2 N sin(pi/N) (derived;
    # Hyman, Nicolaenko, Physica D 18 (1986) 113, for the equation's own bifurcations, from memory): 6.24289 for
    # N = 16, 6.27310 for N = 32. At L = 6.27 there is a smooth state on 16 nodes, and none on 32 or beyond.
    length = 6.27
    assert 32 * np.sin(np.pi / 16) < length < 64 * np.sin(np.pi / 32) < TURN
    start = 0.65 * np.sin(nodes(16, TURN))
    lattice = Lattice(1, 1, 16, order_x=2)
    state = solve(FILM, lattice, start[None, None, :], ("drift_x",), length_x=length)
    assert mean_square(state.field, length) > 1e-3
    found = check(store(tmp_path / "coarse-only.h5", FILM, lattice, state, ("drift_x",)), everything=True)
    assert found.verdict == "not certified"
    assert criterion(found, "truncation").result == criterion(found, "resolution").result == "passed"
    # Its equations hold nearly, and its nodes resolve it; but the march decays, and the refined lattices lack it.
    assert {"march", "refinement"} <= failed(found) <= {"correction", "march", "refinement", "bands"}


@pytest.mark.long
def test_the_benchmark_of_the_bands_measures_a_state(tmp_path):
    from scaling.band_cases import patterns
    from scaling.bands import measure, shares

    row = measure(next(iter(patterns())), tmp_path)
    assert row["refused"] == []
    assert len(row["observables"]["mean_square"]["values"]) == 5
    found = shares([row])
    assert found["one refinement: twice refined"]["count"] >= 6
    assert found["first order: finest"]["observables"] == 1.0
    assert 1.0 < found["two refinements: finest"]["sharpness"] < 10.0


@pytest.mark.long
def test_a_preconditioner_that_refuses_a_lattice_does_not_refuse_the_state(odd, monkeypatch):
    from lattice.solve import registry

    path, _, _ = odd
    monkeypatch.setattr(registry, "DIRECT_UNKNOWNS", {1: 100, 2: 100})
    found = check(path, store=False, refinements=1)
    assert failed(found) == set()
    assert found.findings.sensitivity is not None
    assert found.findings.refinement.survived


@pytest.mark.long
def test_a_sum_of_two_steady_states_lies_inside_its_bands_in_two_dimensions(tmp_path):
    # phi = f(x) + g(y) solves the two-dimensional integral form where f and g solve the one-dimensional one
    # (derived). On 8 x 8: <phi_x^2> = <phi_y^2> = 3.0325327935 (independent recomputation).
    length, nodes_each = 8.0, 24
    x = nodes(nodes_each, TURN)
    line = -(length / TURN) * (2.4 * np.cos(x) - 0.2 * np.cos(2 * x))
    lattice = Lattice(1, nodes_each, nodes_each, dimensions=2)
    law, free = "kuramoto-sivashinsky-2d", ("drift_x", "drift_y")
    start = (line[None, :] + line[:, None])[None, :, :, None]
    state = solve(law, lattice, start, free, length_x=length, length_y=length)
    found = check(
        store(tmp_path / "sum.h5", law, lattice, state, free), observables=("px=phi_x**2", "py=phi_y**2")
    )
    assert found.verdict == "certified", found.reasons
    inside(found, "px", 3.0325327935)
    inside(found, "py", 3.0325327935)
