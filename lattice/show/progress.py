"""The progress of a solve, one line per nonlinear step, the same in a terminal and in a log file.

Plain text without control codes: columns stay aligned, whatever reads them.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

STEP, NUMBER, LINEAR, SECONDS, MEMORY = 4, 13, 6, 8, 9


def header(names: Sequence[str]) -> str:
    """Return the line above the steps, the names of the columns.

    Parameters
    ----------
    names : sequence of str
        Free scalars, each with a column of its own.

    Examples
    --------
    >>> print(header(["period"]))
    step   residual_rms         period  linear   seconds  memory MB
    """
    columns = [f"{'step':>{STEP}}", f"{'residual_rms':>{NUMBER}}"]
    columns += [f"{name:>{_width(name)}}" for name in names]
    columns += [f"{'linear':>{LINEAR}}", f"{'seconds':>{SECONDS}}", f"{'memory MB':>{MEMORY}}"]
    return "  ".join(columns)


def step_line(
    step: int,
    residual_rms: float,
    scalars: Mapping[str, float],
    linear_iterations: int,
    seconds: float,
    memory_mb: float,
) -> str:
    """Return the line of one step, aligned below `header`.

    Parameters
    ----------
    step : int
        0 is the start.
    residual_rms : float
        After the step.
    scalars : mapping of str to float
        Free scalars in the order of the header.
    linear_iterations : int
        Of this step.
    seconds : float
        Since the start of the solve.
    memory_mb : float
        Largest resident memory so far, over all ranks.

    Examples
    --------
    >>> print(step_line(3, 1.25e-4, {"period": 10.25}, 7, 1.52, 310.0))
       3      1.250e-04     10.2500000       7       1.5        310
    """
    columns = [f"{step:>{STEP}d}", f"{residual_rms:>{NUMBER}.3e}"]
    columns += [f"{_number(value):>{_width(name)}}" for name, value in scalars.items()]
    columns += [f"{linear_iterations:>{LINEAR}d}", f"{seconds:>{SECONDS}.1f}", f"{memory_mb:>{MEMORY}.0f}"]
    return "  ".join(columns)


def _width(name: str) -> int:
    return max(NUMBER, len(name))


def _number(value: float) -> str:
    """Return nine digits, in fixed notation where that fits the column."""
    size = abs(value)
    if value == 0.0 or not math.isfinite(value):
        return f"{value:.1f}"
    if not 1e-3 <= size < 1e6:
        return f"{value:.5e}"
    before = max(1, math.floor(math.log10(size)) + 1)
    return f"{value:.{max(0, 9 - before)}f}"
