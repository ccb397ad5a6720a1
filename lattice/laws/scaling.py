"""From the film laws' units to metres and seconds, and back.

A film of kinematic viscosity nu and thickness h flows down a plate at the angle theta to the horizontal. To
first order in the slope of its surface [1]_, averaged over the thickness, with g the gravity, sigma the
surface tension and rho the density::

    h_t + (g sin(theta)/nu) h^2 h_x + (2/15) (g sin(theta))^2/nu^3 (h^6 h_x)_x
        + div( h^3/(3 nu) * grad(-g cos(theta) h + (sigma/rho) lap h) ) = 0

Put h = h0 (1 + H), H small, x in a frame that moves with c0 = g sin(theta) h0^2/nu, and keep the square of H
in the advection only [2]_ [3]_::

    H_t + 2 c0 H H_x + A H_xx - B H_yy + C lap lap H = 0
    A = (6/5) Re^2 nu - B,   B = g cos(theta) h0^3/(3 nu),   C = sigma h0^3/(3 rho nu)

with Re = g sin(theta) h0^3/(3 nu^2). In units sqrt(C/A) of length, C/A^2 of time and A/(2 c0 sqrt(C/A)) of H
this is `u_t + u*u_x + u_xx - (B/A)*u_yy + lap(lap(u)) = 0`.

References
----------
.. [1] D. J. Benney, J. Math. Phys. 45 (1966) 150 (from memory; the equation is derived anew in the tests).
.. [2] G. I. Sivashinsky and D. M. Michelson, Prog. Theor. Phys. 63 (1980) 2112 (from memory).
.. [3] A. A. Nepomnyashchy, Fluid Dynamics 9 (1974) 354 (from memory).
.. [4] S. Kalliadasis, C. Ruyer-Quil, B. Scheid and M. G. Velarde, Falling Liquid Films, Springer 2012 (from
   memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import cos, isfinite, pi, radians, sin, sqrt

from lattice.errors import InputError

# Standard acceleration of gravity, m/s^2 (3rd CGPM 1901).
GRAVITY = 9.80665

# Marks of our own for a caution, not from the literature. Chaotic states reach |u| of about 3.
_REACH = 3.0
_THICKNESS_CHANGE = 0.3
_WAVE_SLOPE = 0.2
_REYNOLDS = 5.0


@dataclass(frozen=True)
class FilmUnits:
    """What one dimensionless unit of a film law is worth for a given liquid, flow rate and plate.

    Parameters
    ----------
    film_thickness : float
        Mean thickness h0 of the film, m.
    wetting_rate : float
        Mass flow per width of the plate, kg/(m s).
    reynolds, critical_reynolds : float
        Wetting rate / dynamic viscosity, and its value below which no wave grows; dimensionless.
    kapitza : float
        sigma / (rho g^(1/3) nu^(4/3)), dimensionless.
    length : float
        One unit of x or y, m.
    time : float
        One unit of t, s.
    thickness : float
        Change of thickness for one unit of u, m: h = film_thickness + thickness * u with mean(u) = 0.
    wave_speed : float
        Speed c0 of the laws' frame down the plate, m/s.
    transverse : float
        Factor -B/A of u_yy in two dimensions, dimensionless; `film-2d` has 0, the vertical plate.
    cautions : tuple of str
        Where the equation is used beyond its derivation.
    """

    film_thickness: float
    wetting_rate: float
    reynolds: float
    critical_reynolds: float
    kapitza: float
    length: float
    time: float
    thickness: float
    wave_speed: float
    transverse: float
    cautions: tuple[str, ...] = ()

    def laboratory_speed(self, drift_x: float) -> float:
        """Return the speed down the plate, m/s, of a state that drifts with the dimensionless `drift_x`."""
        return self.wave_speed + drift_x * self.length / self.time


def film_units(
    density: float,
    viscosity: float,
    surface_tension: float,
    *,
    wetting_rate: float | None = None,
    film_thickness: float | None = None,
    inclination: float = 90.0,
) -> FilmUnits:
    """Return the physical size of the units of `kuramoto-sivashinsky` and `film-2d`.

    Parameters
    ----------
    density : float
        kg/m^3.
    viscosity : float
        Dynamic viscosity, Pa s.
    surface_tension : float
        N/m.
    wetting_rate, film_thickness : float
        One of them: mass flow per width in kg/(m s), or mean thickness in m.
    inclination : float
        Angle of the plate to the horizontal, degrees; 90 is vertical, above 90 the film hangs below.

    Raises
    ------
    InputError
        For a value that is not positive and finite, an inclination outside (0, 180), both or none of flow
        rate and thickness, or a film on which no wave grows.

    Examples
    --------
    >>> units = film_units(1000.0, 0.001, 0.07, wetting_rate=0.001)
    >>> round(units.reynolds, 12), round(1e6 * units.film_thickness, 2)
    (1.0, 67.38)
    """
    _check_inputs(density, viscosity, surface_tension, inclination)
    nu = viscosity / density
    along = GRAVITY * sin(radians(inclination))
    across = 0.0 if inclination == 90.0 else GRAVITY * cos(radians(inclination))
    h0 = _thickness(nu * density, density, along, wetting_rate, film_thickness)
    reynolds = along * h0**3 / (3 * nu**2)
    hydrostatic = across * h0**3 / (3 * nu)
    growth = 1.2 * reynolds**2 * nu - hydrostatic
    critical = max(0.0, 5 / 6 * across / along)
    if growth <= 0:
        raise InputError(
            f"the Reynolds number must be above (5/6) cot(inclination) = {critical:.4g} for waves to grow, "
            f"got {reynolds:.4g}; raise the flow rate or the inclination"
        )
    capillary = surface_tension * h0**3 / (3 * density * nu)
    wave_speed = along * h0**2 / nu
    length = sqrt(capillary / growth)
    units = FilmUnits(
        film_thickness=h0,
        wetting_rate=reynolds * viscosity,
        reynolds=reynolds,
        critical_reynolds=critical,
        kapitza=surface_tension / (density * GRAVITY ** (1 / 3) * nu ** (4 / 3)),
        length=length,
        time=capillary / growth**2,
        thickness=h0 * growth / (2 * wave_speed * length),
        wave_speed=wave_speed,
        transverse=0.0 - hydrostatic / growth,
    )
    return _with_cautions(units)


def _check_inputs(density: float, viscosity: float, surface_tension: float, inclination: float) -> None:
    named = {"density": density, "viscosity": viscosity, "surface_tension": surface_tension}
    for name, value in named.items():
        _check_positive(name, value)
    if not 0.0 < inclination < 180.0:
        raise InputError(
            f"inclination must be between 0 and 180 degrees, got {inclination!r}; 90 is vertical"
        )


def _check_positive(name: str, value: float) -> None:
    if not (isfinite(value) and value > 0):
        raise InputError(f"{name} must be positive and finite, got {value!r}; give it in SI units")


def _thickness(
    viscosity: float, density: float, along: float, wetting_rate: float | None, film_thickness: float | None
) -> float:
    """Return the thickness of the smooth film, Nusselt's: wetting rate = rho^2 g sin(theta) h0^3 / (3 mu)."""
    if (wetting_rate is None) == (film_thickness is None):
        raise InputError("exactly one of wetting_rate and film_thickness must be given; drop or add one")
    if film_thickness is not None:
        _check_positive("film_thickness", film_thickness)
        return film_thickness
    assert wetting_rate is not None
    _check_positive("wetting_rate", wetting_rate)
    return float((3 * viscosity * wetting_rate / (density**2 * along)) ** (1 / 3))


def _with_cautions(units: FilmUnits) -> FilmUnits:
    change = _REACH * units.thickness / units.film_thickness
    slope = units.film_thickness / (sqrt(2) * units.length)
    cautions = []
    if change > _THICKNESS_CHANGE:
        cautions.append(f"waves change the thickness by about {change:.0%}, which is not small")
    if slope > _WAVE_SLOPE:
        wavelength = 2 * pi * sqrt(2) * units.length
        cautions.append(
            f"the fastest growing wave, {wavelength:.3g} m, is not long against the film, "
            f"{units.film_thickness:.3g} m"
        )
    if units.reynolds > _REYNOLDS:
        cautions.append(f"Re = {units.reynolds:.3g} is above order one: inertia beyond this equation matters")
    if units.transverse != 0.0:
        cautions.append(
            f"in two dimensions this plate has a further term {units.transverse:+.4g}*u_yy, "
            "which film-2d lacks"
        )
    cautions.append(
        "isothermal film without evaporation or vapour shear; base a design decision on certified states, "
        "experiments and licensed engineering practice"
    )
    return replace(units, cautions=tuple(cautions))
