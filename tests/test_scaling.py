"""The units of the film laws agree with the equations of viscous flow, derived anew and solved anew."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
import sympy

from lattice.errors import InputError
from lattice.laws.scaling import GRAVITY, FilmUnits, film_units

# Water at 20 degrees C, handbook values from memory: kg/m^3, Pa s, N/m.
WATER = (998.2, 1.002e-3, 72.8e-3)


def test_flow_rate_follows_from_the_equations_of_a_thin_layer():
    """Derive the flux in the module's first formula from momentum, to first order in the slope."""
    t, x, y, s, c, nu, gravity, capillarity = sympy.symbols("t x y s c nu g k", positive=True)
    h = sympy.Function("h")(t, x)
    # Zeroth order: nu u_yy + g sin = 0, no slip at the plate, no stress at the surface.
    u0 = gravity * s / nu * (h * y - y**2 / 2)
    v0 = -sympy.integrate(sympy.diff(u0, x), (y, 0, y))
    # Pressure: hydrostatic across the film, capillary along it (k = sigma/rho).
    pressure_slope = gravity * c * sympy.diff(h, x) - capillarity * sympy.diff(h, x, 3)
    # Mass balance to this order gives h_t.
    h_t = -sympy.diff(sympy.integrate(u0, (y, 0, h)), x)
    inertia = sympy.diff(u0, t) + u0 * sympy.diff(u0, x) + v0 * sympy.diff(u0, y)
    forcing = sympy.expand((inertia.subs(sympy.diff(h, t), h_t) + pressure_slope).doit() / nu)
    stress = sympy.integrate(forcing, y)
    u1_y = stress - stress.subs(y, h)
    u1 = sympy.integrate(sympy.expand(u1_y), y)
    flux = sympy.integrate(sympy.expand(u0 + u1 - u1.subs(y, 0)), (y, 0, h))
    gs = gravity * s
    expected = gs / (3 * nu) * h**3 + sympy.Rational(2, 15) * gs**2 / nu**3 * h**6 * sympy.diff(h, x)
    expected -= h**3 / (3 * nu) * pressure_slope
    assert sympy.simplify(flux - expected) == 0


def test_small_changes_of_thickness_obey_the_film_law():
    """Expand the module's first formula for h = h0 (1 + e H) in slow variables: the second follows."""
    h0, s, c, nu, g, k, e = sympy.symbols("h0 s c nu g k e", positive=True)
    tau, xi, y = sympy.symbols("tau xi y", real=True)
    wave = sympy.Function("H")(tau, xi, y)
    c0 = g * s * h0**2 / nu
    h = h0 * (1 + e * wave)

    def gradient_flux(z):
        laplacian = sympy.diff(h, xi, 2) + sympy.diff(h, y, 2)
        return h**3 / (3 * nu) * sympy.diff(-g * c * h + k * laplacian, z)

    h_t = sympy.diff(h, tau) - c0 * sympy.diff(h, xi)
    inertia = sympy.Rational(2, 15) * (g * s) ** 2 / nu**3 * sympy.diff(h**6 * sympy.diff(h, xi), xi)
    balance = h_t + g * s / nu * h**2 * sympy.diff(h, xi) + inertia
    balance += sympy.diff(gradient_flux(xi), xi) + sympy.diff(gradient_flux(y), y)
    balance = sympy.expand((balance / h0).doit())
    reynolds = g * s * h0**3 / (3 * nu**2)
    hydrostatic, capillary = g * c * h0**3 / (3 * nu), k * h0**3 / (3 * nu)
    growth = sympy.Rational(6, 5) * reynolds**2 * nu - hydrostatic
    biharmonic = sum(n * sympy.diff(wave, xi, a, y, b) for n, a, b in ((1, 4, 0), (2, 2, 2), (1, 0, 4)))
    linear = sympy.diff(wave, tau) + growth * sympy.diff(wave, xi, 2) - hydrostatic * sympy.diff(wave, y, 2)
    linear += capillary * biharmonic
    assert sympy.simplify(balance.coeff(e, 1) - linear) == 0
    # Of the squares, those with one derivative: long waves make the others smaller.
    square = balance.coeff(e, 2)
    (advection,) = [
        term
        for term in sympy.Add.make_args(square)
        if not term.has(nu**-3) and not term.has(k) and not term.has(c)
    ]
    assert sympy.simplify(advection - 2 * c0 * wave * sympy.diff(wave, xi)) == 0


def test_units_make_every_factor_one():
    """Put x = l X, t = T t', H = a u into the second formula with symbols for A, C and c0."""
    growth, capillary, c0 = sympy.symbols("A C c0", positive=True)
    length = sympy.sqrt(capillary / growth)
    time = capillary / growth**2
    amplitude = growth / (2 * c0 * length)
    assert sympy.simplify(2 * c0 * amplitude / length * time) == 1
    assert sympy.simplify(growth / length**2 * time) == 1
    assert sympy.simplify(capillary / length**4 * time) == 1


def test_numbers_agree_with_a_sum_by_hand():
    """rho = 1000, mu = 0.001, sigma = 0.07, wetting rate 0.001: nu = 1e-6, Re = 1."""
    units = film_units(1000.0, 0.001, 0.07, wetting_rate=0.001)
    h0 = (3e-12 / GRAVITY) ** (1 / 3)
    assert units.reynolds == pytest.approx(1.0, rel=1e-12)
    assert units.film_thickness == pytest.approx(h0, rel=1e-12)
    # A = 1.2e-6 and C = 0.07/(3 * 1000 * 1e-6) h0^3 = (70/3) h0^3; h0^3 = 3e-12/g.
    capillary = 70e-12 / GRAVITY
    assert units.length == pytest.approx((capillary / 1.2e-6) ** 0.5, rel=1e-12)
    assert units.time == pytest.approx(capillary / 1.44e-12, rel=1e-12)
    # (Re/5) (h0/l) of the law file's text.
    assert units.thickness == pytest.approx(h0 * h0 / (5 * units.length), rel=1e-12)
    assert units.wave_speed == pytest.approx(GRAVITY * h0**2 / 1e-6, rel=1e-12)
    assert units.laboratory_speed(2.0) == pytest.approx(
        units.wave_speed + 2 * 1.2e-6 / units.length, rel=1e-12
    )
    assert units.transverse == 0.0


def test_nusselt_thickness_of_a_water_film():
    # Nusselt 1916, handbook formula (3 mu Gamma/(rho^2 g))^(1/3) (common practice): 0.01 kg/(m s) of water
    # gives 0.1454 mm; mean velocity = Gamma/(rho h0), a third of the wave speed.
    units = film_units(*WATER, wetting_rate=0.01)
    assert units.film_thickness == pytest.approx(1.454e-4, rel=1e-3)
    assert units.wave_speed == pytest.approx(3 * 0.01 / (998.2 * units.film_thickness), rel=1e-12)
    # Kapitza number of water at 20 degrees C, about 3400 (Kalliadasis et al. 2012, from memory).
    assert units.kapitza == pytest.approx(3400, rel=0.02)


def test_thickness_and_flow_rate_give_the_same_film():
    one = film_units(*WATER, wetting_rate=0.004, inclination=60.0)
    two = film_units(*WATER, film_thickness=one.film_thickness, inclination=60.0)
    for name in ("wetting_rate", "reynolds", "length", "time", "thickness", "wave_speed", "transverse"):
        assert getattr(one, name) == pytest.approx(getattr(two, name), rel=1e-10)


def test_waves_need_the_critical_reynolds_number_of_benjamin_and_yih():
    # Re_c = (5/6) cot(theta) with the mean velocity (Benjamin 1957, Yih 1963, from memory).
    critical = 5 / 6 / np.tan(np.radians(30.0))
    viscosity = WATER[1]
    with pytest.raises(InputError, match=f"above .* = {critical:.4g} for waves to grow"):
        film_units(*WATER, wetting_rate=0.999 * critical * viscosity, inclination=30.0)
    units = film_units(*WATER, wetting_rate=1.001 * critical * viscosity, inclination=30.0)
    assert units.critical_reynolds == pytest.approx(critical, rel=1e-12)


# -- against the linear stability of the full equations ------------------------------------------------


def chebyshev(points: int) -> tuple[np.ndarray, np.ndarray]:
    """Return nodes on [0, 1], the surface first, and the matrix of the first derivative."""
    angles = np.pi * np.arange(points) / (points - 1)
    nodes = np.cos(angles)
    ends = np.ones(points)
    ends[[0, -1]] = 2.0
    ends *= (-1.0) ** np.arange(points)
    differences = nodes[:, None] - nodes[None, :] + np.eye(points)
    matrix = np.outer(ends, 1 / ends) / differences
    matrix -= np.diag(matrix.sum(axis=1))
    return (nodes + 1) / 2, 2 * matrix


def surface_mode(wavenumber: float, reynolds: float, cotangent: float, tension: float) -> complex:
    """Return the complex speed of the surface mode of a falling film, solving the Orr-Sommerfeld problem.

    Lengths in film thicknesses h0, speeds in nu/h0. The conditions at the surface are those of Yih,
    Phys. Fluids 6 (1963) 321 (from memory, checked by derivation): kinematic, no shear, normal stress
    balanced by gravity and the tension sigma h0/(rho nu^2).
    """
    # At these Reynolds numbers the profiles are nearly polynomials; more points only add rounding.
    points = 14
    y, d1 = chebyshev(points)
    d2 = d1 @ d1
    d3, d4, eye = d2 @ d1, d2 @ d2, np.eye(points)
    k = wavenumber
    drive = 3 * reynolds
    flow, surface_flow = np.diag(drive * (y - y**2 / 2)), drive / 2
    laplacian = d2 - k**2 * eye
    size = points + 1
    left, right = np.zeros((size, size), complex), np.zeros((size, size), complex)
    left[:points, :points] = flow @ laplacian + drive * eye - (d4 - 2 * k**2 * d2 + k**4 * eye) / (1j * k)
    right[:points, :points] = laplacian
    for row in (0, 1, points - 2, points - 1):
        left[row], right[row] = 0, 0
    left[points - 1, points - 1] = 1
    left[points - 2, :points] = d1[-1]
    # No shear: phi'' + k^2 phi + U'' eta = 0.
    left[0, :points] = d2[0] + k**2 * eye[0]
    left[0, points] = -drive
    # Normal stress: pressure from the x-momentum, viscous part, gravity and tension.
    left[1, :points] = -surface_flow * d1[0] + (d3[0] - k**2 * d1[0]) / (1j * k) + 2j * k * d1[0]
    left[1, points] = -(drive * cotangent + tension * k**2)
    right[1, :points] = -d1[0]
    # Kinematic: phi = (c - U) eta.
    left[points, 0], left[points, points] = 1, surface_flow
    right[points, points] = 1
    speeds = scipy.linalg.eigvals(left, right)
    speeds = speeds[np.isfinite(speeds)]
    return complex(speeds[np.argmin(np.abs(speeds - 3 * reynolds))])


@pytest.mark.parametrize(
    ("reynolds", "inclination", "tension"),
    [(0.5, 90.0, 2e4), (1.0, 90.0, 1e4), (2.0, 90.0, 3e5), (1.5, 60.0, 2e4)],
)
def test_growth_and_speed_agree_with_the_orr_sommerfeld_problem(reynolds, inclination, tension):
    """Waves of the film law, in metres and seconds, against those of the full linear equations."""
    nu, density = 1e-6, 1000.0
    sine, cosine = np.sin(np.radians(inclination)), np.cos(np.radians(inclination))
    h0 = (3 * nu**2 * reynolds / (GRAVITY * sine)) ** (1 / 3)
    units = film_units(
        density, density * nu, tension * density * nu**2 / h0, film_thickness=h0, inclination=inclination
    )
    for k in (0.4, 1 / np.sqrt(2), 0.9):
        per_thickness = k * h0 / units.length
        speed = surface_mode(per_thickness, reynolds, cosine / sine, tension)
        growth = per_thickness * speed.imag * nu / h0**2
        # k^2 - k^4 of the law; corrections are of the relative size (h0/l)^2 Re^2.
        smallness = (h0 / units.length) ** 2 * (1 + reynolds) ** 2
        assert smallness < 0.02
        assert growth * units.time == pytest.approx(k**2 - k**4, abs=3 * smallness)
        assert speed.real * nu / h0 == pytest.approx(units.wave_speed, rel=3 * smallness)


def test_growth_approaches_that_of_the_film_law_as_waves_become_long():
    errors = []
    for tension in (1e3, 1e4):
        reynolds, nu = 1.0, 1e-6
        h0 = (3 * nu**2 * reynolds / GRAVITY) ** (1 / 3)
        units = film_units(1000.0, 1e-3, tension * 1e-9 / h0, film_thickness=h0)
        per_thickness = h0 / units.length / np.sqrt(2)
        speed = surface_mode(per_thickness, reynolds, 0.0, tension)
        errors.append(abs(per_thickness * speed.imag * nu / h0**2 * units.time - 0.25))
    # (h0/l)^2 falls by 10 and with it the error.
    assert errors[1] < errors[0] / 8


# -- inputs and cautions -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"density": 0.0}, "density must be positive and finite, got 0.0"),
        ({"viscosity": -1.0}, "viscosity must be positive"),
        ({"surface_tension": float("nan")}, "surface_tension must be positive and finite, got nan"),
        ({"wetting_rate": -1.0}, "wetting_rate must be positive"),
        ({"wetting_rate": None}, "exactly one of wetting_rate and film_thickness"),
        ({"film_thickness": 1e-4}, "exactly one of wetting_rate and film_thickness"),
        (
            {"wetting_rate": None, "film_thickness": float("inf")},
            "film_thickness must be positive and finite",
        ),
        ({"inclination": 0.0}, "inclination must be between 0 and 180 degrees, got 0.0"),
        ({"inclination": 180.0}, "inclination must be between 0 and 180 degrees"),
        ({"inclination": float("nan")}, "inclination must be between 0 and 180 degrees"),
    ],
)
def test_wrong_inputs_are_refused(change, message):
    given = {"density": 1000.0, "viscosity": 1e-3, "surface_tension": 0.07, "wetting_rate": 1e-3}
    with pytest.raises(InputError, match=message):
        film_units(**(given | change))


def cautions(**given) -> str:
    units = film_units(*WATER, **given)
    assert isinstance(units, FilmUnits)
    return "; ".join(units.cautions)


def test_a_thin_vertical_film_has_only_the_general_caution():
    text = cautions(wetting_rate=1e-3)
    assert text.startswith("isothermal film without evaporation")
    assert "licensed engineering practice" in text


def test_cautions_name_what_is_beyond_the_derivation():
    assert "which is not small" in cautions(wetting_rate=0.01)
    assert "inertia beyond this equation" in cautions(wetting_rate=0.01)
    assert "u_yy, which film-2d lacks" in cautions(wetting_rate=2e-3, inclination=60.0)
    oil = film_units(900.0, 0.1, 0.001, wetting_rate=0.3)
    assert any("is not long against the film" in text for text in oil.cautions)
