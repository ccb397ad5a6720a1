"""Pictures of stored states, one layout per kind of state.

One space dimension and time: the space-time plane and spectra. Two and time: a sheet of snapshots, a
space-time cut and spectra. Without time: a profile or a map. A cut: one plane or line.
"""

from __future__ import annotations

import math
import os
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.errors import InputError, LatticeError
from lattice.show.panels import (
    LINE_COLOURS,
    STYLE,
    Limits,
    axis_label,
    colour_bar,
    field_panel,
    header,
    line_panel,
    spectrum_panel,
    symmetric_limits,
)
from lattice.show.planes import Plane, extent, nearest_node, nodes_of, read_line, read_plane
from lattice.show.spectra import spectrum
from lattice.store.replacement import discard, partial_path, publish
from lattice.store.statefile import StateFile
from lattice.store.statemeta import StateMeta

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

FORMATS = ("png", "pdf", "svg")
DOTS_PER_INCH = 150
SMALLEST = 0.7
"""Smallest size of a picture in units of its natural one; below, labels run into each other."""
SNAPSHOTS_ALONE, SNAPSHOTS_IN_ROW = 6, 4
"""Snapshots of a field of one component (in two rows), and per component of several."""


@dataclass(frozen=True)
class PictureOptions:
    """What the user may choose about a picture.

    Parameters
    ----------
    cut : mapping of str to float
        Coordinates held fixed, by axis: leaves a plane or a line. Empty for the usual picture.
    component : str, optional
        The only component shown; all unless given.
    size : tuple of float, optional
        Width and height in inches.
    format : str, optional
        "png", "pdf" or "svg"; by the output's suffix unless given, png where it has none.
    """

    cut: Mapping[str, float] = field(default_factory=dict)
    component: str | None = None
    size: tuple[float, float] | None = None
    format: str | None = None


def plot_state(
    path: str | os.PathLike[str], out: str | os.PathLike[str], options: PictureOptions | None = None
) -> Path:
    """Draw a stored state and return the picture's path.

    Not collective: one rank draws, in memory bounded whatever the lattice.

    Parameters
    ----------
    path : path-like
        State file.
    out : path-like
        Picture; replaced in one step.
    options : PictureOptions, optional
        Cut, component, size and format.

    Raises
    ------
    StateFileError, InputError
        If the file or an option cannot be used.
    LatticeError
        If the picture cannot be written.
    """
    import matplotlib as mpl

    options = options or PictureOptions()
    form = picture_format(out, options.format)
    with StateFile(path) as file, mpl.rc_context(STYLE):
        figure = draw(file, options)
        _save(figure, Path(out), form)
    return Path(out)


def draw(file: StateFile, options: PictureOptions) -> Figure:
    """Return the figure of an open state file."""
    meta = file.meta
    components = _components(meta, options.component)
    if options.cut:
        return _draw_cut(file, components, options)
    if meta.lattice.nt == 1:
        layout = _draw_profile if meta.dimensions == 1 else _draw_maps
    else:
        layout = _draw_space_time if meta.dimensions == 1 else _draw_sheet
    return layout(file, components, options.size)


def picture_format(out: str | os.PathLike[str], wanted: str | None) -> str:
    """Return the format of a picture from the option or the file's suffix.

    Examples
    --------
    >>> picture_format("film.svg", None), picture_format("film", None)
    ('svg', 'png')
    """
    form = (wanted or Path(out).suffix.lstrip(".") or "png").lower()
    if form not in FORMATS:
        raise InputError(f"must be one of {', '.join(FORMATS)}, got {form!r}", key="--format")
    return form


def _components(meta: StateMeta, wanted: str | None) -> tuple[str, ...]:
    if wanted is None:
        return meta.components
    if wanted not in meta.components:
        raise InputError(f"must be one of {', '.join(meta.components)}, got {wanted!r}", key="--component")
    return (wanted,)


def _figure(wanted: tuple[float, float] | None, natural: tuple[float, float]) -> Figure:
    """Return an empty figure of the wanted size in inches, the natural one unless given."""
    from matplotlib.figure import Figure

    size = wanted or natural
    least = tuple(math.ceil(10.0 * SMALLEST * inches) / 10.0 for inches in natural)
    if size[0] < least[0] or size[1] < least[1]:
        raise InputError(
            f"must be at least {least[0]:.1f}x{least[1]:.1f} for this picture, got {size[0]:g}x{size[1]:g}; "
            "raise it, or show one component or a cut",
            key="--size",
        )
    return Figure(figsize=size, dpi=DOTS_PER_INCH, layout="constrained")


def _draw_space_time(
    file: StateFile, components: tuple[str, ...], size: tuple[float, float] | None
) -> Figure:
    """Space-time planes side by side, t upwards; spectra to their right."""
    meta = file.meta
    figure = _figure(size, (5.4 + 4.0 * len(components), 6.4))
    grid = figure.add_gridspec(2, len(components) + 1, width_ratios=[1.35] * len(components) + [1.0])
    for column, component in enumerate(components):
        axes = figure.add_subplot(grid[:, column])
        _plane(figure, axes, file, component, ("t", "x"), {})
        _inner_labels(axes, left=column == 0, bottom=True)
    for row, axis in enumerate(("x", "t")):
        _spectra(figure.add_subplot(grid[row, -1]), file, components, axis)
    header(figure, meta)
    return figure


def _plane(
    figure: Figure,
    axes: Axes,
    file: StateFile,
    component: str,
    plane_axes: tuple[str, str],
    at: Mapping[str, int],
) -> None:
    """Draw one component on a plane with its own colour bar."""
    vertical, horizontal = plane_axes
    plane = read_plane(file, component, vertical, horizontal, at)
    limits = symmetric_limits([plane.values])
    lengths = (extent(file.meta, vertical), extent(file.meta, horizontal))
    image = field_panel(axes, plane, limits, lengths)
    if vertical == "y":
        axes.set_aspect("equal")
    axes.set_xlabel(axis_label(horizontal))
    axes.set_ylabel(axis_label(vertical))
    axes.set_title(component, loc="left")
    colour_bar(figure, image, axes, component, limits)


def _spectra(axes: Axes, file: StateFile, components: tuple[str, ...], axis: str) -> None:
    lattice = file.meta.lattice
    order = {"t": lattice.order_t, "y": lattice.order_y, "x": lattice.order_x}[axis]
    spectrum_panel(axes, [spectrum(file, component, axis) for component in components], order)


def _draw_sheet(file: StateFile, components: tuple[str, ...], size: tuple[float, float] | None) -> Figure:
    """Snapshots at even times and a space-time cut per component; spectra below."""
    rows, columns = (2, SNAPSHOTS_ALONE // 2) if len(components) == 1 else (1, SNAPSHOTS_IN_ROW)
    band_height = rows * _snapshot_height(file.meta, columns) + 0.3
    above, below = band_height * len(components), 2.7
    figure = _figure(size, (12.0, above + below + 1.0))
    fields, spectra = figure.subfigures(2, 1, height_ratios=[above, below])
    bands = np.atleast_1d(fields.subfigures(len(components), 1))
    for band, component in zip(bands, components, strict=True):
        _band(band, file, component, rows, columns)
    for axes, axis in zip(spectra.subplots(1, 3), ("x", "y", "t"), strict=True):
        _spectra(axes, file, components, axis)
    header(figure, file.meta)
    return figure


def _snapshot_height(meta: StateMeta, columns: int) -> float:
    """Return the inches a snapshot of the right shape takes in a sheet 12 inches wide, with its title."""
    wide = 8.2 / columns
    return min(max(wide * extent(meta, "y") / extent(meta, "x"), 1.2), 5.0) + 0.35


def _band(band: Any, file: StateFile, component: str, rows: int, columns: int) -> None:
    """Draw the snapshots and the cut of one component."""
    meta = file.meta
    shown = rows * columns
    middle = meta.lattice.ny // 2
    levels = sorted({round(i * meta.lattice.nt / shown) % meta.lattice.nt for i in range(shown)})
    planes = [read_plane(file, component, "y", "x", {"t": level}) for level in levels]
    cut = read_plane(file, component, "t", "x", {"y": middle})
    limits = symmetric_limits([p.values for p in planes] + [cut.values])
    grid = band.add_gridspec(rows, columns + 1, width_ratios=[1.0] * columns + [1.05])
    for i, (level, plane) in enumerate(zip(levels, planes, strict=True)):
        axes = band.add_subplot(grid[i // columns, i % columns])
        _snapshot(axes, meta, plane, limits, level)
        _inner_labels(axes, left=i % columns == 0, bottom=i + columns >= len(levels))
    axes = band.add_subplot(grid[:, -1])
    image = field_panel(axes, cut, limits, (extent(meta, "t"), extent(meta, "x")))
    axes.set_title(f"{component}, cut at y = {middle * extent(meta, 'y') / meta.lattice.ny:.5g}", loc="left")
    axes.set_xlabel(axis_label("x"))
    axes.set_ylabel(axis_label("t"))
    colour_bar(band, image, axes, component, limits)


def _snapshot(axes: Axes, meta: StateMeta, plane: Plane, limits: Limits, level: int) -> None:
    field_panel(axes, plane, limits, (extent(meta, "y"), extent(meta, "x")))
    axes.set_aspect("equal")
    axes.set_title(f"t = {level * extent(meta, 't') / meta.lattice.nt:.5g}", loc="left")
    axes.set_xlabel(axis_label("x"))
    axes.set_ylabel(axis_label("y"))


def _inner_labels(axes: Axes, left: bool, bottom: bool) -> None:
    """Keep the labels of a panel's axes only at the left and bottom edge of its group."""
    if not left:
        axes.set_ylabel("")
        axes.tick_params(labelleft=False)
    if not bottom:
        axes.set_xlabel("")
        axes.tick_params(labelbottom=False)


def _draw_profile(file: StateFile, components: tuple[str, ...], size: tuple[float, float] | None) -> Figure:
    """The profile of a steady state or travelling wave, and its spectrum."""
    figure = _figure(size, (10.5, 2.4 + 2.6 * len(components)))
    grid = figure.add_gridspec(len(components), 2, width_ratios=[1.6, 1.0])
    _lines(figure, grid, file, components, "x", {})
    _spectra(figure.add_subplot(grid[:, 1]), file, components, "x")
    header(figure, file.meta, _kind(file.meta))
    return figure


def _lines(
    figure: Figure, grid: Any, file: StateFile, components: tuple[str, ...], axis: str, at: Mapping[str, int]
) -> None:
    meta = file.meta
    positions = meta.coordinate(axis)
    for row, component in enumerate(components):
        axes = figure.add_subplot(grid[row, 0])
        line = read_line(file, component, axis, at)
        line_panel(axes, positions, line, extent(meta, axis), LINE_COLOURS[row % len(LINE_COLOURS)])
        axes.set_ylabel(f"{component} (dimensionless)")
        axes.set_xlabel(axis_label(axis))
        _inner_labels(axes, left=True, bottom=row == len(components) - 1)


def _draw_maps(file: StateFile, components: tuple[str, ...], size: tuple[float, float] | None) -> Figure:
    """Maps of a steady state or travelling wave side by side; spectra below."""
    figure = _figure(size, (max(8.0, 5.6 * len(components)), 8.6))
    above, below = figure.subfigures(2, 1, height_ratios=[1.7, 1.0])
    for axes, component in zip(above.subplots(1, len(components), squeeze=False)[0], components, strict=True):
        _plane(above, axes, file, component, ("y", "x"), {"t": 0})
    for axes, axis in zip(below.subplots(1, 2), ("x", "y"), strict=True):
        _spectra(axes, file, components, axis)
    header(figure, file.meta, _kind(file.meta))
    return figure


def _kind(meta: StateMeta) -> str:
    if any(meta.values.get(name, 0.0) != 0.0 for name in ("drift_x", "drift_y")):
        return "travelling wave, in its own frame"
    turning = meta.values.get("rotation", 0.0) != 0.0
    return "rotating wave, in its own frame" if turning else "steady state"


def _draw_cut(file: StateFile, components: tuple[str, ...], options: PictureOptions) -> Figure:
    """One plane or line per component where some coordinates are held."""
    meta = file.meta
    at = {axis: nearest_node(meta, axis, value) for axis, value in options.cut.items()}
    left = [axis for axis in meta.axes if axis not in at and nodes_of(meta, axis) > 1]
    subject = "cut at " + ", ".join(
        f"{axis} = {node * extent(meta, axis) / nodes_of(meta, axis):.5g}" for axis, node in at.items()
    )
    if not left:
        raise InputError("must leave a line or a plane; hold fewer coordinates", key="--cut")
    if len(left) == 1:
        figure = _figure(options.size, (8.5, 1.6 + 2.6 * len(components)))
        _lines(figure, figure.add_gridspec(len(components), 1), file, components, left[0], at)
    else:
        figure = _figure(options.size, (max(6.5, 5.6 * len(components)), 6.2))
        for axes, component in zip(
            figure.subplots(1, len(components), squeeze=False)[0], components, strict=True
        ):
            _plane(figure, axes, file, component, (left[0], left[1]), at)
    header(figure, meta, subject)
    return figure


def _save(figure: Figure, out: Path, form: str) -> None:
    partial = partial_path(out)
    # Dates would make every file of the same state another one.
    undated: dict[str, dict[str, Any]] = {"svg": {"Date": None}, "pdf": {"CreationDate": None}, "png": {}}
    try:
        figure.savefig(partial, format=form, dpi=DOTS_PER_INCH, metadata=undated[form])
        publish(partial, out)
    except OSError as error:
        discard(partial)
        raise LatticeError(
            f"cannot write picture {out}: {error.strerror or error}; choose another path"
        ) from error
