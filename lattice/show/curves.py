"""Pictures of observables: panels of curves such as spectra, correlations and histograms."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from lattice.errors import LatticeError
from lattice.show.panels import BAD, FAINT, LINE_COLOURS, NODES_AS_DOTS, STYLE
from lattice.show.pictures import DOTS_PER_INCH, picture_format
from lattice.store.replacement import discard, partial_path, publish

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Real = npt.NDArray[np.float64]

COLUMNS = 3
DECADES = 24
"""Decades of a logarithmic panel below its highest point; the rest is rounding."""


@dataclass(frozen=True)
class Curve:
    """A line of a panel.

    Parameters
    ----------
    label : str
        Empty where the panel has one line only.
    x, y : ndarray
    reference : bool
        Drawn as a grey band's edge behind the others: what the others are compared with.
    """

    label: str
    x: Real
    y: Real
    reference: bool = False


@dataclass(frozen=True)
class Panel:
    """A panel of curves.

    Parameters
    ----------
    title, xlabel, ylabel : str
    curves : tuple of Curve
    logarithmic : bool
        Of the ordinate.
    limit : float, optional
        Abscissa from which on the lattice represents nothing.
    steps : bool
        Drawn as steps, for a histogram.
    """

    title: str
    xlabel: str
    ylabel: str
    curves: tuple[Curve, ...]
    logarithmic: bool = False
    limit: float | None = None
    steps: bool = False


def plot_panels(
    out: str | os.PathLike[str], title: str, subtitles: Sequence[str], panels: Sequence[Panel]
) -> Path:
    """Draw panels under a title and return the picture's path.

    Raises
    ------
    InputError, LatticeError
        For a format that is none, or a picture that cannot be written.
    """
    import matplotlib as mpl

    form = picture_format(out, None)
    with mpl.rc_context(STYLE):
        figure = _draw(title, subtitles, panels)
        partial = partial_path(Path(out))
        try:
            figure.savefig(partial, format=form, dpi=DOTS_PER_INCH)
            publish(partial, Path(out))
        except OSError as error:
            discard(partial)
            raise LatticeError(
                f"cannot write picture {out}: {error.strerror or error}; choose another path"
            ) from error
    return Path(out)


def _draw(title: str, subtitles: Sequence[str], panels: Sequence[Panel]) -> Figure:
    from matplotlib.figure import Figure

    rows = -(-len(panels) // COLUMNS)
    columns = min(COLUMNS, len(panels))
    height = 0.5 + 0.2 * len(subtitles) + 2.9 * rows
    figure = Figure(figsize=(3.9 * columns, height), dpi=DOTS_PER_INCH, layout="constrained")
    for place, panel in enumerate(panels):
        _panel(figure.add_subplot(rows, columns, place + 1), panel)
    figure.text(0.01, 1.0 - 0.25 / height, title, fontsize=11.5, fontweight="bold", va="baseline")
    for k, text in enumerate(subtitles):
        figure.text(0.01, 1.0 - (0.47 + 0.2 * k) / height, text, fontsize=9.0, va="baseline")
    engine = figure.get_layout_engine()
    assert engine is not None
    engine.set(rect=(0.0, 0.0, 1.0, 1.0 - (0.4 + 0.2 * len(subtitles)) / height))  # type: ignore[call-arg]
    return figure


def _panel(axes: Axes, panel: Panel) -> None:
    colours = iter(LINE_COLOURS * len(panel.curves))
    for curve in panel.curves:
        _curve(axes, panel, curve, FAINT if curve.reference else next(colours))
    axes.set_title(panel.title, loc="left")
    axes.set_xlabel(panel.xlabel)
    axes.set_ylabel(panel.ylabel)
    ends = [float(x) for c in panel.curves for x in (c.x.min(), c.x.max())]
    if max(ends) > min(ends):
        axes.set_xlim(min(ends), max(ends))
    if panel.logarithmic:
        axes.set_yscale("log")
        highest = max(float(c.y.max()) for c in panel.curves)
        lowest = min((float(c.y[c.y > 0.0].min()) for c in panel.curves if (c.y > 0.0).any()), default=1.0)
        if highest > 0.0:
            axes.set_ylim(max(lowest, highest * 10.0**-DECADES) / 3.0, highest * 3.0)
    elif min(float(c.y.min()) for c in panel.curves) < 0.0:
        axes.axhline(0.0, color=FAINT, linewidth=0.5, zorder=0)
    if panel.limit is not None and panel.limit < max(ends):
        axes.axvline(panel.limit, color=BAD, linewidth=0.9, linestyle=(0, (4, 2)))
        axes.text(
            panel.limit, 0.03, " not represented", transform=axes.get_xaxis_transform(), va="bottom",
            fontsize=7.5, color=BAD,
        )  # fmt: skip
    if any(c.label for c in panel.curves):
        axes.legend(loc="upper right", handlelength=1.4)


def _curve(axes: Axes, panel: Panel, curve: Curve, colour: str) -> None:
    shown = (
        curve.y > 10.0**-DECADES * curve.y.max() if panel.logarithmic else np.ones(curve.y.size, dtype=bool)
    )
    width = 2.4 if curve.reference else 1.1
    style: dict[str, Any] = {"color": colour, "linewidth": width, "label": curve.label or None}
    style |= {"alpha": 0.6, "zorder": 1} if curve.reference else {"zorder": 2}
    if panel.steps:
        axes.step(curve.x[shown], curve.y[shown], where="mid", **style)
        return
    dots = panel.logarithmic and shown.sum() <= NODES_AS_DOTS and not curve.reference
    axes.plot(curve.x[shown], curve.y[shown], marker="." if dots else "", markersize=3, **style)
