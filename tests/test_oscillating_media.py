"""Complex Ginzburg-Landau states against closed forms: plane waves, their stability, real elliptic states.

Formulas of plane waves and of their stability: Aranson and Kramer, Rev. Mod. Phys. 74 (2002) 99-143 (from
memory; their discrete forms are derived here).
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq, linear_sum_assignment
from scipy.special import ellipj, ellipk

from lattice.geometry.lattice import Lattice
from tests.solving import TURN, Real, jacobian, limit, nodes, observed_order, solve

# Central second derivative and staggered difference and mean, one side of each: Fornberg, Math. Comp. 51
# (1988) 699 (weights by independent recomputation).
SECOND = {
    2: (2, -1),
    4: (5 / 2, -4 / 3, 1 / 12),
    6: (49 / 18, -3 / 2, 3 / 20, -1 / 90),
    8: (205 / 72, -8 / 5, 1 / 5, -8 / 315, 1 / 560),
}
DIFFERENCE = {2: (1,), 4: (9 / 8, -1 / 24), 6: (75 / 64, -25 / 384, 3 / 640)}
MEAN = {2: (1 / 2,), 4: (9 / 16, -1 / 16), 6: (75 / 128, -25 / 256, 3 / 256)}


@pytest.fixture(autouse=True)
def interpreted(monkeypatch: pytest.MonkeyPatch) -> None:
    """Evaluate by NumPy: on lattices this small, compiling the kernels would take nearly all the time."""
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


def squared_wavenumber(order: int, q: Real | float, h: float) -> Real:
    """Return K^2, the number by which the difference -d2 multiplies exp(i q x)."""
    cosines = [w * np.cos(np.asarray(q) * h * j) * (2 if j else 1) for j, w in enumerate(SECOND[order])]
    return np.sum(cosines, axis=0) / h**2


def turns_per_step(order: int, theta: float) -> float:
    """Return D/M for exp(-i theta n): the staggered difference (unit step) over the midpoint mean."""
    angles = [(j + 0.5) * theta for j in range(order // 2)]
    difference = sum(2 * w * np.sin(a) for w, a in zip(DIFFERENCE[order], angles, strict=True))
    return difference / sum(2 * w * np.cos(a) for w, a in zip(MEAN[order], angles, strict=True))


def plane(amplitude: float, phase: Real) -> Real:
    """Return A = amplitude*exp(i*phase) as its two real components."""
    return amplitude * np.stack([np.cos(phase), np.sin(phase)], axis=-1)


@pytest.mark.parametrize(
    ("dimensions", "order_t", "order_x"), [(1, 2, 2), (1, 4, 6), (1, 6, 8), (2, 2, 2), (2, 4, 4)]
)
def test_plane_wave_has_its_exact_discrete_form(dimensions, order_t, order_x):
    """The lattice's own plane wave is known in closed form; Newton must find it to round-off.

    For A = R exp(i(Q.x - w t)), |A|^2 = R^2 at every node and -lap A = K^2 A, so G(A) is a multiple of A.
    At the midpoint of a step tau the difference D gives -i d(w tau)/tau and the mean m(w tau) times
    A(midpoint); D A + M G(A) = 0 is then -i d/tau = m (1 - K^2 - R^2 - i (b K^2 + c R^2)), that is

        R^2 = 1 - K^2,   d(w tau)/(m(w tau) tau) = b K^2 + c R^2;   for order 2, 2 tan(w tau/2)/tau.

    With w = 2 pi/T and tau = T/nt the second gives T at once. For tau, h -> 0 these are the published
    R^2 = 1 - Q^2, w = b Q^2 + c R^2.
    """
    b, c, nt, shape = 0.7, -1.6, 10, (8, 9)[2 - dimensions :]
    lengths = (12.0, 4.0 * np.pi)[2 - dimensions :]
    squares = [squared_wavenumber(order_x, TURN / a, a / n) for a, n in zip(lengths, shape, strict=True)]
    square = float(np.sum(squares))
    amplitude, rate = np.sqrt(1.0 - square), b * square + c * (1.0 - square)
    period = nt * turns_per_step(order_t, TURN / nt) / abs(rate)
    places = np.meshgrid(*(np.arange(n) / n for n in shape), indexing="ij")
    turns = sum(places) - np.sign(rate) * np.arange(nt).reshape((nt,) + dimensions * (1,)) / nt
    exact = plane(amplitude, TURN * turns).reshape(nt, -1, shape[-1], 2)
    lattice = Lattice(nt, *exact.shape[1:3], dimensions, order_t, order_x, order_x)
    name = "ginzburg-landau" + ("" if dimensions == 1 else "-2d")
    start = 1.1 * exact + 0.02 * np.cos(3.0 * TURN * np.arange(shape[-1]) / shape[-1])[:, None]
    sizes = dict(zip(("length_y", "length_x")[2 - dimensions :], lengths, strict=True))
    guess = {**sizes, "period": 1.1 * period}
    found = solve(name, lattice, start, ("period",), residual_rms=1e-12, **guess, b=b, c=c)
    # What is left is the residual, 1e-12, and round-off.
    assert found.values["period"] == pytest.approx(period, rel=1e-11)
    assert np.abs(np.hypot(*np.moveaxis(found.field, -1, 0)) - amplitude).max() < 1e-12
    # The phase condition keeps the wave in step with its start up to the start's own asymmetry.
    turned = found.field @ np.array([1.0, 1.0j]) / (exact @ np.array([1.0, 1.0j]))
    assert np.abs(turned - turned[0, 0, 0]).max() < 1e-11


def test_wave_in_the_limit_has_the_published_period():
    # b = 0, c = 1, L = 4 pi, one wavelength: Q = 1/2, R^2 = w = 3/4, T = 8 pi/3.
    errors, counts = [], (12, 18)
    for n in counts:
        turns = np.arange(n) / n - np.arange(n)[:, None] / n
        start = plane(0.8, TURN * turns)[:, None]
        found = solve("ginzburg-landau", Lattice(n, 1, n), start, ("period",), length_x=2 * TURN, period=8.0)
        errors.append(found.values["period"] - 4.0 * TURN / 3.0)
    assert observed_order(counts, errors) == pytest.approx(4.0, abs=0.1)
    # The error beyond its leading term is of order h^6: at h = 2 pi/18, (h/2)^2 of the leading one.
    assert abs(errors[0] - errors[1] * 1.5**4) < 0.05 * abs(errors[0])


def turning_jacobian(nx: int, waves: int, length: float, b: float, c: float) -> Real:
    """Return the Jacobian about the lattice's plane wave, seen in the frame in which its phase rests."""
    h, q = length / nx, TURN * waves / length
    square = float(squared_wavenumber(8, q, h))
    field = plane(np.sqrt(1.0 - square), q * nodes(nx, length))
    matrix = jacobian("ginzburg-landau", Lattice(1, 1, nx, order_x=8), field, length_x=length, b=b, c=c)
    rate = b * square + c * (1.0 - square)
    # A = B exp(-i w t): B_t - i w B = F(B), so that w*v joins the first equation of G and -w*u the second.
    return matrix.toarray() + np.kron(np.eye(nx), rate * np.array([[0.0, 1.0], [-1.0, 0.0]]))


@pytest.mark.parametrize(("waves", "b", "c"), [(0, 1.2, -1.5), (2, 0.5, -0.5), (3, 2.0, -0.3)])
def test_growth_rates_about_a_plane_wave_are_those_of_its_sidebands(waves, b, c):
    # A = (R + p exp(iKx) + conj(q) exp(-iKx)) exp(i(Qx - wt)) makes a matrix of two rows for every K (derived;
    # with K^2 + 2QK the square of Q + K less that of Q, here of the differences).
    nx, length = 24, 20.0
    h, q = length / nx, TURN * waves / length
    base = float(squared_wavenumber(8, q, h))
    one = (1.0 - base) * (1.0 + 1.0j * c)
    expected = []
    for k in TURN / length * np.arange(nx):
        up, down = (squared_wavenumber(8, q + s * k, h) - base for s in (1, -1))
        sideband = [[-(1 + 1j * b) * up - one, -one], [-np.conj(one), -(1 - 1j * b) * down - np.conj(one)]]
        expected.extend(np.linalg.eigvals(np.array(sideband)))
    found = -np.linalg.eigvals(turning_jacobian(nx, waves, length, b, c))
    distance = np.abs(found[:, None] - np.array(expected))
    # The neutral rate is double and defective: round-off moves it by its root, 1e-16*|J| -> 1e-7.
    assert distance[linear_sum_assignment(distance)].max() < 1e-6


def threshold(waves: int, make_case, bracket: tuple[float, float]) -> float:
    """Return where the fastest growth beyond the neutral phase changes sign."""

    def growth(unknown: float) -> float:
        rates = -np.linalg.eigvals(turning_jacobian(16 * max(waves, 1), waves, *make_case(unknown)))
        # The two neutral rates (phase and shift, one and the same here) are taken out by size.
        return float(np.delete(rates.real, np.argsort(np.abs(rates))[:1]).max())

    return float(brentq(growth, *bracket, xtol=1e-7))


@pytest.mark.parametrize("b", [0.8, 2.0])
def test_uniform_oscillation_loses_stability_at_the_line_of_benjamin_and_feir(b):
    # Unstable to long waves where 1 + b c < 0. At a wavenumber K, from the matrix above: 1 + b c < -(1 + b^2)
    # K^2/2. Two boxes and K -> 0.
    counts, found = (6, 9), []
    for times in counts:
        length = TURN * times
        found.append(threshold(0, lambda c, length=length: (length, b, c), (-4.0 / b, -0.5 / b)))
        square = float(squared_wavenumber(8, TURN / length, length / 16))
        assert found[-1] == pytest.approx(-(1.0 + 0.5 * (1.0 + b * b) * square) / b, abs=1e-5)
    assert limit(counts, found, 2) == pytest.approx(-1.0 / b, abs=1e-4)


@pytest.mark.parametrize(("b", "c"), [(0.0, 0.0), (1.0, 0.5), (2.0, -0.3)])
def test_plane_waves_lose_stability_at_the_wavenumber_of_eckhaus(b, c):
    # Q^2 = (1 + b c)/(3 + b c + 2 c^2) for long sidebands: a box of n waves errs by a/n^2 + ...
    counts = (3, 4, 5)
    found = [threshold(n, lambda q, n=n: (TURN * n / q, b, c), (0.3, 0.75)) for n in counts]
    published = np.sqrt((1.0 + b * c) / (3.0 + b * c + 2.0 * c * c))
    assert limit(counts, found, 2) == pytest.approx(published, abs=1e-4)


@pytest.mark.parametrize(("m", "length"), [(0.5, 9.08307380880748), (0.9, 14.2146189511082)])
def test_real_steady_state_is_an_elliptic_function(m, length):
    # b = c = 0: A = sqrt(2m/(1+m)) sn(x/sqrt(1+m) | m), L = 4 K(m) sqrt(1+m) (from memory; lengths and residual
    # by independent recomputation).
    assert length == pytest.approx(4.0 * ellipk(m) * np.sqrt(1.0 + m), rel=1e-14)
    counts, errors = (40, 60), []
    for nx in counts:
        x = nodes(nx, length)
        exact = np.sqrt(2.0 * m / (1.0 + m)) * ellipj(x / np.sqrt(1.0 + m), m)[0]
        start = np.stack([0.9 * np.sin(TURN * x / length), 0.0 * x], axis=-1)
        lattice = Lattice(1, 1, nx, order_x=8)
        found = solve("ginzburg-landau", lattice, start, ("drift_x",), length_x=length, b=0.0, c=0.0)
        errors.append(np.abs(found.field[0, 0, :, 0] - exact).max())
        assert abs(found.values["drift_x"]) < 1e-12
    assert errors[-1] < 1e-6
    assert observed_order(counts, errors) == pytest.approx(8.0, abs=0.5)
