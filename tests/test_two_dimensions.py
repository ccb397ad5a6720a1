"""States in two space dimensions that are sums or extensions of states in one."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import fsolve

from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import read_law
from tests.solving import TURN, Real, Solved, limit, nodes, solve

FLAME = "kuramoto-sivashinsky-2d"


@pytest.fixture(autouse=True)
def interpreted(monkeypatch: pytest.MonkeyPatch) -> None:
    """Evaluate by NumPy: on lattices this small, compiling the kernels would take nearly all the time."""
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


def slope_squares(field: Real, lengths: tuple[float, float]) -> tuple[float, float]:
    """Return <f_x^2> and <f_y^2> of one level, shape (ny, nx), by Fourier series; lengths (Ly, Lx)."""
    power = np.abs(np.fft.fft2(field, norm="forward")) ** 2
    rows, columns = (TURN / a * np.fft.fftfreq(n, 1.0 / n) for a, n in zip(lengths, field.shape, strict=True))
    return float(np.sum(power * columns**2)), float(np.sum(power * rows[:, None] ** 2))


def part_of_both(field: Real) -> Real:
    """Return what is left of a level once a function of x and one of y are taken away."""
    rest = field - field.mean(axis=-1, keepdims=True) - field.mean(axis=-2, keepdims=True)
    return rest + field.mean(axis=(-1, -2), keepdims=True)


def steady_line_square(length: float) -> float:
    """Return <u^2> of the odd steady state of u u_x + u_xx + u_xxxx = 0: SciPy's root of 14 sine modes."""
    k, x = TURN / length * np.arange(1, 15), nodes(60, length)
    sines, cosines = np.sin(np.outer(x, k)), np.cos(np.outer(x, k))

    def rest(b: Real) -> Real:
        return (sines @ b) * (cosines @ (k * b)) @ sines / 30.0 + (k**4 - k**2) * b

    b = fsolve(rest, np.array([2.0, -0.5] + 12 * [0.0]), xtol=1e-14)
    assert np.abs(rest(b)).max() < 1e-13
    assert abs(b[-1]) < 1e-11
    return float(b @ b) / 2.0


# If f(t, x) and g(t, y) solve phi_t + phi_x^2/2 + phi_xx + phi_xxxx = 0, their sum solves the law in two
# dimensions (derived), and u = f_x the film law: what is known there is known here.


def flame(counts: tuple[int, int], lengths: tuple[float, float], start: Real, **given: float) -> Solved:
    lattice = Lattice(1, *counts, dimensions=2, order_x=8, order_y=8)
    free = ("drift_x", "drift_y")
    return solve(FLAME, lattice, start, free, length_y=lengths[0], length_x=lengths[1], **given)


def test_square_flame_is_the_sum_of_two_lines():
    exact, counts, found = steady_line_square(8.0), (20, 24, 28), []
    for n in counts:
        x = TURN * np.arange(n) / n
        start = 2.5 * np.cos(x) + 2.5 * np.cos(x[:, None]) + 0.1 * np.cos(x + x[:, None])
        state = flame((n, n), (8.0, 8.0), start)
        field = state.field[0, ..., 0]
        assert np.abs(part_of_both(field)).max() < 1e-10
        along, across = slope_squares(field, (8.0, 8.0))
        # The mean falls at the rate <|grad phi|^2>/2 (derived), which the source makes up for.
        assert state.values["source_phi"] == pytest.approx((along + across) / 2.0, rel=2e-5)
        assert along == pytest.approx(across, rel=1e-9)
        found.append(along)
    assert found[-1] == pytest.approx(exact, abs=1e-6)
    assert limit(counts, found, 8) == pytest.approx(exact, abs=2e-7)


def test_moving_flame_is_the_sum_of_a_travelling_and_a_resting_line():
    # L = pi sqrt(13.5): |c| = 0.2263360073, <u^2> = 0.9451636980 by independent recomputation of the film law.
    lengths, counts = (8.0, float(np.pi * np.sqrt(13.5))), (32, 40, 48)
    k, speeds, along = TURN / lengths[1], [], []
    for n in counts:
        x, y = TURN * np.arange(n) / n, TURN * np.arange(18)[:, None] / 18
        start = (1.2 * np.sin(x) + 0.45 * np.sin(2.0 * x + 0.6)) / k + 2.5 * np.cos(y)
        state = flame((18, n), lengths, start, drift_x=0.3)
        assert np.abs(part_of_both(state.field[0, ..., 0])).max() < 1e-10
        assert abs(state.values["drift_y"]) < 1e-10
        speeds.append(state.values["drift_x"])
        along.append(slope_squares(state.field[0, ..., 0], lengths)[0])
    assert limit(counts, speeds, 8) == pytest.approx(0.2263360073, abs=2e-9)
    assert limit(counts, along, 8) == pytest.approx(0.9451636980, abs=1e-8)


def test_flame_periodic_in_time_is_the_sum_of_its_lines_on_the_same_lattice():
    """Central differences and midpoints keep the sum exact, so that lattices in one dimension give the state."""
    line = read_law("own", ("phi_t + phi_x**2/2 + phi_xx + phi_xxxx = 0",), ("phi",), {}, 1)
    length, nt, ny, nx = float(np.pi * np.sqrt(15.0)), 14, 10, 18
    x, y = TURN * np.arange(nx) / nx, TURN * np.arange(ny) / ny
    t = TURN * np.arange(nt)[:, None] / nt
    # Moving to the right at about L/T; T = 31.378 by independent recomputation.
    rough = length / TURN * (1.2 * np.sin(x - t) + 0.45 * np.sin(2.0 * (x - t) + 0.6))
    f = solve(line, Lattice(nt, 1, nx), rough, ("period",), length_x=length, period=31.0)
    g = solve(line, Lattice(1, 1, ny), 2.5 * np.cos(y), ("drift_x",), length_x=8.0)
    assert f.values["period"] == pytest.approx(31.378, rel=0.1)
    total = f.field + g.field[:, 0, :, None, :]
    start = total + 0.02 * (np.cos(x - t)[:, None, :] * np.cos(y)[:, None])[..., None]
    lattice = Lattice(nt, ny, nx, dimensions=2)
    sides = {"length_x": length, "length_y": 8.0}
    found = solve(FLAME, lattice, start, ("period", "drift_y"), **sides, period=1.01 * f.values["period"])
    assert found.values["period"] == pytest.approx(f.values["period"], rel=1e-9)
    sources = f.values["source_phi"] + g.values["source_phi"]
    assert found.values["source_phi"] == pytest.approx(sources, rel=1e-9)
    assert np.abs(part_of_both(found.field[..., 0])).max() < 1e-8
    sizes = [np.abs(np.fft.fft2(state[..., 0].mean(axis=1))) for state in (found.field, total)]
    assert np.abs(sizes[0] - sizes[1]).max() < 1e-7 * sizes[1].max()


def test_film_that_is_the_same_across_the_plate_is_the_film_in_one_dimension():
    length, n, ny = float(np.pi * np.sqrt(15.0)), 18, 8
    x, t = TURN * np.arange(n) / n, TURN * np.arange(n)[:, None] / n
    rough = 1.2 * np.cos(x - t) + 0.9 * np.cos(2.0 * (x - t) + 0.6)
    thin = solve("kuramoto-sivashinsky", Lattice(n, 1, n), rough, ("period",), length_x=length, period=31.0)
    start = np.repeat(thin.field, ny, axis=1)
    ripple = 0.02 * np.cos(TURN * np.arange(ny) / ny)[:, None, None] * np.cos(x - t)[:, None, :, None]
    sides = {"length_x": length, "length_y": 10.0}
    lattice = Lattice(n, ny, n, dimensions=2)
    wide = solve(
        "film-2d", lattice, start + ripple, ("period",), **sides, period=1.01 * thin.values["period"]
    )
    assert wide.values["period"] == pytest.approx(thin.values["period"], rel=1e-9)
    assert np.ptp(wide.field, axis=1).max() < 1e-8
    # Where the two lie in x and t may differ, and a shift by part of a spacing changes short waves a little.
    sizes = [np.abs(np.fft.fft2(state[:, 0, :, 0])) for state in (wide.field, thin.field)]
    assert np.abs(sizes[0] - sizes[1]).max() < 1e-6 * sizes[1].max()
