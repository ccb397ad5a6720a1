"""Lines through timed samples: constants and shares that are never negative."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from lattice.sizing.calibration import LINES, Line, Speeds
from lattice.sizing.measure import Sample

Real = NDArray[np.float64]


def fit_speeds(ranks: int, start_up: float, samples: Sequence[Sample]) -> tuple[Speeds, float]:
    """Return the speeds on a number of ranks, and the largest relative error of the fits."""
    lines: dict[str, Line] = {}
    worst = 0.0
    for name in LINES:
        own = [s for s in samples if s.name == name]
        if name != "factor":
            lines[name], error = fit_line(own)
            worst = max(worst, error)
    factor = [s for s in samples if s.name == "factor"]
    (constant, each, flop), error = _relative_fit(
        [(1.0, s.amount, s.flops) for s in factor], [s.seconds for s in factor]
    )
    lines["factor"] = Line(constant, each)
    return Speeds(ranks=ranks, start_up=start_up, flop=flop, **lines), max(worst, error)


def fit_line(samples: Sequence[Sample]) -> tuple[Line, float]:
    """Return the line through samples, and its largest relative error.

    Examples
    --------
    >>> fit_line([Sample("solve", 10.0, 3.0), Sample("solve", 20.0, 5.0)])[0]
    Line(constant=1.0, each=0.2)
    """
    (constant, each), error = _relative_fit([(1.0, s.amount) for s in samples], [s.seconds for s in samples])
    return Line(round(constant, 12), float(f"{each:.6g}")), error


def _relative_fit(rows: Sequence[Sequence[float]], times: Sequence[float]) -> tuple[list[float], float]:
    """Return non-negative coefficients with the least relative errors, squared, and the largest error."""
    if not rows:
        return [0.0, 0.0, 0.0], 0.0
    from scipy.optimize import nnls

    matrix: Real = np.array(rows, dtype=float) / np.array(times)[:, None]
    scales = np.maximum(np.abs(matrix).max(axis=0), 1e-300)
    found, _ = nnls(matrix / scales, np.ones(len(times)))
    coefficients = found / scales
    errors = np.abs(matrix @ coefficients - 1.0)
    return [float(c) for c in coefficients], float(errors.max())
