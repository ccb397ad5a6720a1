"""The map of distances of a march: how near the flow is, after a time, to what it was."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import LatticeError
from lattice.show.panels import STYLE
from lattice.store.replacement import discard, partial_path, publish

FURTHEST = 1.2
"""Distance from which on the map is one colour; two flows that know nothing of each other have 1 or more."""
MARKED = 20
"""Most recurrences that are marked with their number."""


def plot_returns(
    distances: NDArray[np.float32],
    row_time: float,
    lag_time: float,
    names: Sequence[str],
    marks: Sequence[tuple[int, float, float]],
    out: str | os.PathLike[str],
) -> Path:
    """Draw maps of distances, one panel for the flow itself and one for each reflection.

    Parameters
    ----------
    distances : ndarray, shape (rows, panels, lags)
    row_time, lag_time : float
        Time between rows, and between lags; the first lag is one of them.
    names : sequence of str
        One for each panel.
    marks : sequence of (int, float, float)
        Panel, time and lag of each recurrence, the closest first.
    out : path-like
        A .png, .pdf or .svg file; replaced in one step.

    Raises
    ------
    LatticeError
        If the picture cannot be written.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure

    rows, panels, lags = distances.shape
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(11.0, 0.6 + 2.9 * panels), dpi=150, layout="constrained")
        grid = figure.subplots(panels, 1, squeeze=False, sharex=True)[:, 0]
        for panel, axes in enumerate(grid):
            image = axes.imshow(
                distances[:, panel].T,
                origin="lower",
                aspect="auto",
                cmap="viridis",
                vmin=0.0,
                vmax=FURTHEST,
                extent=(0.0, rows * row_time, 0.5 * lag_time, (lags + 0.5) * lag_time),
                interpolation="nearest",
            )
            axes.set_title(names[panel], loc="left")
            axes.set_ylabel("later by")
            _mark(axes, [(n, t, lag) for n, (p, t, lag) in enumerate(marks[:MARKED], 1) if p == panel])
        grid[-1].set_xlabel("time since the spin-up (dimensionless)")
        bar = figure.colorbar(image, ax=list(grid), pad=0.01)
        bar.set_label("distance / rms of the flow, shift and angle at their best")
        return _save(figure, Path(out))


def _mark(axes: Any, marks: Sequence[tuple[int, float, float]]) -> None:
    for number, time, lag in marks:
        axes.plot(time, lag, "o", markersize=7, markerfacecolor="none", markeredgecolor="#ff5a36")
        axes.annotate(
            str(number),
            (time, lag),
            xytext=(5, 5),
            textcoords="offset points",
            color="#ff5a36",
            fontweight="bold",
        )


def _save(figure: Any, out: Path) -> Path:
    partial = partial_path(out)
    try:
        figure.savefig(partial, format=out.suffix.lstrip(".") or "png", dpi=150)
        publish(partial, out)
    except (OSError, ValueError) as error:
        discard(partial)
        raise LatticeError(f"cannot write picture {out}: {error}; choose another path") from error
    return out
