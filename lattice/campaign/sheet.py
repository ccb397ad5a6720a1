"""The contact sheet of a campaign: every distinct state in a small picture, all on one colour scale.

With time and one space dimension: the space-time plane, t upwards. In two dimensions and time: a snapshot.
Without time: a profile or a map.
"""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from lattice.campaign.tally import STATE
from lattice.errors import LatticeError
from lattice.show.colours import diverging
from lattice.show.panels import FAINT, LINE_COLOURS, STYLE, Limits, symmetric_limits, trigonometric, wrapped
from lattice.show.planes import Plane, extent, read_line, read_plane
from lattice.store.replacement import discard, partial_path, publish
from lattice.store.statefile import StateFile
from lattice.store.statemeta import StateMeta

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from lattice.campaign.folder import CampaignFolder
    from lattice.campaign.tally import Row

MOST_PANELS = 60
"""More would be too small to see; the sheet says how many there are."""
COLUMNS = 6
PIXELS = 400
LABEL_LETTERS = 32
DOTS_PER_INCH = 130
PANEL_WIDTH, PANEL_HEIGHT, LINE_HEIGHT = 2.1, 2.2, 1.3


@dataclass(frozen=True)
class Panel:
    """What is drawn of one state.

    Parameters
    ----------
    row : Row
    meta : StateMeta
    plane : Plane or None
        None where it is a line.
    line : ndarray or None
    axes : tuple of str
        Axes of the plane (vertical, horizontal), or the line's.
    """

    row: Row
    meta: StateMeta
    plane: Plane | None
    line: npt.NDArray[np.float64] | None
    axes: tuple[str, ...]


def draw_sheet(folder: CampaignFolder, rows: Sequence[Row]) -> Path | None:
    """Draw all distinct states whose field is kept; return the picture's path, None where there is none.

    Raises
    ------
    LatticeError
        Where the picture cannot be written.
    """
    states = [row for row in rows if row.outcome == STATE]
    panels = []
    for row in states[:MOST_PANELS]:
        with suppress(LatticeError):
            panels.append(_read(folder, row))
    if not panels:
        discard(folder.sheet)
        return None
    import matplotlib as mpl

    with mpl.rc_context(STYLE):
        _save(_figure(panels, len(states)), folder.sheet)
    return folder.sheet


def _read(folder: CampaignFolder, row: Row) -> Panel:
    with StateFile(folder.member(row.member).state) as file:
        meta = file.meta
        component = meta.components[0]
        periodic = meta.lattice.nt > 1
        if meta.dimensions == 1 and not periodic:
            return Panel(row, meta, None, read_line(file, component, "x", {"t": 0}), ("x",))
        axes = ("y", "x") if meta.dimensions == 2 else ("t", "x")
        return Panel(row, meta, read_plane(file, component, *axes, {"t": 0}, PIXELS), None, axes)


def _figure(panels: Sequence[Panel], states: int) -> Figure:
    from matplotlib.figure import Figure

    columns = min(COLUMNS, max(3, len(panels)))
    lines = -(-len(panels) // columns)
    high = LINE_HEIGHT if all(panel.plane is None for panel in panels) else PANEL_HEIGHT
    size = (columns * PANEL_WIDTH + 1.0, lines * (high + 0.75) + 0.9)
    figure = Figure(figsize=size, dpi=DOTS_PER_INCH, layout="constrained")
    grid = figure.subplots(lines, columns, squeeze=False)
    limits = _limits(panels)
    widest = max(extent(panel.meta, panel.axes[-1]) for panel in panels)
    tallest = max(extent(panel.meta, panel.axes[0]) for panel in panels)
    image = None
    for place, axes in enumerate(grid.ravel()):
        if place < len(panels):
            image = _draw(axes, panels[place], limits, (tallest, widest)) or image
        else:
            axes.set_axis_off()
    if image is not None:
        bar = figure.colorbar(image, ax=grid, fraction=0.02, aspect=40, pad=0.01)
        bar.ax.tick_params(labelsize=7)
        bar.set_label(f"{panels[0].meta.components[0]} (dimensionless)")
    title = "\n".join(wrapped(_title(panels, states).split(" "), " ", size[0] * 10))
    figure.suptitle(title, x=0.01, ha="left", fontsize=10, fontweight="bold")
    return figure


def _limits(panels: Sequence[Panel]) -> Limits:
    fields = [panel.plane.values if panel.plane is not None else panel.line for panel in panels]
    return symmetric_limits([field for field in fields if field is not None])


def _title(panels: Sequence[Panel], states: int) -> str:
    shown = "" if len(panels) == states else f", {len(panels)} of them shown"
    meta = panels[0].meta
    return f"{meta.title or meta.law}: {states} distinct state(s){shown}; all on one scale"


def _draw(axes: Axes, panel: Panel, limits: Limits, largest: tuple[float, float]) -> Any:
    """Draw one state; space and time have the same scale in every panel."""
    axes.set_title(_label(panel), loc="left", fontsize=7.5)
    axes.tick_params(labelsize=6.5, length=2, pad=1.5)
    vertical = panel.axes[0] if panel.plane is not None else panel.meta.components[0]
    axes.set_xlabel(panel.axes[-1], fontsize=7, labelpad=0, color=FAINT)
    axes.set_ylabel(vertical, fontsize=7, labelpad=0, color=FAINT)
    wide = extent(panel.meta, panel.axes[-1])
    if panel.plane is None:
        assert panel.line is not None
        fine = trigonometric(panel.line, 4)
        axes.plot(np.linspace(0.0, wide, len(fine)), fine, color=LINE_COLOURS[0], linewidth=1.1)
        axes.set_xlim(0.0, largest[1])
        axes.set_ylim(limits.centre - 1.06 * limits.half, limits.centre + 1.06 * limits.half)
        return None
    high = extent(panel.meta, panel.axes[0])
    image = axes.imshow(
        panel.plane.values,
        origin="lower",
        aspect="auto",
        cmap=diverging(),
        vmin=limits.ends[0],
        vmax=limits.ends[1],
        extent=(0.0, wide, 0.0, high),
        interpolation="bilinear",
        interpolation_stage="data",
    )
    axes.set_xlim(0.0, largest[1])
    axes.set_ylim(0.0, largest[0])
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    if panel.axes == ("y", "x"):
        axes.set_aspect("equal")
    return image


def _label(panel: Panel) -> str:
    """Return number, sizes and kind in two or three short lines."""
    values, row = panel.meta.values, panel.row
    sizes = [f"T = {values['period']:.5g}"] if panel.meta.lattice.nt > 1 else []
    sizes += [f"L = {values['length_x']:.5g}"]
    sizes += [f"x {values['length_y']:.5g}"] if panel.meta.dimensions == 2 else []
    kind = row.record.kind if row.record else ""
    repeats = row.record.repeats if row.record else ()
    if any(count > 1 for count in repeats):
        kind += f", repeats {' x '.join(map(str, repeats))}"
    varied = [f"{key.rpartition('.')[2]} {value:g}" for key, value in _numbers(row).items()]
    first = wrapped([f"member {row.member}", *varied], ", ", LABEL_LETTERS)[0]
    return "\n".join(line for line in (first, " ".join(sizes), kind) if line)


def _numbers(row: Row) -> dict[str, float]:
    """Return the numbers a member differs by, without those of the box, which the state itself tells."""
    plain = {key: value for key, value in row.values.items() if not key.startswith("box.")}
    return {key: value for key, value in plain.items() if isinstance(value, (int, float))}


def _save(figure: Figure, out: Path) -> None:
    partial = partial_path(out)
    try:
        figure.savefig(partial, format="png", dpi=DOTS_PER_INCH)
        publish(partial, out)
    except OSError as error:
        discard(partial)
        raise LatticeError(f"cannot write picture {out}: {error.strerror or error}") from error
