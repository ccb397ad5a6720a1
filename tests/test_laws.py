"""The shipped laws say what the literature says: formulas, symmetries, exact solutions, pages."""

from __future__ import annotations

import pickle
from dataclasses import replace
from itertools import product

import numpy as np
import pytest
import scipy.special
import sympy

from lattice.errors import InputError
from lattice.laws.catalogue import law_names, law_summaries, load_law, read_law
from lattice.laws.describe import WIDTH, describe_law, list_laws, paragraphs
from lattice.laws.forcing import find_aperiodic_axes
from lattice.laws.law import Deriv, Parameter, Reflection, symbol
from lattice.laws.symmetry import symmetries_at
from lattice.laws.writing import write_equation
from lattice.starts.stepper import Stepper
from tests.periodic_fields import Box, right_hand_sides

NAMES = [
    "burgers",
    "film-2d",
    "ginzburg-landau",
    "ginzburg-landau-2d",
    "gray-scott",
    "gray-scott-2d",
    "kolmogorov",
    "korteweg-de-vries",
    "kuramoto-sivashinsky",
    "kuramoto-sivashinsky-2d",
    "swift-hohenberg",
    "swift-hohenberg-2d",
    "swift-hohenberg-23",
    "swift-hohenberg-23-2d",
    "swift-hohenberg-35",
    "swift-hohenberg-35-2d",
]

u, v, phi, om, psi, y = (symbol(name) for name in ("u", "v", "phi", "om", "psi", "y"))


def d(field, a, b=0):
    return Deriv(field, a, b)


def lap(field, dimensions):
    return d(field, 2) + (d(field, 0, 2) if dimensions == 2 else 0)


def lap2(field, dimensions):
    return d(field, 4) + (2 * d(field, 2, 2) + d(field, 0, 4) if dimensions == 2 else 0)


def by_hand(name: str) -> list[sympy.Expr]:
    """Return G of every equation, from the publications the law files name and not from their text."""
    dim = 2 if name.endswith("-2d") else 1
    p = {q: symbol(q) for q in ("b", "c", "r", "quadratic", "cubic", "Re", "n", "nu", "force", "wavenumber")}
    p |= {q: symbol(q) for q in ("Du", "Dv", "F", "k", "dispersion")}
    square = u**2 + v**2
    swift_hohenberg = u + 2 * lap(u, dim) + lap2(u, dim) - p["r"] * u
    stem = name.removesuffix("-2d")
    if name == "kuramoto-sivashinsky-2d":
        return [(d(phi, 1) ** 2 + d(phi, 0, 1) ** 2) / 2 + lap(phi, 2) + lap2(phi, 2)]
    return {
        "burgers": [
            d(u**2, 1) / 2 - p["nu"] * d(u, 2) - p["force"] * sympy.sin(p["wavenumber"] * symbol("x"))
        ],
        "film": [d(u**2, 1) / 2 + d(u, 2) + lap2(u, 2)],
        "ginzburg-landau": [
            -u - lap(u, dim) + p["b"] * lap(v, dim) + square * u - p["c"] * square * v,
            -v - lap(v, dim) - p["b"] * lap(u, dim) + square * v + p["c"] * square * u,
        ],
        "gray-scott": [
            -p["Du"] * lap(u, dim) + u * v**2 - p["F"] * (1 - u),
            -p["Dv"] * lap(v, dim) - u * v**2 + (p["F"] + p["k"]) * v,
        ],
        "kolmogorov": [
            d(psi, 0, 1) * d(om, 1)
            - d(psi, 1) * d(om, 0, 1)
            - lap(om, 2) / p["Re"]
            + p["n"] * sympy.cos(p["n"] * y),
            om + lap(psi, 2),
        ],
        "korteweg-de-vries": [3 * d(u**2, 1) + d(u, 3)],
        "kuramoto-sivashinsky": [d(u**2, 1) / 2 + d(u, 2) + p["dispersion"] * d(u, 3) + d(u, 4)],
        "swift-hohenberg": [swift_hohenberg + u**3],
        "swift-hohenberg-23": [swift_hohenberg - p["quadratic"] * u**2 + u**3],
        "swift-hohenberg-35": [swift_hohenberg - p["cubic"] * u**3 + u**5],
    }[stem]


def test_the_laws_are_those_that_are_promised():
    assert law_names() == sorted(NAMES)


@pytest.mark.parametrize("name", NAMES)
def test_formula_is_the_published_one(name):
    law = load_law(name)
    for equation, expected in zip(law.equations, by_hand(name), strict=True):
        assert sympy.expand(equation.expression - expected) == 0


@pytest.mark.parametrize("name", NAMES)
def test_law_file_is_complete(name):
    law = load_law(name)
    assert law.name == name
    assert law.dimensions == (2 if name.endswith("-2d") or name == "kolmogorov" else 1)
    assert all((law.title, law.source, law.scaling, law.notes))
    assert all(p.unit and p.meaning for p in law.parameters)
    assert law.evolving == ((True, False) if name == "kolmogorov" else (True,) * len(law.components))


@pytest.mark.parametrize("name", NAMES)
def test_a_stored_text_gives_the_same_law_again(name):
    law = load_law(name)
    parameters = {p.name: p for p in law.parameters}
    again = read_law(name, law.text, law.components, parameters, law.dimensions)
    assert again.equations == law.equations
    written = [write_equation(e) for e in law.equations]
    rewritten = read_law(name, written, law.components, parameters, law.dimensions)
    for old, new in zip(law.equations, rewritten.equations, strict=True):
        assert (old.component, old.evolving) == (new.component, new.evolving)
        assert sympy.expand(old.expression - new.expression) == 0


# -- symmetries ----------------------------------------------------------------------------------------


def x_flip(*signs):
    return Reflection(True, False, signs)


def y_flip(*signs):
    return Reflection(False, True, signs)


def turn(*signs):
    return Reflection(True, True, signs)


def sign_only(*signs):
    return Reflection(False, False, signs)


# Common knowledge of these equations; the numerical test below checks each one and that none is missing.
REFLECTIONS = {
    "burgers": {x_flip(-1)},
    "film-2d": {x_flip(-1), y_flip(1), turn(-1)},
    "ginzburg-landau": {x_flip(1, 1), x_flip(-1, -1), sign_only(-1, -1)},
    "gray-scott": {x_flip(1, 1)},
    "gray-scott-2d": {x_flip(1, 1), y_flip(1, 1), turn(1, 1)},
    "kolmogorov": {turn(1, 1)},
    "korteweg-de-vries": {Reflection(True, False, (1,), time=True)},
    "kuramoto-sivashinsky": set(),
    "kuramoto-sivashinsky-2d": {x_flip(1), y_flip(1), turn(1)},
    "swift-hohenberg": {x_flip(1), x_flip(-1), sign_only(-1)},
    "swift-hohenberg-23": {x_flip(1)},
    "swift-hohenberg-23-2d": {x_flip(1), y_flip(1), turn(1)},
    "swift-hohenberg-35": {x_flip(1), x_flip(-1), sign_only(-1)},
}

BOX = {1: Box(32, 2 * np.pi), 2: Box(32, 4 * np.pi, 32, 2 * np.pi)}


def general_values(law):
    """Parameters without accidental zeros or ones; wavenumbers that fit the box."""
    rng = np.random.default_rng(3)
    values = {p.name: float(rng.uniform(0.3, 0.9)) for p in law.parameters}
    return values | {name: 2.0 for name in ("n", "wavenumber") if name in values}


def random_fields(law, seed=1):
    rng = np.random.default_rng(seed)
    return {name: BOX[law.dimensions].smooth_field(rng, mean=0.3) for name in law.components}


def reflected(field, reflection):
    if reflection.x:
        field = np.roll(field[:, ::-1], 1, axis=1)
    return np.roll(field[::-1, :], 1, axis=0) if reflection.y else field


def holds_numerically(law, reflection):
    box, values, fields = BOX[law.dimensions], general_values(law), random_fields(law)
    signs = dict(zip(law.components, reflection.signs, strict=True))
    images = {name: signs[name] * reflected(field, reflection) for name, field in fields.items()}
    before = right_hand_sides(law, box, values | fields)
    after = right_hand_sides(law, box, values | images)
    for equation, one, two in zip(law.equations, before, after, strict=True):
        expected = reflected(one, reflection)
        factors = [1, -1]
        if equation.evolving:
            factors = [signs[equation.component] * (-1 if reflection.time else 1)]
        if min(np.abs(two - factor * expected).max() for factor in factors) > 1e-8 * np.abs(one).max():
            return False
    return True


@pytest.mark.parametrize("name", NAMES)
def test_exactly_the_reflections_that_hold_on_random_fields_are_found(name):
    law = load_law(name)
    found = set(law.symmetries.reflections)
    if name in REFLECTIONS:
        assert found == REFLECTIONS[name]
    flips = product((False, True), (False, True) if law.dimensions == 2 else (False,))
    for (in_x, in_y), time in product(flips, (False, True)):
        for signs in product((1, -1), repeat=len(law.components)):
            reflection = Reflection(in_x, in_y, signs, time)
            identity = reflection == Reflection(False, False, (1,) * len(signs))
            assert holds_numerically(law, reflection) == (identity or reflection in found), reflection


@pytest.mark.parametrize("name", NAMES)
def test_exactly_the_conserved_means_are_found(name):
    law = load_law(name)
    sides = right_hand_sides(law, BOX[law.dimensions], general_values(law) | random_fields(law))
    for equation, side in zip(law.equations, sides, strict=True):
        vanishes = abs(side.mean()) < 1e-10 * np.abs(side).max()
        assert (equation.evolving and vanishes) == (equation.component in law.symmetries.conserved)


@pytest.mark.parametrize("name", NAMES)
def test_exactly_the_components_that_may_be_shifted_are_found(name):
    law = load_law(name)
    box, values, fields = BOX[law.dimensions], general_values(law), random_fields(law)
    before = right_hand_sides(law, box, values | fields)
    for component, evolving in zip(law.components, law.evolving, strict=True):
        after = right_hand_sides(law, box, values | fields | {component: fields[component] + 0.7})
        unchanged = all(
            np.abs(two - one).max() < 1e-9 * np.abs(one).max() for one, two in zip(before, after, strict=True)
        )
        listed = law.symmetries.shiftable if evolving else law.symmetries.gauge
        assert unchanged == (component in listed)


# u -> u + V, x -> x - V t for Kuramoto-Sivashinsky and the film; x -> x - 6 V t for Korteweg-de Vries.
@pytest.mark.parametrize("name", NAMES)
def test_galilean_invariance_is_found_where_it_holds(name):
    law = load_law(name)
    rates = {"kuramoto-sivashinsky": 1.0, "film-2d": 1.0, "korteweg-de-vries": 6.0}
    assert law.symmetries.galilean == (name in rates)
    if name in rates:
        box, values, fields = BOX[law.dimensions], general_values(law), random_fields(law)
        (before,) = right_hand_sides(law, box, values | fields)
        (after,) = right_hand_sides(law, box, values | {"u": fields["u"] + 0.4})
        gain = 0.4 * rates[name] * box.derivative(fields["u"], 1, 0)
        assert np.abs(after - before - gain).max() < 1e-9 * np.abs(before).max()


@pytest.mark.parametrize("name", NAMES)
def test_homogeneous_axes_are_those_without_forcing(name):
    forced = {"burgers": {"x": False}, "kolmogorov": {"x": True, "y": False}}
    free = {"x": True} if load_law(name).dimensions == 1 else {"x": True, "y": True}
    assert load_law(name).symmetries.homogeneous == forced.get(name, free)


def test_reflection_of_the_film_law_appears_where_dispersion_vanishes():
    law = load_law("kuramoto-sivashinsky")
    assert symmetries_at(law, {"dispersion": 0.0}).reflections == (x_flip(-1),)
    assert symmetries_at(law, {"dispersion": 0.1}).reflections == ()


def test_vanishing_divisors_leave_the_general_symmetries():
    law = load_law("kolmogorov")
    assert symmetries_at(law, {"Re": 0.0}) == law.symmetries


def own(equations, components=("u",), parameters=None, dimensions=1):
    return read_law("own", equations, components, parameters or {}, dimensions)


@pytest.mark.parametrize(
    ("equation", "conserved"),
    [
        ("u_t + (u*u_xx)_x = 0", True),
        ("u_t + u_x*u_xx = 0", True),
        ("u_t + u*u_xxx = 0", True),
        ("u_t + u*u_x**2 = 0", False),
        ("u_t + u_x**2 = 0", False),
        ("u_t + u*u_xx = 0", False),
        ("u_t = u_xx + cos(3*x)", True),
        ("u_t = u_xx + cos(3*x)**2", False),
        ("u_t = u_xx + 1", False),
        ("u_t = u_xx - nu*u", False),
        # In the continuum this is (u*u_x)_x; differences of first and second order do not cancel exactly.
        ("u_t = u*u_xx + u_x**2", False),
    ],
)
def test_a_mean_is_conserved_only_where_the_lattice_conserves_it(equation, conserved):
    law = own([equation], parameters={"nu": 1.0})
    assert law.symmetries.conserved == (("u",) if conserved else ())


def test_waves_in_two_directions_have_no_mean():
    assert own(["u_t = sin(x)*cos(2*y)"], dimensions=2).symmetries.conserved == ("u",)
    assert own(["u_t = sin(x)*cos(2*x)"], dimensions=2).symmetries.conserved == ()


def test_reflections_of_two_coupled_fields_are_found():
    law = own(["u_t = v_x", "v_t = u_x + u*v"], ("u", "v"))
    everything = {
        Reflection(in_x, False, signs, time)
        for in_x, time in product((False, True), repeat=2)
        for signs in product((1, -1), repeat=2)
    }
    holding = {r for r in everything if holds_numerically(law, r)} - {sign_only(1, 1)}
    # With signs p of u, q of v, e of x and o of t: p o = q e, q o = p e, q o = p q, so p = o and q = e.
    by_algebra = {
        x_flip(1, -1),
        Reflection(False, False, (-1, 1), True),
        Reflection(True, False, (-1, -1), True),
    }
    assert holding == set(law.symmetries.reflections) == by_algebra


# -- exact solutions -----------------------------------------------------------------------------------


def residual(law, box, values, rates):
    """Return the largest |u_t + G| over all equations, relative to the largest |G|; rates are u_t by component."""
    sides = right_hand_sides(law, box, values)
    totals = [side + rates.get(c, 0.0) for c, side in zip(law.components, sides, strict=True)]
    return max(np.abs(total).max() for total in totals) / max(1.0, *(np.abs(side).max() for side in sides))


@pytest.mark.parametrize(
    ("m", "length", "speed"),
    [(0.5, 5.29735622086106, 0.6), (0.9, 7.36597746670907, 2.168)],
)
def test_cnoidal_wave_solves_korteweg_de_vries(m, length, speed):
    # Korteweg and de Vries 1895 (form from memory): u0 + 2 k^2 m cn^2(k (x - c t) | m), k = 0.7, u0 = 0.1.
    # Lengths and speeds: independent recomputation.
    k, u0 = 0.7, 0.1
    assert 2 * scipy.special.ellipk(m) / k == pytest.approx(length, rel=1e-13)
    assert 4 * k**2 * (2 * m - 1) + 6 * u0 == pytest.approx(speed, rel=1e-13)
    box = Box(96, length)
    wave = u0 + 2 * k**2 * m * scipy.special.ellipj(k * box.x, m)[1] ** 2
    rates = {"u": -speed * box.derivative(wave, 1, 0)}
    assert residual(load_law("korteweg-de-vries"), box, {"u": wave}, rates) < 1e-9


@pytest.mark.parametrize(
    ("g3", "length", "speed", "mean_square"),
    [
        (0.0, 6.90164361533925598, -2.95727347356950, 17.2545336025222),
        (0.004, 6.34478975716142036, -3.88388115423229, 2.27546717979928),
    ],
)
def test_elliptic_wave_solves_the_dispersive_film_law(g3, length, speed, mean_square):
    # Kudryashov, Phys. Lett. A 147 (1990) 287 (from memory): dispersion 4, u = c - 1 - 60 P - 60 P'.
    # Numbers: independent recomputation.
    e3, e2, e1 = np.sort(np.roots([4, 0, -1 / 12, -g3]).real)
    w, m = np.sqrt(e1 - e3), (e2 - e3) / (e1 - e3)
    assert 2 * scipy.special.ellipk(m) / w == pytest.approx(length, rel=1e-12)
    box = Box(128, length)
    sn, cn, dn, _ = scipy.special.ellipj(w * box.x, m)
    weierstrass = e3 + (e2 - e3) * sn**2
    slope = 2 * (e2 - e3) * w * sn * cn * dn
    wave = speed - 1 - 60 * weierstrass - 60 * slope
    assert abs(wave.mean()) < 1e-9
    assert (wave**2).mean() == pytest.approx(mean_square, rel=1e-11)
    rates = {"u": -speed * box.derivative(wave, 1, 0)}
    law = load_law("kuramoto-sivashinsky")
    assert residual(law, box, {"u": wave, "dispersion": 4.0}, rates) < 1e-8
    assert residual(law, box, {"u": wave, "dispersion": 3.9}, rates) > 1e-2


@pytest.mark.parametrize("name", ["ginzburg-landau", "ginzburg-landau-2d"])
def test_plane_wave_solves_ginzburg_landau(name):
    # Aranson and Kramer, Rev. Mod. Phys. 74 (2002) 99 (from memory).
    b, c, wavenumber = 0.7, -0.4, 0.5
    box = Box(32, 4 * np.pi, 32 if name.endswith("2d") else 1, 4 * np.pi)
    vector = (wavenumber, wavenumber if box.ny > 1 else 0.0)
    square = vector[0] ** 2 + vector[1] ** 2
    radius, omega = np.sqrt(1 - square), b * square + c * (1 - square)
    wave = radius * np.exp(1j * (vector[0] * box.x + vector[1] * box.y))
    rate = -1j * omega * wave
    values = {"u": wave.real, "v": wave.imag, "b": b, "c": c}
    assert residual(load_law(name), box, values, {"u": rate.real, "v": rate.imag}) < 1e-12


def test_ginzburg_landau_is_the_complex_equation():
    law, box = load_law("ginzburg-landau-2d"), BOX[2]
    fields = random_fields(law)
    amplitude = fields["u"] + 1j * fields["v"]
    laplacian = sum(
        box.derivative(amplitude.real, *order) + 1j * box.derivative(amplitude.imag, *order)
        for order in ((2, 0), (0, 2))
    )
    rate = amplitude + (1 + 0.3j) * laplacian - (1 - 0.8j) * np.abs(amplitude) ** 2 * amplitude
    assert residual(law, box, fields | {"b": 0.3, "c": -0.8}, {"u": rate.real, "v": rate.imag}) < 1e-12


@pytest.mark.parametrize(("reynolds", "n"), [(11.0, 4), (2.0, 1), (40.0, 2)])
def test_laminar_flow_solves_kolmogorov(reynolds, n):
    # u = (Re/n^2) sin(n y): one-line derivation; om = -u_y and om = -lap psi.
    law, box = load_law("kolmogorov"), Box(16, 2 * np.pi, 32, 2 * np.pi)
    velocity = reynolds / n**2 * np.sin(n * box.y)
    values = {
        "om": -box.derivative(velocity, 0, 1),
        "psi": -reynolds / n**3 * np.cos(n * box.y),
        "Re": reynolds,
        "n": n,
    }
    np.testing.assert_allclose(box.derivative(values["psi"], 0, 1), velocity, atol=1e-10)
    assert residual(law, box, values, {}) < 1e-11


def test_kolmogorov_vorticity_follows_the_momentum_equation():
    """Compare with the curl of u.grad u - lap u/Re - force from velocities of a random streamfunction."""
    law, box = load_law("kolmogorov"), BOX[2]
    psi_values = box.smooth_field(np.random.default_rng(5))
    ux, uy = box.derivative(psi_values, 0, 1), -box.derivative(psi_values, 1, 0)
    vorticity = box.derivative(uy, 1, 0) - box.derivative(ux, 0, 1)

    def momentum(component, force):
        advection = ux * box.derivative(component, 1, 0) + uy * box.derivative(component, 0, 1)
        diffusion = box.derivative(component, 2, 0) + box.derivative(component, 0, 2)
        return advection - diffusion / 5.0 - force

    curl = box.derivative(momentum(uy, 0.0), 1, 0) - box.derivative(momentum(ux, np.sin(2 * box.y)), 0, 1)
    values = {"om": vorticity, "psi": psi_values, "Re": 5.0, "n": 2.0}
    transport, poisson = right_hand_sides(law, box, values)
    np.testing.assert_allclose(transport, curl, atol=1e-10)
    np.testing.assert_allclose(poisson, 0.0, atol=1e-10)


def test_steady_forced_burgers_is_a_mathieu_function():
    # Cole-Hopf: u = -2 nu f'/f turns the steady law into Mathieu's equation, 2 nu^2 f'' = (C - (F/k) cos kx) f.
    nu, force, k = 0.3, 0.5, 1.0
    law, box = load_law("burgers"), Box(128, 2 * np.pi)
    q = -force / (k**3 * nu**2)
    f, slope = scipy.special.mathieu_cem(0, q, np.degrees(k * box.x / 2))
    velocity = -2 * nu * slope * (k / 2) / f
    assert np.abs(velocity).max() > 0.5
    assert residual(law, box, {"u": velocity, "nu": nu, "force": force, "wavenumber": k}, {}) < 1e-8


def test_decaying_burgers_solution_of_cole_and_hopf():
    # Cole 1951, Hopf 1950 (from memory): u = -2 nu f'/f, f = 1 + a exp(-nu k^2 t) cos kx.
    # The value at (1, 2) is an independent recomputation.
    nu, a = 0.1, 0.5

    def wave(x, t):
        decay = a * np.exp(-nu * t)
        return 2 * nu * decay * np.sin(x) / (1 + decay * np.cos(x))

    assert wave(1.0, 2.0) == pytest.approx(0.056415727151999, rel=1e-12)
    box, step = Box(64, 2 * np.pi), 1e-3
    # Fourth-order difference in time: error 1e-12 * u^(5), rounding 1e-13.
    weights = {-2: 1, -1: -8, 1: 8, 2: -1}
    rate = sum(weight * wave(box.x, 2.0 + n * step) for n, weight in weights.items()) / (12 * step)
    values = {"u": wave(box.x, 2.0), "nu": nu, "force": 0.0}
    assert residual(load_law("burgers"), box, values, {"u": rate}) < 1e-11


@pytest.mark.parametrize("name", ["gray-scott", "gray-scott-2d"])
def test_uniform_states_of_gray_scott(name):
    # Pearson, Science 261 (1993) 189 (model from memory); values: one-line derivation, F = 0.04, k = 0.05.
    law = load_law(name)
    box = BOX[law.dimensions]
    ones = np.ones((box.ny, box.nx))
    for one, two in ((0.2820550528, 0.3190866432), (1.0, 0.0)):
        values = {"u": one * ones, "v": two * ones, "F": 0.04, "k": 0.05}
        assert residual(law, box, values, {}) < 1e-10
    # Fold at k = sqrt(F)/2 - F = 0.06, the default: u = 1/2, v = F/(2 (F + k)).
    values = {"u": 0.5 * ones, "v": 0.2 * ones, "F": 0.04, "k": 0.06}
    assert residual(law, box, values, {}) < 1e-15


GROWTH = {
    # k^2 - k^4 (Kuramoto and Tsuzuki 1976; Nepomnyashchy 1974: only variation along x drives the film)
    "kuramoto-sivashinsky": lambda kx, ky: kx**2 - kx**4,
    "kuramoto-sivashinsky-2d": lambda kx, ky: kx**2 + ky**2 - (kx**2 + ky**2) ** 2,
    "film-2d": lambda kx, ky: kx**2 - (kx**2 + ky**2) ** 2,
    # r - (1 - k^2)^2 (Swift and Hohenberg 1977)
    **{
        f"swift-hohenberg{kind}": lambda kx, ky: 0.2 - (1 - kx**2 - ky**2) ** 2
        for kind in ("", "-2d", "-23", "-23-2d", "-35", "-35-2d")
    },
}


@pytest.mark.parametrize("name", GROWTH)
def test_small_waves_grow_at_the_published_rate(name):
    law = load_law(name)
    box = Box(32, 9.0, 32 if law.dimensions == 2 else 1, 11.0)
    for m, n in ((1, 0), (2, 1), (1, 2)):
        kx, ky = 2 * np.pi * m / box.length_x, 2 * np.pi * n / box.length_y * (law.dimensions == 2)
        wave = 1e-7 * np.cos(kx * box.x + ky * box.y)
        (side,) = right_hand_sides(law, box, {law.components[0]: wave, "r": 0.2})
        expected = GROWTH[name](kx, ky)
        # The squares of the wave are 1e-7 of it.
        np.testing.assert_allclose(-side, expected * wave, atol=2e-6 * 1e-7)


def test_sums_of_one_dimensional_states_solve_the_two_dimensional_integral_form():
    # phi = f(x) + g(y): one-line derivation. Each part obeys the one-dimensional integral form.
    box, law = BOX[2], load_law("kuramoto-sivashinsky-2d")
    f = np.sin(box.x / 2) + 0.3 * np.cos(box.x)
    g = 0.5 * np.cos(box.y)
    (together,) = right_hand_sides(law, box, {"phi": f + g})
    apart = [right_hand_sides(law, box, {"phi": part})[0] for part in (f, g)]
    np.testing.assert_allclose(together, apart[0] + apart[1], atol=1e-11)


def test_the_film_law_in_two_dimensions_holds_the_one_dimensional_one():
    box = BOX[2]
    fields = {"u": np.sin(box.x / 2) + 0.4 * np.cos(box.x)}
    (two,) = right_hand_sides(load_law("film-2d"), box, fields)
    (one,) = right_hand_sides(load_law("kuramoto-sivashinsky"), box, fields)
    np.testing.assert_allclose(two, one, atol=1e-12)


# -- own laws, forcing, pages --------------------------------------------------------------------------


def test_an_unknown_law_is_refused_with_the_nearest_name():
    with pytest.raises(InputError, match=r"got 'kuramoto' \(did you mean 'kuramoto-sivashinsky'\?\)"):
        load_law("kuramoto")
    with pytest.raises(InputError, match=r"did you mean 'kolmogorov'"):
        load_law("kolmogorow")
    with pytest.raises(InputError, match="one of"):
        load_law("../../secret")


@pytest.mark.parametrize("value", [float("nan"), float("inf"), "1", True, None])
def test_parameters_must_be_numbers(value):
    with pytest.raises(InputError, match=r"law\.parameters\.nu must be a finite number"):
        own(["u_t = nu*u_xx"], parameters={"nu": value})


def test_an_own_law_takes_numbers_and_descriptions():
    speed = Parameter("speed", 2.0, "m/s", "of the belt")
    law = own(["u_t + speed*u_x = nu*u_xx"], parameters={"nu": 1, "speed": speed})
    assert law.defaults == {"nu": 1.0, "speed": 2.0}
    assert law.parameters[1] is speed
    assert (law.name, law.title) == ("own", "")


def test_forcing_must_repeat_after_the_length_of_the_box():
    law = load_law("kolmogorov")
    for length, n, axes in ((2 * np.pi, 4, ()), (np.pi, 4, ()), (2 * np.pi / 3, 3, ()), (5.0, 4, ("y",))):
        assert find_aperiodic_axes(law, {"length_x": 3.0, "length_y": length, "n": n}) == axes
    burgers = load_law("burgers")
    assert find_aperiodic_axes(burgers, {"length_x": 4 * np.pi}) == ()
    assert find_aperiodic_axes(burgers, {"length_x": 4 * np.pi, "force": 1e-6}) == ()
    assert find_aperiodic_axes(burgers, {"length_x": 6.0, "force": 1e-6}) == ("x",)
    assert find_aperiodic_axes(own(["u_t = u*x"]), {"length_x": 1.0}) == ("x",)
    assert find_aperiodic_axes(own(["u_t = u*exp(cos(x))"]), {"length_x": 2 * np.pi}) == ()
    assert find_aperiodic_axes(load_law("film-2d"), {"length_x": 1.0, "length_y": 1.0}) == ()


def test_the_list_of_laws_names_each_with_its_space_and_fields():
    text = list_laws()
    assert max(map(len, text.splitlines())) <= WIDTH
    for summary in law_summaries():
        law = load_law(summary.name)
        assert (summary.title, summary.dimensions, summary.components) == (
            law.title,
            law.dimensions,
            law.components,
        )
        (line,) = [line for line in text.splitlines() if line.split(" ")[0] == summary.name]
        assert ("x, y" in line) == (law.dimensions == 2)
        assert ", ".join(law.components) in line


@pytest.mark.parametrize("name", NAMES)
def test_a_page_about_a_law_is_narrow_and_whole(name):
    law = load_law(name)
    page = describe_law(law)
    assert max(map(len, page.splitlines())) <= WIDTH
    assert all(text in page for text in law.text)
    section = page.partition("\nparameters\n")[2].partition("\n\n")[0]
    for parameter in law.parameters:
        (line,) = [x for x in section.splitlines() if x.startswith(f"  {parameter.name} ")]
        assert line.split()[1] == f"{parameter.default:g}"
        assert parameter.unit in line
        assert parameter.meaning in line
    for heading in ("formula", "on the lattice", "parameters", "symmetries", "scaling", "source", "notes"):
        assert f"\n{heading}\n" in page
    flat = " ".join(page.split())
    assert all(" ".join(text.split()) in flat for text in (law.source, law.notes, law.scaling))


def test_a_page_says_symmetries_in_words():
    page = describe_law(load_law("kuramoto-sivashinsky"))
    assert "homogeneous in x: a state may be shifted along x, and drift_x may be free" in page
    assert "the mean of u is conserved" in page
    assert "only makes the state drift along x (Galilean invariance)" in page
    assert "unchanged by x -> -x, u -> -u, with dispersion = 0" in page
    page = describe_law(load_law("kolmogorov"))
    assert "not homogeneous in y" in page
    assert "a constant may be added to psi at each time" in page
    assert "unchanged by t -> -t, x -> -x" in describe_law(load_law("korteweg-de-vries"))


def test_a_page_about_an_own_law_leaves_out_what_is_not_known():
    page = describe_law(own(["u_t = u_xx"]))
    assert page.startswith("own\n")
    assert "source" not in page
    assert "parameters\n  none" in page


def test_paragraphs_flow_and_indented_lines_stay():
    lines = paragraphs("one\ntwo\n   a = b   c\nthree")
    assert lines == ["one two", "   a = b   c", "three"]
    assert max(map(len, paragraphs("word " * 100))) <= WIDTH - 2


def test_laws_can_be_compared_and_replaced_but_not_changed():
    law = load_law("film-2d")
    assert replace(law, title="x").equations == law.equations
    with pytest.raises(AttributeError):
        law.title = "y"


def test_a_law_that_has_been_used_can_be_sent_to_other_ranks() -> None:
    law = load_law("kuramoto-sivashinsky")
    Stepper(law, (1, 16), (1.0, 10.0), {**law.defaults, "length_x": 10.0}, 0.1)
    assert pickle.loads(pickle.dumps(law)) == law
