"""Lines through timed samples: constants and shares that are never negative."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.sizing.calibration import LINES, Line, Speeds
from lattice.sizing.measure import Sample

Real = NDArray[np.float64]


def fit_speeds(ranks: int, starts: tuple[float, float], samples: Sequence[Sample]) -> tuple[Speeds, float]:
    """Return the speeds on a number of ranks, and the root mean square relative error of the fits.

    Parameters
    ----------
    ranks : int
    starts : tuple of float
        Seconds of starting up without and with two levels.
    samples : sequence of Sample
    """
    lines: dict[str, Any] = {}
    errors: list[Real] = []
    for name in LINES:
        own = [s for s in samples if s.name == name]
        if name != "factor":
            lines[name], off = fit_line(own)
            errors.append(off)
    factor = [s for s in samples if s.name == "factor"]
    (constant, each, flop), off = _relative_fit(
        [(1.0, s.amount, s.flops) for s in factor], [s.seconds for s in factor]
    )
    lines["factor"] = Line(constant, each)
    error = float(np.sqrt(np.mean(np.concatenate([*errors, off]) ** 2)))
    return Speeds(ranks, *starts, flop=flop, **lines), error


def fit_line(samples: Sequence[Sample]) -> tuple[Line, Real]:
    """Return the line through samples, and its relative error at each.

    Examples
    --------
    >>> fit_line([Sample("solve", 10.0, 3.0), Sample("solve", 20.0, 5.0)])[0]
    Line(constant=1.0, each=0.2)
    """
    (constant, each), off = _relative_fit([(1.0, s.amount) for s in samples], [s.seconds for s in samples])
    return Line(round(constant, 12), float(f"{each:.6g}")), off


def _relative_fit(rows: Sequence[Sequence[float]], times: Sequence[float]) -> tuple[list[float], Real]:
    """Return non-negative coefficients with the least relative errors, squared, and the errors."""
    if not rows:
        return [0.0, 0.0, 0.0], np.zeros(0)
    from scipy.optimize import nnls

    matrix: Real = np.array(rows, dtype=float) / np.array(times)[:, None]
    scales = np.maximum(np.abs(matrix).max(axis=0), 1e-300)
    found, _ = nnls(matrix / scales, np.ones(len(times)))
    coefficients = found / scales
    return [float(c) for c in coefficients], matrix @ coefficients - 1.0
