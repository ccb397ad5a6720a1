"""What a quantity on several lattices tells of its limit: observed order, extrapolation, bands.

References
----------
.. [1] P. J. Roache, "Perspective: a method for uniform reporting of grid refinement studies", J. Fluids Eng.
   116 (1994) 405-413 (formula from memory); the factors of safety 1.25 and 3 as in his discussion, J. Fluids
   Eng. 133 (2011) 115501: 3 with the theoretical order where the observed one is unreasonable.
.. [2] I. B. Celik et al., "Procedure for estimation and reporting of uncertainty due to discretization in CFD
   applications", J. Fluids Eng. 130 (2008) 078001 (from memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

SAFETY_OBSERVED, SAFETY_ASSUMED = 1.25, 3.0
NEAR = 0.25
"""Relative distance of the observed order from the nominal one up to which it is near."""
LARGEST_ORDER = 12.0


@dataclass(frozen=True)
class Series:
    """A quantity on a state's lattice and on refined ones.

    Parameters
    ----------
    name : str
    values : tuple of float
        On the state's lattice first, then on each refined one.
    ratios : tuple of float
        Of spacings between neighbours, each above 1.
    nominal : float
        Order of the differences.
    noise : float
        Size of differences that mean nothing: rounding and the solver's residual.
    """

    name: str
    values: tuple[float, ...]
    ratios: tuple[float, ...]
    nominal: float
    noise: float


@dataclass(frozen=True)
class Band:
    """What is known of a quantity.

    Parameters
    ----------
    name : str
    value : float
        On the state's own lattice.
    half : float
        Half width of the band around it.
    best, best_half : float
        The extrapolated value and its band, from the finest lattices.
    order : float or None
        Observed order; None where there are too few lattices or no differences to see.
    nominal : float
    kind : str
        "monotone", "oscillating", "diverging", "exact" (no difference beyond noise between the finest two) or
        "assumed" (two lattices, or the correction to first order).
    values : tuple of float
        On all lattices.
    """

    name: str
    value: float
    half: float
    best: float
    best_half: float
    order: float | None
    nominal: float
    kind: str
    values: tuple[float, ...]

    @property
    def contains_best(self) -> bool:
        """Whether the extrapolated value lies in the band around the state's own."""
        return abs(self.best - self.value) <= self.half

    @property
    def near_nominal(self) -> bool:
        """Whether the order is what the differences promise, or there is no error to see."""
        if self.kind == "exact":
            return True
        return self.order is not None and abs(self.order - self.nominal) <= NEAR * self.nominal


def richardson(fine: float, coarse: float, ratio: float, order: float) -> float:
    """Return the limit that two lattices point to.

    Examples
    --------
    >>> round(richardson(1.01, 1.04, 2.0, 2.0), 12)
    1.0
    """
    return fine + (fine - coarse) / _excess(ratio, order)


def grid_convergence_index(fine: float, coarse: float, ratio: float, order: float, safety: float) -> float:
    """Return Roache's index of the finer lattice, relative to its value [1]_."""
    return safety * abs((coarse - fine) / fine) / _excess(ratio, order)


def _excess(ratio: float, order: float) -> float:
    return float(ratio**order) - 1.0


def observed_order(values: Sequence[float], ratios: Sequence[float]) -> float | None:
    """Return the order p shown by three lattices, coarsest first, spacings in any ratios [2]_.

    It solves `(coarse - medium)/(medium - fine) = r^p (R^p - 1)/(r^p - 1)`, R the coarser ratio and r the
    finer, by bisection; None where the differences show none: zero, of unlike signs, or not falling.

    Examples
    --------
    >>> round(observed_order([1.16, 1.04, 1.01], [2.0, 2.0]), 12)
    2.0
    """
    coarse, medium, fine = values
    if medium == fine:
        return None
    quotient = (coarse - medium) / (medium - fine)
    low, high = 0.0, LARGEST_ORDER
    if not _fall(0.0, ratios) < quotient <= _fall(high, ratios):
        return None
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _fall(middle, ratios) < quotient else (low, middle)
    return 0.5 * (low + high)


def _fall(order: float, ratios: Sequence[float]) -> float:
    """Return by what the differences fall from lattice to lattice for an order; its limit for order 0."""
    coarser, finer = ratios
    if order == 0.0:
        return math.log(coarser) / math.log(finer)
    return float(finer**order) * _excess(coarser, order) / _excess(finer, order)


def convergence_kind(values: Sequence[float], ratios: Sequence[float], noise: float) -> str:
    """Return how three values, coarsest first, approach a limit.

    Examples
    --------
    >>> [convergence_kind(v, [2.0, 2.0], 0.0) for v in ([1.16, 1.04, 1.01], [1.1, 0.9, 1.0])]
    ['monotone', 'oscillating']
    """
    coarse, medium, fine = values
    to_coarse, to_fine = coarse - medium, medium - fine
    if abs(to_fine) <= noise:
        return "exact"
    fall = abs(to_coarse / to_fine) if to_fine else math.inf
    if fall <= _fall(0.0, ratios):
        return "diverging"
    return "monotone" if to_coarse * to_fine >= 0.0 else "oscillating"


def band_of(series: Series) -> Band:
    """Return the band of a quantity, by Roache's index where the lattices allow it, wider where not.

    With three or more lattices the last three are used for order and extrapolation. An order that is not
    near the nominal one is not believed: the factor is then 3, the order the smaller of both.
    """
    if len(series.values) < 3:
        return _band_of_two(series)
    last, ratios = series.values[-3:], series.ratios[-2:]
    kind = convergence_kind(last, ratios, series.noise)
    if kind == "exact":
        return _band(series, kind, series.nominal, SAFETY_ASSUMED, None)
    order = observed_order(last, ratios) if kind == "monotone" else None
    if order is not None and abs(order - series.nominal) <= NEAR * series.nominal:
        return _band(series, kind, order, SAFETY_OBSERVED, order)
    believed = min(series.nominal, max(1.0, order if order is not None else 1.0))
    return _band(series, kind, believed, SAFETY_ASSUMED, order)


def _band_of_two(series: Series) -> Band:
    exact = abs(series.values[0] - series.values[-1]) <= series.noise
    return _band(series, "exact" if exact else "assumed", series.nominal, SAFETY_ASSUMED, None)


def _band(series: Series, kind: str, believed: float, safety: float, order: float | None) -> Band:
    first, values, ratios = series.values[0], series.values, series.ratios
    if kind == "exact":
        width = max(safety * max(abs(v - first) for v in values), series.noise)
        return Band(series.name, first, width, values[-1], width, None, series.nominal, kind, values)
    fine, coarse, ratio = values[-1], values[-2], ratios[-1]
    best = richardson(fine, coarse, ratio, believed) if kind in ("monotone", "assumed") else fine
    spread = max(abs(a - b) for a in values for b in values)
    best_half = safety * abs(fine - coarse) / _excess(ratio, believed)
    near_first = abs(values[0] - values[1])
    half = max(
        safety * near_first * (1.0 + 1.0 / _excess(ratios[0], believed)),
        safety * abs(best - first),
        best_half,
    )
    if kind == "diverging":
        half, best_half = max(half, safety * spread), max(best_half, safety * spread)
    return Band(
        series.name,
        first,
        max(half, series.noise),
        best,
        max(best_half, series.noise),
        order,
        series.nominal,
        kind,
        values,
    )


def band_of_correction(name: str, value: float, corrected: float, nominal: float, noise: float) -> Band:
    """Return the band of a quantity whose error is known to first order only; the factor is 3."""
    error = abs(corrected - value)
    if error <= noise:
        return Band(name, value, noise, value, noise, None, nominal, "exact", (value,))
    half = SAFETY_ASSUMED * error
    return Band(name, value, half, corrected, half - error, None, nominal, "assumed", (value, corrected))
