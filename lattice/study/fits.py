"""Amdahl's and Gustafson's laws fitted to measured times, with confidence bands.

Ordinary least squares on all repeats of all points that are not oversubscribed; the bands are those of the
linear model with normal errors, at 95 %. Repeats of one machine in one hour know nothing of another day:
the bands are of this scatter only.

References
----------
All from memory.

.. [1] G. M. Amdahl, AFIPS Conf. Proc. 30 (1967) 483-485: T(p) = T(1) (f + (1 - f)/p).
.. [2] J. L. Gustafson, Comm. ACM 31 (1988) 532-533: S(p) = p + (1 - p) s.
.. [3] N. R. Draper, H. Smith, "Applied Regression Analysis", 3rd ed., Wiley 1998, chapters 5 and 8.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
LEVEL = 0.95


@dataclass(frozen=True)
class Fit:
    """A law fitted to times.

    Parameters
    ----------
    serial, low, high : float
        The serial fraction and its band; the band is nan where there are no more samples than unknowns.
    parameters : tuple of float
    covariance : ndarray
    quantile : float
        Of Student's t; nan where there is no band.
    samples : int
    """

    serial: float
    low: float
    high: float
    parameters: tuple[float, ...]
    covariance: Array
    quantile: float
    samples: int


def fit_amdahl(ranks: Sequence[int], seconds: Sequence[float]) -> Fit | None:
    """Return Amdahl's law fitted to times; None with fewer than two rank counts.

    The line `T = a + b/p` is fitted; the serial fraction is `a/(a + b)`.

    Examples
    --------
    >>> fit = fit_amdahl([1, 2, 4], [1.0, 0.55, 0.325])
    >>> round(fit.serial, 9), round(fit.high - fit.low, 6)
    (0.1, 0.0)
    """
    if len(set(ranks)) < 2:
        return None
    design = np.array([[1.0, 1.0 / p] for p in ranks])
    (a, b), covariance, quantile = _least_squares(design, np.array(seconds))
    whole = a + b
    gradient = np.array([b, -a]) / whole**2
    half = quantile * math.sqrt(max(0.0, float(gradient @ covariance @ gradient)))
    serial = a / whole
    return Fit(serial, serial - half, serial + half, (a, b), covariance, quantile, len(seconds))


def amdahl_times(fit: Fit, ranks: Sequence[float]) -> tuple[Array, Array, Array]:
    """Return the fitted times on rank counts, with the lower and upper ends of the band of the mean."""
    design = np.array([[1.0, 1.0 / p] for p in ranks])
    middle = design @ np.array(fit.parameters)
    spread = np.einsum("ij,jk,ik->i", design, fit.covariance, design)
    half = fit.quantile * np.sqrt(np.maximum(spread, 0.0))
    return middle, middle - half, middle + half


def fit_gustafson(ranks: Sequence[int], scaled_speed_ups: Sequence[float]) -> Fit | None:
    """Return Gustafson's law fitted to scaled speed-ups; None without a point beyond one rank.

    Examples
    --------
    >>> round(fit_gustafson([1, 2, 4], [1.0, 1.9, 3.7]).serial, 9)
    0.1
    """
    pairs = [(p, s) for p, s in zip(ranks, scaled_speed_ups, strict=True) if p > 1]
    if not pairs:
        return None
    design = np.array([[1.0 - p] for p, _ in pairs])
    (serial,), covariance, quantile = _least_squares(design, np.array([s - p for p, s in pairs]))
    half = quantile * math.sqrt(max(0.0, float(covariance[0, 0])))
    return Fit(serial, serial - half, serial + half, (serial,), covariance, quantile, len(pairs))


def _least_squares(design: Array, right: Array) -> tuple[tuple[float, ...], Array, float]:
    """Return parameters, their covariance and Student's quantile [3]_."""
    from scipy.stats import t

    found, *_ = np.linalg.lstsq(design, right, rcond=None)
    freedom = len(right) - design.shape[1]
    inverse = np.linalg.inv(design.T @ design)
    if freedom < 1:
        return tuple(found.tolist()), np.full_like(inverse, np.nan), math.nan
    variance = float(np.sum((design @ found - right) ** 2)) / freedom
    return tuple(found.tolist()), variance * inverse, float(t.ppf(0.5 + LEVEL / 2, freedom))


def power_law(sizes: Sequence[float], numbers: Sequence[float]) -> tuple[float, float]:
    """Return `c` and `k` of `c*size**k`, fitted to the logarithms; `k = 0` for a single size.

    Examples
    --------
    >>> [round(number, 9) for number in power_law([1, 4, 16], [3, 6, 12])]
    [3.0, 0.5]
    """
    logs = np.log(np.maximum(np.array(numbers, dtype=float), 1e-300))
    if len(set(sizes)) < 2:
        return float(np.exp(logs.mean())), 0.0
    slope, level = np.polyfit(np.log(np.array(sizes, dtype=float)), logs, 1)
    return float(np.exp(level)), float(slope)
