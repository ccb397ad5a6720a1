"""Time stepping against SciPy's integrators, exact solutions and published or recomputed values."""

from __future__ import annotations

from itertools import pairwise

import mpmath
import numpy as np
import pytest
import sympy
from scipy.integrate import solve_ivp
from scipy.optimize import fsolve
from scipy.signal import convolve2d
from scipy.special import ellipj, ellipk

from lattice.errors import InputError, LatticeError
from lattice.laws.catalogue import law_names, load_law, read_law
from lattice.laws.law import Deriv, Equation, Law
from lattice.starts.noise import random_field
from lattice.starts.phi import matrix_phi, scalar_phi
from lattice.starts.splitting import split
from lattice.starts.stability import stable_step
from lattice.starts.stepper import Stepper, settle, steps_within, suggest_dt

TURN = 2.0 * np.pi


def line(law: Law, nx: int, length: float, dt: float, **values: float) -> Stepper:
    """Return a stepper in one space dimension."""
    return Stepper(law, (1, nx), (1.0, length), values, dt)


def nodes(nx: int, length: float) -> np.ndarray:
    return np.arange(nx) * (length / nx)


def field_of(*components: np.ndarray) -> np.ndarray:
    """Stack 1D components into a slice (1, nx, C)."""
    return np.stack(components, axis=-1)[None]


def later(stepper: Stepper, field: np.ndarray, time: float) -> np.ndarray:
    return stepper.to_field(stepper.advance(stepper.to_spectrum(field), time))


def mean_squares(stepper: Stepper, spectrum: np.ndarray, a: int = 0, b: int = 0) -> np.ndarray:
    derived = spectrum * stepper.modes.derivative(a, b)
    return stepper.modes.mean_product(derived, derived)


# The coefficients of the scheme.

Z = [0.0, 1e-8, -1e-3, -0.5, 0.99, -1.01, 2.0, -3.0, -50.0, -1e4, -1e6, 0.5j, 3j, 100j, -3 + 5j]


def exact_phi(z: complex) -> list[complex]:
    """Return phi_0 .. phi_3 by mpmath with 60 digits, from the definition."""
    with mpmath.workdps(60):
        z = mpmath.mpmathify(z)
        values = [mpmath.exp(z)]
        for j in range(1, 4):
            before = 1 / mpmath.factorial(j - 1)
            values.append((values[-1] - before) / z if z else 1 / mpmath.factorial(j))
        return [complex(value) for value in values]


@pytest.mark.parametrize("z", Z)
def test_phi_of_a_number_has_all_digits(z):
    for ours, exact in zip(scalar_phi(np.array([z], dtype=complex)), exact_phi(z), strict=True):
        assert abs(ours[0] - exact) <= 4e-15 * abs(exact)


@pytest.mark.parametrize("z", Z)
def test_phi_of_a_matrix_agrees_with_its_eigenvalues(z):
    basis = np.array([[2.0, 1.0], [1.0, 1.0]])
    inverse = np.array([[1.0, -1.0], [-1.0, 2.0]])
    matrix = basis @ np.diag([z, -1.0 + z]) @ inverse
    pairs = zip(matrix_phi(matrix[None]), exact_phi(z), exact_phi(z - 1.0), strict=True)
    for ours, first, second in pairs:
        exact = basis @ np.diag([first, second]) @ inverse
        # Entries of the matrix itself are rounded, which moves eigenvalues by eps*|z|.
        assert np.abs(ours[0] - exact).max() <= 1e-14 * (1.0 + abs(z)) * max(1e-2, abs(first), abs(second))


# Against SciPy's integrators on Fourier-Galerkin systems written here independently.


def two_sided(spectrum: np.ndarray) -> np.ndarray:
    """Return coefficients of the modes -m..m of a real field from those of 0..m."""
    return np.concatenate([spectrum[:0:-1].conj(), spectrum])


def integrate(rate, start: np.ndarray, time: float, method: str = "DOP853") -> np.ndarray:
    """Integrate complex coefficients with SciPy to a relative tolerance of 1e-11."""
    shape = start.shape
    solution = solve_ivp(
        lambda t, c: rate(c.reshape(shape)).ravel(),
        (0.0, time),
        start.ravel().astype(complex),
        method=method,
        rtol=1e-11,
        atol=1e-13,
    )
    assert solution.success
    return solution.y[:, -1].reshape(shape)


def kept(product: np.ndarray, m: int) -> np.ndarray:
    """Return the modes -m..m of a longer two-sided product."""
    middle = len(product) // 2
    return product[middle - m : middle + m + 1]


def test_kuramoto_sivashinsky_follows_a_scipy_integrator():
    law, nx, length, dispersion = load_law("kuramoto-sivashinsky"), 33, 22.0, 0.3
    stepper = line(law, nx, length, 0.005, dispersion=dispersion)
    start = stepper.to_spectrum(random_field(law, (1, nx), (1.0, length), 3, 1.0))[0, 0]
    m = nx // 2
    k = TURN / length * np.arange(-m, m + 1)

    def rate(c):
        linear = -((1j * k) ** 2 + dispersion * (1j * k) ** 3 + (1j * k) ** 4) * c
        return linear - 0.5j * k * kept(np.convolve(c, c), m)

    expected = integrate(rate, two_sided(start), 4.0)
    marched = stepper.advance(start[None, None], 4.0)[0, 0]
    assert np.abs(two_sided(marched) - expected).max() < 2e-9
    assert np.abs(expected).max() > 0.1


def test_ginzburg_landau_follows_a_scipy_integrator():
    law, nx, length, b, c3 = load_law("ginzburg-landau"), 25, 20.0, 1.5, -1.2
    stepper = line(law, nx, length, 0.0025, b=b, c=c3)
    start = stepper.to_spectrum(random_field(law, (1, nx), (1.0, length), 5, 0.7))[:, 0]
    m = nx // 2
    k = TURN / length * np.arange(-m, m + 1)

    def rate(a):
        cube = kept(np.convolve(np.convolve(a, a), a[::-1].conj()), m)
        return (1.0 - (1.0 + 1j * b) * k**2) * a - (1.0 + 1j * c3) * cube

    expected = integrate(rate, two_sided(start[0]) + 1j * two_sided(start[1]), 3.0)
    marched = stepper.advance(start[:, None], 3.0)[:, 0]
    assert np.abs(two_sided(marched[0]) + 1j * two_sided(marched[1]) - expected).max() < 1e-9


def test_forced_shear_flow_with_its_constraint_follows_a_scipy_integrator():
    law, n, re, forced = load_law("kolmogorov"), 9, 15.0, 2.0
    stepper = Stepper(law, (n, n), (TURN, TURN), {"Re": re, "n": forced}, 0.01)
    field = random_field(law, (n, n), (TURN, TURN), 2, 1.5)
    m = n // 2
    ky, kx = (grid.astype(float) for grid in np.mgrid[-m : m + 1, -m : m + 1])
    square = kx**2 + ky**2
    forcing = np.where((kx == 0) & (np.abs(ky) == forced), -0.5 * forced, 0.0)

    def spectrum(u):
        return np.fft.fftshift(np.fft.fft2(u, norm="forward"))

    def product(a, b):
        full = convolve2d(a, b)
        return full[m:-m, m:-m]

    def rate(om):
        # lap psi = -om, velocity (psi_y, -psi_x).
        psi = np.divide(om, square, out=np.zeros_like(om), where=square > 0)
        advection = product(1j * ky * psi, 1j * kx * om) - product(1j * kx * psi, 1j * ky * om)
        return -advection - square / re * om + forcing

    expected = integrate(rate, spectrum(field[..., 0]), 3.0)
    marched = later(stepper, field, 3.0)
    assert np.abs(spectrum(marched[..., 0]) - expected).max() < 1e-9
    psi = np.divide(expected, square, out=np.zeros_like(expected), where=square > 0)
    assert np.abs(spectrum(marched[..., 1]) - psi).max() < 1e-9


OWN_TEXT = "u_t + (u**2*u_x)_x*u + sin(u) + cos(x)*u_x + 0.5*u_xxxx - 0.2 = 0"


def test_own_law_with_functions_and_coordinates_follows_a_scipy_integrator():
    law, nx = read_law("own", (OWN_TEXT,), ("u",), {}, 1), 32
    x = nodes(nx, TURN)
    start = 0.4 * np.cos(x) + 0.2 * np.sin(2.0 * x)
    k = np.fft.fftfreq(nx, 1.0 / nx)

    def d(u, order):
        return np.fft.ifft((1j * k) ** order * np.fft.fft(u)).real

    def rate(t, u):
        return -(d(u**2 * d(u, 1), 1) * u + np.sin(u) + np.cos(x) * d(u, 1) + 0.5 * d(u, 4) - 0.2)

    solution = solve_ivp(rate, (0.0, 0.5), start, method="BDF", rtol=1e-10, atol=1e-12)
    marched = later(line(law, nx, TURN, 0.002), field_of(start), 0.5)
    # Both spectra have fallen to about 1e-9 at the last mode; BDF controls the local error only.
    assert np.abs(marched[0, :, 0] - solution.y[:, -1]).max() < 2e-8


# Order.


@pytest.mark.parametrize(
    ("name", "length", "values", "dt", "time"),
    [
        ("kuramoto-sivashinsky", 22.0, {"dispersion": 0.2}, 0.02, 2.0),
        ("korteweg-de-vries", TURN, {}, 0.01, 1.0),
        ("ginzburg-landau", 12.0, {"b": 1.0, "c": -0.7}, 0.05, 2.0),
        ("swift-hohenberg-35", 4 * TURN, {"r": -0.3}, 0.02, 2.0),
        ("gray-scott", 0.3, {"k": 0.05}, 1.0, 50.0),
        ("burgers", TURN, {}, 0.02, 1.0),
    ],
)
def test_error_falls_with_the_fourth_power_of_the_step(name, length, values, dt, time):
    law, nx = load_law(name), 16
    start = random_field(law, (1, nx), (1.0, length), 4, 0.4, values) + 0.2
    fields = [later(line(law, nx, length, dt / 2**n, **values), start, time) for n in range(4)]
    errors = [np.abs(a - b).max() for a, b in pairwise(fields)]
    # Differences of successive halvings fall by 2**4 = 16 where the scheme shows its order.
    assert np.log2(errors[1] / errors[2]) == pytest.approx(4.0, abs=0.2)


# Exact solutions.


CNOIDAL = [(0.5, 5.29735622086106, 0.6), (0.9, 7.36597746670907, 2.168)]


@pytest.mark.parametrize(("m", "length", "speed"), CNOIDAL)
def test_cnoidal_wave_translates_at_its_speed(m, length, speed):
    # u = u0 + 2 kappa^2 m cn^2(kappa (x - ct) | m), c = 4 kappa^2 (2m - 1) + 6 u0 (from memory; residual and
    # lengths by independent recomputation) at kappa = 0.7, u0 = 0.1.
    kappa, base, nx, time = 0.7, 0.1, 32, 3.0
    assert length == pytest.approx(2.0 * ellipk(m) / kappa, rel=1e-13)
    assert speed == pytest.approx(4.0 * kappa**2 * (2.0 * m - 1.0) + 6.0 * base, rel=1e-13)
    x = nodes(nx, length)

    def wave(xi):
        return field_of(base + 2.0 * kappa**2 * m * ellipj(kappa * xi, m)[1] ** 2)

    marched = later(line(load_law("korteweg-de-vries"), nx, length, 0.0025), wave(x), time)
    assert np.abs(marched - wave(x - speed * time)).max() < 5e-9


@pytest.mark.parametrize(("b", "c"), [(0.0, 1.0), (0.7, -0.4)])
def test_plane_wave_turns_at_its_frequency(b, c):
    # Aranson and Kramer, Rev. Mod. Phys. 74 (2002) 99 (formulas from memory): R^2 = 1 - Q^2,
    # omega = b Q^2 + c (1 - Q^2).
    length, nx, wavenumber = 4.0 * np.pi, 16, 0.5
    omega = b * wavenumber**2 + c * (1.0 - wavenumber**2)
    x, time = nodes(nx, length), 5.0

    def wave(t):
        phase = wavenumber * x - omega * t
        return np.sqrt(0.75) * field_of(np.cos(phase), np.sin(phase))

    marched = later(line(load_law("ginzburg-landau"), nx, length, 0.01, b=b, c=c), wave(0.0), time)
    assert np.abs(marched - wave(time)).max() < 2e-9


def test_elliptic_wave_keeps_its_shape_for_a_period():
    # Kudryashov, Phys. Lett. A 147 (1990) 287 (from memory; coefficients re-derived), invariant g3 = 0:
    # period 2.33378606, speed and mean square by independent recomputation.
    e, nx, speed, period = np.sqrt(1.0 / 48.0), 40, -2.95727347356950, 2.33378606
    w = np.sqrt(2.0 * e)
    length = 2.0 * ellipk(0.5) / w
    assert length == pytest.approx(6.90164361533925598, rel=1e-14)
    sn, cn, dn, _ = ellipj(w * nodes(nx, length), 0.5)
    start = speed - 1.0 - 60.0 * (-e + e * sn**2) - 120.0 * e * w * sn * cn * dn
    assert np.mean(start**2) == pytest.approx(17.2545336025222, rel=1e-12)
    assert abs(np.mean(start)) < 1e-12
    stepper = line(load_law("kuramoto-sivashinsky"), nx, length, period / 2000, dispersion=4.0)
    marched = later(stepper, field_of(start), length / abs(speed))
    assert np.abs(marched - field_of(start)).max() < 1e-8


def test_decaying_burgers_solution_of_hopf_and_cole():
    # Hopf 1950, Cole 1951 (from memory): u = -2 nu phi_x/phi, phi = 1 + a exp(-nu k^2 t) cos kx;
    # u(1, 2) by independent recomputation.
    nu, a, nx = 0.1, 0.5, 40
    x = nodes(nx, TURN)

    def exact(x, t):
        decay = a * np.exp(-nu * t)
        return 2.0 * nu * decay * np.sin(x) / (1.0 + decay * np.cos(x))

    assert exact(1.0, 2.0) == pytest.approx(0.056415727151999, abs=1e-15)
    marched = later(line(load_law("burgers"), nx, TURN, 0.02, nu=nu, force=0.0), field_of(exact(x, 0.0)), 2.0)
    assert np.abs(marched[0, :, 0] - exact(x, 2.0)).max() < 1e-9


def test_single_shell_vortices_decay_without_forcing():
    # Taylor and Green 1937 (from memory): any flow with lap om = -k^2 om decays as exp(-k^2 t/Re).
    law, n, re, time = load_law("kolmogorov"), 16, 7.0, 1.3
    y, x = np.meshgrid(nodes(n, TURN), nodes(n, TURN), indexing="ij")
    stepper = Stepper(law, (n, n), (TURN, TURN), {"Re": re, "n": 0.0}, 0.05)
    for om, square in (
        (2.0 * np.cos(x) * np.cos(y), 2.0),
        (np.cos(3 * x + 4 * y) - 0.5 * np.sin(5 * x) + 0.3 * np.cos(4 * x - 3 * y), 25.0),
    ):
        start = np.stack([om, om / square], axis=-1)
        assert np.abs(later(stepper, start, time) - start * np.exp(-square * time / re)).max() < 1e-13


# States that a march must reach.


def test_steady_film_state_is_reached_from_noise():
    # L = pi*sqrt(5): <u^2> by independent recomputation; <u_x^2> = <u_xx^2> follows from the energy balance.
    law, nx, length = load_law("kuramoto-sivashinsky"), 32, 7.0248147310
    stepper = line(law, nx, length, 0.05)
    noise = stepper.to_spectrum(random_field(law, (1, nx), (1.0, length), 0, 0.1))
    spectrum = stepper.advance(noise, 120.0)
    assert float(mean_squares(stepper, spectrum)[0]) == pytest.approx(2.9101876416, abs=2e-10)
    assert mean_squares(stepper, spectrum, 1) == pytest.approx(mean_squares(stepper, spectrum, 2), rel=1e-9)


def test_film_turbulence_has_the_known_mean_square():
    # <u^2> = 1.400(8) at L = 22 by independent recomputation (another long march): a band of 5 percent.
    law, nx, length, copies = load_law("kuramoto-sivashinsky"), 32, 22.0, 48
    stepper = line(law, nx, length, 0.125)
    noise = np.stack([random_field(law, (1, nx), (1.0, length), seed, 1.0) for seed in range(copies)])
    spectrum = stepper.advance(stepper.to_spectrum(noise), 150.0)
    squares = []
    for _ in range(60):
        spectrum = stepper.advance(spectrum, 4.0)
        squares.append(mean_squares(stepper, spectrum).mean())
    assert float(np.mean(squares)) == pytest.approx(1.400, rel=0.05)


def test_shear_flow_settles_on_its_first_steady_state():
    # Kolmogorov flow [0, 2 pi]^2, n = 4, Re = 11: D/D_lam = 0.765660 by independent recomputation.
    law, n, re = load_law("kolmogorov"), 20, 11.0
    stepper = Stepper(law, (n, n), (TURN, TURN), {"Re": re, "n": 4.0}, 0.2)
    noise = random_field(law, (n, n), (TURN, TURN), 1, 1.0)
    spectrum = stepper.advance(stepper.to_spectrum(noise), 230.0)
    dissipation = float(mean_squares(stepper, spectrum)[0]) / re
    assert dissipation / (re / 32.0) == pytest.approx(0.765660, abs=1e-6)


def steady_film_mean_square(length: float) -> float:
    """Return <u^2> of the odd steady state of the film law by collocation-free Galerkin projection."""
    k = TURN / length * np.arange(1, 13)
    x = nodes(96, length)
    sines, cosines = np.sin(np.outer(x, k)), np.cos(np.outer(x, k))

    def residual(b):
        return (sines @ b) * (cosines @ (k * b)) @ sines / 48.0 + (k**4 - k**2) * b

    b = fsolve(residual, np.array([2.0, -0.5] + 10 * [0.0]), xtol=1e-14)
    assert np.abs(residual(b)).max() < 1e-13
    return float(b @ b) / 2.0


def test_two_dimensional_film_settles_on_a_sum_of_two_lines():
    # If f(x) and g(y) solve the integral form in one dimension, f + g solves it in two. The steady u = f_x
    # at L = 8 comes from SciPy's root finder on twelve sine modes.
    law, n = load_law("kuramoto-sivashinsky-2d"), 20
    expected = steady_film_mean_square(8.0)
    stepper = Stepper(law, (n, n), (8.0, 8.0), {}, 0.1)
    spectrum = stepper.to_spectrum(random_field(law, (n, n), (8.0, 8.0), 0, 0.3))
    spectrum = stepper.advance(spectrum, 90.0)
    for a, b in ((1, 0), (0, 1)):
        assert float(mean_squares(stepper, spectrum, a, b)[0]) == pytest.approx(expected, abs=1e-9)


def test_swift_hohenberg_settles_on_its_exact_branch():
    # k = 1, r = 0.1: <u^2> by independent recomputation; its leading amplitude 2 sqrt(r/3) is in Cross and
    # Hohenberg, Rev. Mod. Phys. 65 (1993) 851 (from memory).
    law, nx = load_law("swift-hohenberg"), 32
    start = field_of(0.3 * np.cos(nodes(nx, TURN)))
    marched = later(line(law, nx, TURN, 0.1, r=0.1), start, 150.0)
    assert np.mean(marched**2) == pytest.approx(0.066701352691, abs=1e-11)


def test_uniform_gray_scott_state_is_at_rest():
    # u = (1 - sqrt(1 - 4 (F + k)^2/F))/2, v = F (1 - u)/(F + k), one-line algebra, at F = 0.04, k = 0.05.
    stepper = line(load_law("gray-scott"), 8, 1.0, 1.0, F=0.04, k=0.05)
    start = np.tile([0.2820550528, 0.3190866432], (1, 8, 1))
    assert np.abs(stepper.operator.rate(stepper.to_spectrum(start))).max() < 1e-10


# What the stepper promises about itself.


@pytest.mark.parametrize("name", law_names())
def test_every_named_law_can_be_marched(name):
    law = load_law(name)
    shape, lengths = (1 if law.dimensions == 1 else 12, 16), (7.0, 9.0)
    field = random_field(law, shape, lengths, 0, 0.1)
    stepper = Stepper(law, shape, lengths, {}, 0.01)
    spectrum = stepper.advance(stepper.to_spectrum(field), 0.1)
    assert np.all(np.isfinite(stepper.to_field(spectrum)))
    assert np.abs(stepper.to_field(spectrum) - field).max() > 1e-12


def test_splitting_adds_up_to_the_law():
    # The sum of all parts on random numbers for the derivatives, against SymPy's own expression.
    law = load_law("kolmogorov")
    parts = split(law)
    generator = np.random.default_rng(0)
    point, parameters = {"x": 0.3, "y": 0.7}, [40.0, 4.0]
    orders = {(k, a, b): generator.standard_normal() for k in range(2) for a in range(3) for b in range(3)}
    inputs = [orders[i.component, i.a, i.b] for i in parts.inputs]
    names = dict(zip(("Re", "n"), parameters, strict=True))
    totals = [0.0, 0.0]
    for term in parts.linear:
        value = term.coefficient.subs({s: names[s.name] for s in term.coefficient.free_symbols})
        key = (term.derivative.component, term.derivative.a, term.derivative.b)
        totals[term.equation] += float(value) * orders[key]
    for terms, values in (
        (parts.products, parts.evaluate_products(inputs, point["x"], point["y"], parameters)),
        (parts.forcing, parts.evaluate_forcing([], point["x"], point["y"], parameters)),
    ):
        for term, value in zip(terms, values, strict=True):
            assert (term.a, term.b) == (0, 0)
            totals[term.equation] += float(value)
    for total, equation in zip(totals, law.equations, strict=True):
        flat = equation.expression.replace(
            lambda e: isinstance(e, Deriv),
            lambda e: sympy.Float(
                orders[law.components.index(e.args[0].name), int(e.args[1]), int(e.args[2])]
            ),
        )
        known = {**names, **point, **{c: orders[k, 0, 0] for k, c in enumerate(law.components)}}
        assert total == pytest.approx(
            float(flat.subs({s: known[s.name] for s in flat.free_symbols})), rel=1e-12
        )


def test_conservative_and_expanded_products_give_the_same_march():
    texts = ("u_t + u_xx + u_xxxx + (u**3)_xx/6 = 0", "u_t + u_xx + u_xxxx + u*u_x*u_x + u**2*u_xx/2 = 0")
    x = nodes(16, 10.0)
    fields = []
    for text in texts:
        law = read_law("own", (text,), ("u",), {}, 1)
        fields.append(later(line(law, 16, 10.0, 0.01), field_of(0.5 * np.cos(TURN * x / 10.0)), 0.5))
    assert np.abs(fields[0] - fields[1]).max() < 1e-13


@pytest.mark.parametrize("degree", [2, 3, 5])
def test_products_are_free_of_aliasing(degree):
    law = read_law("own", (f"u_t + u**{degree} = 0",), ("u",), {}, 1)
    stepper = line(law, 10, TURN, 0.1)
    u = np.random.default_rng(degree).standard_normal(9)
    spectrum = np.fft.rfft(u, norm="forward")[None, None]
    power = two_sided(spectrum[0, 0])
    exact = power
    for _ in range(degree - 1):
        exact = np.convolve(exact, power)
    ours = stepper.operator.nonlinear(spectrum)[0, 0]
    assert np.abs(two_sided(ours) + kept(exact, 4)).max() < 1e-13


def test_slices_on_leading_axes_march_independently():
    law = load_law("ginzburg-landau-2d")
    stepper = Stepper(law, (8, 10), (9.0, 9.0), {"b": 0.5}, 0.05)
    fields = np.stack([random_field(law, (8, 10), (9.0, 9.0), seed, 0.5) for seed in range(3)])
    together = later(stepper, fields, 1.0)
    for field, marched in zip(fields, together, strict=True):
        assert np.abs(later(stepper, field, 1.0) - marched).max() < 1e-14


def test_march_yields_the_requested_times():
    law = load_law("kuramoto-sivashinsky")
    stepper = line(law, 24, 14.0, 0.03)
    start = stepper.to_spectrum(random_field(law, (1, 24), (1.0, 14.0), 0, 0.5))
    fields = list(stepper.march(start, [0.0, 0.1, 0.2, 0.7]))
    assert len(fields) == 4
    assert np.abs(fields[0] - stepper.to_field(start)).max() < 1e-15
    assert np.abs(fields[3] - stepper.to_field(stepper.advance(start, 0.7))).max() < 1e-6
    with pytest.raises(InputError, match=r"times of a march must rise, got 0\.1 after 0\.2"):
        list(stepper.march(start, [0.2, 0.1]))


def test_equal_spacings_share_one_set_of_weights():
    law = load_law("kuramoto-sivashinsky")
    stepper = line(law, 16, 14.0, 0.1)
    start = stepper.to_spectrum(random_field(law, (1, 16), (1.0, 14.0), 0, 0.5))
    for _ in stepper.march(start, 0.1 * np.arange(20)):
        pass
    assert len(stepper._weights) == 1


def test_real_fields_stay_real_in_long_two_dimensional_marches():
    # What transforms ignore, the part of kx = 0 that is of no real field, would grow at the linear rate: by
    # more than exp(20) here, from the 1e-12 that stands for round-off.
    law = load_law("kuramoto-sivashinsky-2d")
    stepper = Stepper(law, (12, 12), (12.0, 12.0), {}, 0.2)
    spectrum = stepper.to_spectrum(random_field(law, (12, 12), (12.0, 12.0), 0, 0.5))
    spectrum[0, 1, 0] += 1e-12j
    spectrum = stepper.advance(spectrum, 100.0)
    again = stepper.to_spectrum(stepper.to_field(spectrum))
    assert np.abs(again - spectrum)[0, 1:].max() < 1e-13


def test_uniform_source_moves_the_mean_only():
    law = load_law("kuramoto-sivashinsky")
    x = nodes(16, 5.0)
    marched = later(line(law, 16, 5.0, 0.1, source_u=0.25), field_of(0.0 * x), 2.0)
    assert np.abs(marched - 0.5).max() < 1e-13


def test_values_override_the_parameters_of_the_law():
    law = read_law("own", ("u_t = nu*u_xx",), ("u",), {"nu": 1.0}, 1)
    wave = field_of(np.cos(nodes(8, TURN)))
    for values, nu in (({}, 1.0), ({"nu": 0.3}, 0.3)):
        assert np.abs(later(line(law, 8, TURN, 0.5, **values), wave, 1.0) - np.exp(-nu) * wave).max() < 1e-15


# Choosing the step.


@pytest.mark.parametrize("name", ["kuramoto-sivashinsky", "korteweg-de-vries", "ginzburg-landau", "burgers"])
def test_suggested_step_keeps_its_tolerance_and_is_no_smaller_than_needed(name):
    law, nx, length = load_law(name), 32, 15.0
    stepper = line(law, nx, length, 1.0)
    spectrum = stepper.to_spectrum(random_field(law, (1, nx), (1.0, length), 1, 1.0))
    dt = suggest_dt(stepper, spectrum, 1e-7)
    assert stepper.step_error(spectrum, dt) <= 1e-7
    assert stepper.step_error(spectrum, 2.0 * dt) > 1e-7


def test_halving_error_is_the_error_of_the_march():
    law = load_law("kuramoto-sivashinsky")
    stepper = line(law, 24, 14.0, 0.05)
    spectrum = stepper.to_spectrum(random_field(law, (1, 24), (1.0, 14.0), 0, 1.0))
    exact = stepper.with_step(0.05 / 16).advance(spectrum, 2.0)
    error = np.linalg.norm(stepper.advance(spectrum, 2.0) - exact) / np.linalg.norm(exact)
    assert stepper.halving_error(spectrum, 2.0) == pytest.approx(error, rel=0.1)


def test_settling_follows_the_flow_from_noise_to_turbulence():
    law = load_law("kuramoto-sivashinsky")
    stepper = line(law, 32, 22.0, 1.0)
    noise = stepper.to_spectrum(random_field(law, (1, 32), (1.0, 22.0), 0, 1e-4))
    at_rest = suggest_dt(stepper, noise, 1e-6)
    spectrum, dt = settle(stepper, noise, 60.0, 1e-6)
    assert stepper.step_error(spectrum, dt) < 4e-6
    assert dt < at_rest
    assert settle(stepper, noise, 0.0)[0] is noise


@pytest.mark.parametrize(
    ("time", "dt", "steps"), [(1.0, 0.1, 10), (0.3, 0.1, 3), (1.0, 0.3, 4), (0.0, 0.1, 0)]
)
def test_steps_fit_the_time(time, dt, steps):
    assert steps_within(time, dt) == steps


# Noise.


def test_noise_is_the_same_field_on_any_nodes():
    law = load_law("film-2d")
    coarse = random_field(law, (16, 18), (20.0, 24.0), 7, 0.3)
    fine = random_field(law, (32, 36), (20.0, 24.0), 7, 0.3)
    assert np.abs(fine[::2, ::2] - coarse).max() < 1e-14
    assert np.abs(random_field(law, (16, 18), (20.0, 24.0), 8, 0.3) - coarse).max() > 0.1


@pytest.mark.parametrize("name", law_names())
def test_noise_has_the_given_size_and_no_forbidden_mean(name):
    law = load_law(name)
    shape = (1 if law.dimensions == 1 else 24, 32)
    field = random_field(law, shape, (TURN, 30.0), 3, 0.25)
    for n, component in enumerate(law.components):
        if law.evolving[n]:
            assert np.sqrt(np.mean(field[..., n] ** 2)) == pytest.approx(0.25, rel=1e-12)
        if component in {*law.symmetries.conserved, *law.symmetries.shiftable, *law.symmetries.gauge}:
            assert abs(np.mean(field[..., n])) < 1e-15


def test_noise_is_strong_in_the_unstable_band_and_weak_beside_it():
    law, nx, length = load_law("kuramoto-sivashinsky"), 128, 120.0
    spectrum = np.fft.rfft(random_field(law, (1, nx), (1.0, length), 0, 1.0)[0, :, 0], norm="forward")
    k, sizes = TURN / length * np.arange(len(spectrum)), np.abs(spectrum)
    # Growth k^2 - k^4 is positive for 0 < k < 1.
    band, beside = (k > 0.0) & (k < 1.0), (k > 1.0) & (k < 1.9)
    assert np.sqrt(np.mean(sizes[beside] ** 2) / np.mean(sizes[band] ** 2)) == pytest.approx(0.1, abs=0.05)
    assert np.all(sizes[beside] > 0.0)
    assert sizes[k > 2.0].max() < 1e-15


def test_noise_on_one_unstable_wave_has_no_symmetry():
    # L = 11.54: the first wave alone grows. A single wave is odd about one of its zeros.
    law, nx, length = load_law("kuramoto-sivashinsky"), 32, 11.54
    spectrum = np.fft.rfft(random_field(law, (1, nx), (1.0, length), 0, 1.0)[0, :, 0], norm="forward")
    odd = spectrum[2] * np.exp(-2j * (np.angle(spectrum[1]) + 0.5 * np.pi))
    assert abs(odd.real) > 1e-3


# Refusals.


def constrained_law(expression: sympy.Expr, text: str) -> Law:
    """Return a law u_t = u_xx + psi with a constraint for psi that the parser need not accept."""
    base = read_law("own", ("u_t = u_xx + psi", "psi - u = 0"), ("u", "psi"), {}, 1)
    equations = (base.equations[0], Equation("psi", False, expression))
    return Law("own", 1, base.components, equations, (), (base.text[0], text), base.symmetries)


def test_constraint_that_is_not_linear_is_refused():
    u, psi = sympy.Symbol("u", real=True), sympy.Symbol("psi", real=True)
    law = constrained_law(psi - u**2, "psi - u**2 = 0")
    with pytest.raises(
        InputError, match=r"linear with constant coefficients, got 'psi - u\*\*2 = 0' for psi"
    ):
        line(law, 8, 1.0, 0.1)


def test_constraint_that_leaves_a_wave_open_is_refused():
    u, psi = sympy.Symbol("u", real=True), sympy.Symbol("psi", real=True)
    law = constrained_law(psi + Deriv(psi, 2, 0) - u, "psi + psi_xx - u = 0")
    with pytest.raises(InputError, match="must determine psi at every wavenumber, and does not at kx = 1"):
        line(law, 8, TURN, 0.1)


def test_short_waves_that_grow_are_refused():
    law = read_law("own", ("u_t + u*u_x + nu*u_xx = 0",), ("u",), {"nu": 1.0}, 1)
    with pytest.raises(
        InputError, match=r"needs short waves that decay.*raise the nodes, or check the signs"
    ):
        line(law, 16, 5.0, 0.1)
    assert line(law, 16, 5.0, 0.1, nu=-1.0).fastest_growth == 0.0
    with pytest.raises(InputError, match="on 8 x 1 nodes the shortest wave grows"):
        line(load_law("kuramoto-sivashinsky"), 8, 40.0, 0.1)


def test_step_is_cut_to_what_advection_bears():
    # About a uniform flow V the explicit part is V u_x, whose largest rate is V times the largest wavenumber, 15:
    # below sqrt(8), the reach of the classical scheme on the imaginary axis. A viscosity that damps the waves
    # faster than they are carried takes the limit away.
    speed, waves = 40.0, 15.0
    flow = np.full((1, 32, 1), speed)
    steps = []
    for nu in (1e-4, 100.0):
        stepper = Stepper(
            load_law("burgers"), (1, 32), (1.0, TURN), {"nu": nu, "force": 0.0, "wavenumber": 1.0}, 1.0
        )
        steps.append(stable_step(stepper, stepper.to_spectrum(flow), 1.0))
    assert 0.7 < steps[0] * speed * waves < np.sqrt(8.0)
    assert steps[1] == 1.0


def test_later_calls_of_a_march_count_from_its_beginning():
    stepper = Stepper(read_law("own", ("u_t = u**2",), ("u",), {}, 1), (1, 8), (1.0, 1.0), {}, 0.01)
    with pytest.raises(LatticeError, match=r"at time 21\.\d+ with dt"):
        stepper.advance(stepper.to_spectrum(np.ones((1, 8, 1))), 3.0, 20.0)


def test_blow_up_is_reported_with_its_time():
    law = read_law("own", ("u_t = u**2 + 0.01*u_xx",), ("u",), {}, 1)
    stepper = line(law, 8, TURN, 0.01)
    # du/dt = u^2 from 1 is infinite at time 1.
    with pytest.raises(LatticeError, match=r"grew beyond .* at time 1\.\d+ with dt = 0.01; take a smaller"):
        stepper.advance(stepper.to_spectrum(np.ones((1, 8, 1))), 3.0)


@pytest.mark.parametrize(
    ("shape", "lengths", "values", "dt", "match"),
    [
        ((1, 16), (1.0, 10.0), {}, 0.0, "time step must be positive and finite, got 0"),
        ((1, 16), (1.0, 10.0), {}, float("nan"), "time step must be positive"),
        ((1, 3), (1.0, 10.0), {}, 0.1, "needs nx >= 4 and ny = 1, got nx = 3, ny = 1"),
        ((8, 16), (1.0, 10.0), {}, 0.1, "needs nx >= 4 and ny = 1, got nx = 16, ny = 8"),
        ((1, 16), (1.0, -2.0), {}, 0.1, "lengths must be positive and finite, got -2"),
        ((1, 16), (1.0, 10.0), {"dispersion": np.inf}, 0.1, "parameter dispersion must be finite, got inf"),
    ],
)
def test_unusable_arguments_are_refused(shape, lengths, values, dt, match):
    with pytest.raises(InputError, match=match):
        Stepper(load_law("kuramoto-sivashinsky"), shape, lengths, values, dt)


def test_noise_without_amplitude_is_refused():
    with pytest.raises(InputError, match="noise amplitude must be positive and finite, got 0"):
        random_field(load_law("burgers"), (1, 16), (1.0, TURN), 0, 0.0)
