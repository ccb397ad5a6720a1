"""Steady and travelling states of the falling-film law u_t + u u_x + u_xx + u_xxxx = 0 on a length L.

The branches: Kevrekidis, Nicolaenko and Scovel, SIAM J. Appl. Math. 50 (1990) 760-790, and Hyman and
Nicolaenko, Physica D 18 (1986) 113-126 (from memory), with alpha = (L/pi)^2. The numbers of single states
are an independent recomputation (Fourier-Galerkin and Newton), not published.
"""

from __future__ import annotations

import json
from pathlib import Path

import h5py
import numpy as np
import pytest
from scipy.optimize import brentq

from lattice.geometry.lattice import Lattice
from lattice.job.reader import load_job
from tests.mpi import run_module
from tests.solving import TURN, Real, Solved, jacobian, limit, mean_square, observed_order, solve

LAW = "kuramoto-sivashinsky"
COUNTS = (32, 40, 48)


def length_at(alpha: float) -> float:
    return float(np.pi * np.sqrt(alpha))


# Onset.


def first_mode_rate(length: float, nx: int, order: int) -> float:
    """Return the eigenvalue of the assembled Jacobian at u = 0 for the longest wave, in long doubles."""
    matrix = jacobian(LAW, Lattice(1, 1, nx, order_x=order), np.zeros(nx), length_x=length).toarray()
    wave = np.cos(2.0 * np.pi * np.arange(nx, dtype=np.longdouble) / nx)
    return float(wave @ (matrix.astype(np.longdouble) @ wave) / (wave @ wave))


# With second-order differences L_c = 2 N sin(pi/N), for d4 = (d2)^2 (derived); the others are the root of
# d2 + d4 = 0 for the fourth-order weights (independent recomputation). Exact onset: 2 pi.
ONSETS = [
    (2, 16, 6.242890304516),
    (2, 32, 6.273096981092),
    (2, 64, 6.280662313910),
    (4, 16, 6.281873455129),
    (4, 32, 6.283101588325),
    (4, 64, 6.283180047068),
]


@pytest.mark.parametrize(("order", "nx", "onset"), ONSETS)
def test_flat_film_loses_stability_at_the_lattices_own_onset(order, nx, onset):
    if order == 2:
        assert onset == pytest.approx(2.0 * nx * np.sin(np.pi / nx), abs=1e-12)
    found = brentq(lambda length: first_mode_rate(length, nx, order), 6.1, 6.5, xtol=1e-14, rtol=1e-14)
    # 1e-12, but not below what the rounding of matrix entries of size 6/h^4 moves the root by.
    assert found == pytest.approx(onset, abs=max(1e-12, 20.0 * 2.2e-16 * (nx / onset) ** 4))


def test_longest_wave_is_the_first_to_grow():
    matrix = jacobian(LAW, Lattice(1, 1, 32), np.zeros(32), length_x=6.4).toarray()
    rates = np.sort(-np.linalg.eigvals(matrix).real)
    k = TURN / 6.4
    # Two waves grow, at k^2 - k^4 up to the order of the lattice, (kh)^4; the mean is neutral, the rest decays.
    assert rates[-2:] == pytest.approx(2 * [k**2 - k**4], rel=0.01)
    assert abs(rates[-3]) < 1e-10
    assert rates[-4] < -10.0


# Steady states.

STEADY = [
    (5.0, 2.9101876416, (2.3862972662, -0.3540045821, 0.0252838901)),
    (10.0, 1.5204220687, (1.5895455520, -0.7081817841, 0.1114560643)),
]


def sine_amplitudes(state: Solved) -> list[float]:
    return list(-2.0 * np.fft.rfft(state.field[0, 0, :, 0], norm="forward").imag[1:4])


@pytest.mark.parametrize(("alpha", "square", "sines"), STEADY)
def test_steady_branch_has_its_amplitudes(alpha, square, sines):
    length, found = length_at(alpha), []
    for n in COUNTS:
        x = TURN * np.arange(n) / n
        start = 2.0 * np.sin(x) - 0.5 * np.sin(2.0 * x)
        lattice = Lattice(1, 1, n, order_x=8)
        found.append(solve(LAW, lattice, start, ("drift_x",), length_x=length))
        assert abs(found[-1].values["drift_x"]) < 1e-11
        assert abs(found[-1].field.mean()) < 1e-13
    squares = [mean_square(state.field, length) for state in found]
    assert observed_order(COUNTS, [s - square for s in squares]) == pytest.approx(8.0, abs=0.3)
    # The finest lattice errs by up to 5e-8; with the terms h^8 and h^10 gone a hundredth of that is left.
    assert limit(COUNTS, squares, 8) == pytest.approx(square, abs=1e-9)
    for *values, exact in zip(*map(sine_amplitudes, found), sines, strict=True):
        assert limit(COUNTS, values, 8) == pytest.approx(exact, abs=1e-9)


# Travelling waves.

TRAVELLING = [(13.5, 0.2263360073, 0.9451636980), (15.0, 0.3877627861, 1.3351206129)]


def travelling_wave(alpha: float, nx: int, mean: float = 0.0, guess: float = 0.3) -> Solved:
    """Solve for the wave that moves to the right, from two cosines with a phase between them."""
    x = TURN * np.arange(nx) / nx
    start = mean + 1.2 * np.cos(x) + 0.9 * np.cos(2.0 * x + 0.6)
    return solve(
        LAW, Lattice(1, 1, nx, order_x=8), start, ("drift_x",), means={"u": mean},
        length_x=length_at(alpha), drift_x=guess,
    )  # fmt: skip


@pytest.mark.parametrize(("alpha", "speed", "square"), TRAVELLING)
def test_travelling_wave_has_its_speed_and_mean_square(alpha, speed, square):
    found = [travelling_wave(alpha, n) for n in COUNTS]
    speeds = [abs(state.values["drift_x"]) for state in found]
    squares = [mean_square(state.field, length_at(alpha)) for state in found]
    assert observed_order(COUNTS, [s - speed for s in speeds]) == pytest.approx(8.0, abs=0.3)
    assert limit(COUNTS, speeds, 8) == pytest.approx(speed, abs=1e-9)
    assert limit(COUNTS, squares, 8) == pytest.approx(square, abs=2e-9)


@pytest.mark.parametrize(("alpha", "speed", "square"), TRAVELLING)
def test_travelling_wave_is_periodic_in_the_resting_frame(alpha, speed, square):
    # T = L/|c|: 50.99916981 and 31.37829741.
    length, counts, periods, squares = length_at(alpha), (24, 36), [], []
    for n in counts:
        wave = np.fft.rfft(travelling_wave(alpha, 48).field[0, 0, :, 0], norm="forward")[: n // 2]
        turns = np.arange(n)[:, None] * np.arange(n // 2) / n
        moved = np.fft.irfft(wave * np.exp(-1j * TURN * turns), n, norm="forward")
        lattice = Lattice(n, 1, n, order_t=6, order_x=6)
        found = solve(LAW, lattice, moved, ("period",), length_x=length, period=round(length / speed))
        periods.append(found.values["period"])
        squares.append(mean_square(found.field, length))
    assert limit(counts, periods, 6) == pytest.approx(length / speed, rel=1e-4)
    assert limit(counts, squares, 6) == pytest.approx(square, rel=1e-4)
    assert abs(limit(counts, periods, 6) - length / speed) < 0.1 * abs(periods[-1] - length / speed)


def test_onset_of_travelling_waves_is_where_the_steady_branch_turns_unstable():
    # alpha = 13.005 published (from memory), 13.00384422 recomputed: an eigenvalue of the steady state, besides
    # the neutral one of its shift, passes through zero.
    onsets = []
    for n in COUNTS:
        x = TURN * np.arange(n) / n

        def rate(alpha: float, n: int = n, x: Real = x) -> float:
            start = np.sin(x) - 0.7 * np.sin(2.0 * x)
            lattice, length = Lattice(1, 1, n, order_x=8), length_at(alpha)
            state = solve(LAW, lattice, start, ("drift_x",), length_x=length)
            matrix = jacobian(LAW, lattice, state.field, length_x=length).toarray()
            # The steady state is odd about its zero; what makes it drift is even about it.
            phase = np.angle(np.fft.rfft(state.field[0, 0, :, 0])[1]) + np.pi / 2
            even = np.cos(np.outer(x + phase, np.arange(1, n // 2)))
            rates = -np.linalg.eigvals(np.linalg.lstsq(even, matrix @ even, rcond=None)[0])
            # The shift is neutral; at the onset the mode that drifts becomes one with it, and only the sum of
            # the two rates is smooth there.
            return float(np.sort(rates.real)[-2:].sum())

        onsets.append(brentq(rate, 12.5, 13.5, xtol=1e-10))
    assert onsets[-1] == pytest.approx(13.005, abs=2e-3)
    assert limit(COUNTS, onsets, 8) == pytest.approx(13.00384422, abs=2e-8)


# Identities.


def test_energy_put_in_by_long_waves_is_taken_out_by_short_ones():
    # d/dt <u^2>/2 = <u_x^2> - <u_xx^2> (derived): the two are equal on every state, here to the lattice's order.
    for alpha, _, _ in TRAVELLING:
        length = length_at(alpha)
        balance = []
        for n in COUNTS:
            state = travelling_wave(alpha, n)
            gained, lost = (mean_square(state.field, length, derivative) for derivative in (1, 2))
            balance.append(gained / lost - 1.0)
        assert abs(balance[-1]) < 1e-6
        assert observed_order(COUNTS, balance) == pytest.approx(8.0, abs=0.5)


def test_mean_flow_shifts_the_drift_and_nothing_else():
    # u(x - V t) + V solves the law where u does (derived); central differences keep that exactly.
    resting, mean = travelling_wave(15.0, 32), -0.7
    moving = travelling_wave(15.0, 32, mean, guess=0.3 + mean)
    assert moving.values["drift_x"] - mean == pytest.approx(resting.values["drift_x"], abs=1e-10)
    assert moving.field.mean() == pytest.approx(mean, abs=1e-13)
    sizes = [np.abs(np.fft.rfft(s.field[0, 0, :, 0])[1:]) for s in (resting, moving)]
    assert np.abs(sizes[0] - sizes[1]).max() < 1e-8


def test_unimodal_wave_repeated_solves_the_longer_film():
    # A state at L is one at 2L with the same amplitude and speed (derived), on twice the nodes to round-off.
    state = travelling_wave(13.5, 24)
    twice = np.tile(state.field, (1, 1, 2, 1))
    case = {"length_x": 2.0 * length_at(13.5), "drift_x": state.values["drift_x"]}
    found = solve(LAW, Lattice(1, 1, 48, order_x=8), twice, ("drift_x",), **case)
    assert len(found.result.steps) == 1
    assert found.values["drift_x"] == state.values["drift_x"]


# Through the public path.

JOB = """
[law]
name = "kuramoto-sivashinsky"
[box]
length_x = 12.1673360279
drift_x = 0.3
[lattice]
nt = 1
nx = 48
order_x = 8
[start]
kind = "waves"
modes = [{ amplitude = 1.2, kx = 1 }, { amplitude = 0.9, kx = 2, phase = 0.6 }]
[solve]
free = ["drift_x"]
[output]
picture = false
"""


def test_job_on_two_ranks_leaves_a_travelling_wave_in_its_folder(tmp_path: Path):
    _, speed, square = TRAVELLING[1]
    job, folder = tmp_path / "wave.toml", tmp_path / "run"
    job.write_text(JOB, encoding="utf-8")
    run_module(2, "lattice", "solve", job, "--out", folder, timeout=120.0)
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    assert summary["outcome"] == "converged"
    assert summary["ranks"] == 2
    assert summary["residual_rms"] <= 1e-10
    # Eighth order with 48 nodes errs by 4e-8 in the speed and 7e-8 in the mean square.
    assert summary["scalars"]["drift_x"] == pytest.approx(speed, abs=1e-7)
    assert summary["mean_square"] == pytest.approx(square, abs=2e-7)
    lines = (folder / "steps.jsonl").read_text(encoding="utf-8").splitlines()
    steps = [json.loads(line) for line in lines]
    assert [step["step"] for step in steps] == list(range(summary["newton_steps"] + 1))
    assert steps[-1]["residual_rms"] == summary["residual_rms"]
    with h5py.File(folder / "state.h5") as file:
        field = np.squeeze(file["u"][...])
    assert field.shape == (48,)
    assert np.mean(field**2) == pytest.approx(square, abs=2e-7)
    assert np.abs(np.fft.rfft(field)) == pytest.approx(
        np.abs(np.fft.rfft(travelling_wave(15.0, 48).field[0, 0, :, 0])), abs=1e-7
    )
    kept = load_job(folder / "job.toml")
    assert kept.make_values() == load_job(job).make_values()
    assert kept.make_lattice() == Lattice(1, 1, 48, order_x=8, order_y=8)
