"""Start from a mosaic: stored states arranged in time and space, their seams blended.

Every member keeps the motion it has in its own file: one that drifts otherwise than the mosaic's frame
slides along its cell as time goes on, and is in place at the middle of the mosaic's period. Neighbours share
a zone about their common seam over which one fades into the other; the seams between the mosaic's end and
its beginning are seams like others.
"""

from __future__ import annotations

from contextlib import ExitStack
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.distance import LISTED, Region, report_residual, residual_field, root_mean_squares
from lattice.starts.layout import Cell, Layout, make_layout
from lattice.starts.options import MosaicOptions, Report, silent
from lattice.starts.sampler import Moment, Stored, add_samples
from lattice.starts.seams import piece_samples
from lattice.starts.sources import Source, describe_state, open_state_levels
from lattice.starts.stepper import Values
from lattice.starts.streaming import ReadLevels, on_root

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]

STRETCHED = 0.02
"""Relative change of a member's size from which on it is told."""


def mosaic(
    start: MosaicOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, Values]:
    """Return this rank's part of a mosaic on this lattice, and the values.

    Collective. Rank 0 reads the members slab by slab; no rank holds one whole.

    Parameters
    ----------
    start : MosaicOptions
        The job's `start` section.
    lattice : Lattice
        The lattice wanted.
    values : dict of str to float
        Scalars of the job, which win over those of the layout: another period or length stretches the
        whole mosaic.
    law : Law
        Must have the components of every member's law.
    block : Block
        The part of the lattice this rank owns.
    comm : MPI.Intracomm
    report : callable
        Called on rank 0 only.

    Returns
    -------
    owned : ndarray, shape block.shape + (components,)
        Without halo.
    values : dict of str to float
        The layout's period, lengths and mean drifts, parameters of the first member, overridden by those of
        the job.

    Raises
    ------
    StateFileError, InputError
        On every rank: a member that cannot be read, a layout that makes no sense.
    """
    layout = on_root(comm, lambda: plan_mosaic(start, law, lattice.nt))
    found = {**layout.values, **values}
    owned = _composed(layout, start.blend, lattice, found, law, block, comm)
    for line in _told(layout, lattice):
        report(line)
    regions = cell_regions(layout, lattice)
    report_residual("mosaic", law, lattice, found, owned, block, comm, report, regions)
    return owned, found


def report_settled(
    start: MosaicOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    owned: Real,
    block: Block,
    comm: MPI.Intracomm,
    report: Report,
) -> None:
    """Report what has become of a mosaic: the residual of each member, and how far it is from what it was.

    Collective. The change is the root mean square difference from the layout on the same nodes of its own
    box, over the root mean square of both.

    Parameters
    ----------
    start : MosaicOptions
        The job's `start` section.
    lattice, values, law
        Of the field solved for.
    owned : ndarray, shape block.shape + (components,)
        This rank's part of it.
    block : Block
    comm : MPI.Intracomm
    report : callable
    """
    layout = on_root(comm, lambda: plan_mosaic(start, law, lattice.nt))
    regions = cell_regions(layout, lattice)
    residual = residual_field(law, lattice, values, owned, block, comm)
    composed = _composed(layout, start.blend, lattice, layout.values, law, block, comm)
    fields = (composed - owned, composed, owned)
    changes, *sizes = (root_mean_squares(field, block, regions, comm) for field in fields)
    residuals = (np.nan, [np.nan] * len(regions))
    if residual is not None:
        residuals = root_mean_squares(residual, block, regions, comm)

    def line(name: str, size: float, change: float, was: float, now: float) -> str:
        share = 100.0 * change / max(np.sqrt(0.5 * (was * was + now * now)), 1e-300)
        return f"mosaic: {name}: residual_rms {size:.3e}, changed by {share:.0f} %"

    report(line("solved", residuals[0], changes[0], sizes[0][0], sizes[1][0]))
    parts = zip(regions, residuals[1], changes[1], sizes[0][1], sizes[1][1], strict=True)
    for region, size, change, was, now in list(parts)[:LISTED]:
        report(line(f"  {region.name}", size, change, was, now))


def _composed(
    layout: Layout,
    blend: float,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
) -> Real:
    """Return this rank's part of a mosaic. Collective."""
    owned = np.zeros((*block.shape, len(law.components)))
    for cell in layout.cells:
        _add_cell(cell, layout, blend, lattice, values, law, block, comm, owned)
    return owned


def plan_mosaic(start: MosaicOptions, law: Law, nt: int) -> Layout:
    """Return the layout of a mosaic: which state stands where, and the box. Not collective.

    Raises
    ------
    StateFileError, InputError
        If a member cannot be read, or the layout makes no sense.
    """
    sources: dict[str, Source] = {n: describe_state(m.file, law) for n, m in start.members.items()}
    return make_layout(start, law, sources, nt)


def cell_regions(layout: Layout, lattice: Lattice) -> list[Region]:
    """Return the part of the lattice that belongs to each cell, up to the middle of its seams."""
    return [Region(cell_name(cell, layout), _region(cell, layout, lattice)) for cell in layout.cells]


def cell_name(cell: Cell, layout: Layout) -> str:
    """Return a member's name with its place, counted from 1."""
    lines = f"line {cell.line + 1}, " if len(layout.ends[1]) > 2 else ""
    return f"{cell.member.name} (row {cell.row + 1}, {lines}column {cell.column + 1})"


def _region(cell: Cell, layout: Layout, lattice: Lattice) -> Block:
    bounds: list[int] = []
    for number, ends, nodes in zip(cell.numbers, layout.ends, lattice.shape, strict=True):
        for end in ends[number : number + 2]:
            bounds.append(int(np.ceil(end / ends[-1] * nodes - 1e-9)))
    return Block(*bounds)


def _add_cell(
    cell: Cell,
    layout: Layout,
    blend: float,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    owned: Real,
) -> None:
    """Add a cell's share to this rank's block. Collective."""
    source, reflection = cell.member.source, cell.member.reflection
    with ExitStack() as files:
        read: ReadLevels = open_state_levels(cell.member.file, files) if comm.rank == 0 else _unread
        stored = Stored(source.nodes, source.periodic, read)
        rows_y = _space_rows(1, cell, layout, blend, lattice, stored, (block.y0, block.y1))
        rows_x = _space_rows(2, cell, layout, blend, lattice, stored, (block.x0, block.x1))
        needed = rows_y.any() and rows_x.any()
        moments = _moments(cell, layout, blend, lattice, values, law, block) if needed else []
        carried = _carried(0, cell, layout, lattice)
        signs = None if reflection is None else reflection.signs
        pair = None
        if law.rotating_pair is not None:
            pair = (law.components.index(law.rotating_pair[0]), law.components.index(law.rotating_pair[1]))
        add_samples(stored, moments, carried, rows_y, rows_x, owned, comm, signs, pair)


def _space_rows(
    axis: int,
    cell: Cell,
    layout: Layout,
    blend: float,
    lattice: Lattice,
    stored: Stored,
    own: tuple[int, int],
) -> Real:
    """Return the matrix from a member's nodes to this rank's along y or x, with the cell's weights."""
    ends, number, nodes = layout.ends[axis], cell.numbers[axis], lattice.shape[axis]
    samples = list(piece_samples(ends, number, blend, nodes, *own))
    places = [_stored_place(axis, s.place, cell, layout) for s in samples]
    rows = stored.rows(axis, places, _carried(axis, cell, layout, lattice))
    matrix = np.zeros((own[1] - own[0], stored.nodes[axis]))
    for sample, row in zip(samples, rows, strict=True):
        matrix[sample.node - own[0]] += sample.weight * row
    return matrix


def _stored_place(axis: int, place: float, cell: Cell, layout: Layout) -> float:
    """Return where in a member's file, in nodes, a place of the mosaic lies."""
    source, begin = cell.member.source, layout.ends[axis][cell.numbers[axis]]
    inside = (place - begin) / layout.stretch(cell)[axis] + cell.member.shifts[axis]
    if _reflected(axis, cell):
        inside = -inside
    return inside / (source.covers[axis] / source.nodes[axis])


def _reflected(axis: int, cell: Cell) -> bool:
    reflection = cell.member.reflection
    return reflection is not None and (False, reflection.y, reflection.x)[axis]


def _carried(axis: int, cell: Cell, layout: Layout, lattice: Lattice) -> float:
    """Return how many of the mosaic's nodes a stored length of the member gets."""
    length = cell.member.source.covers[axis] * layout.stretch(cell)[axis]
    return lattice.shape[axis] * length / layout.ends[axis][-1]


def _moments(
    cell: Cell, layout: Layout, blend: float, lattice: Lattice, values: Values, law: Law, block: Block
) -> list[Moment]:
    """Return what this rank's levels take of a member, with what it has slid and turned by then."""
    if lattice.nt == 1:
        return [Moment(0, 1.0, _stored_place(0, 0.0, cell, layout))]
    ends, slips = layout.ends[0], _slips(cell, layout, values, law)
    middle, stretch, covers = 0.5 * ends[-1], layout.stretch(cell), cell.member.source.covers
    moments = []
    for sample in piece_samples(ends, cell.row, blend, lattice.nt, block.t0, block.t1):
        time = sample.place - middle
        slide = [0.0, 0.0]
        for axis in (1, 2):
            moved = -slips["tyx"[axis]] * time / (stretch[axis] * covers[axis])
            slide[axis - 1] = -moved if _reflected(axis, cell) else moved
        place = _stored_place(0, sample.place, cell, layout)
        level, angle = sample.node - block.t0, slips["rotation"] * time
        moments.append(Moment(level, sample.weight, place, (slide[0], slide[1]), angle))
    return moments


def _slips(cell: Cell, layout: Layout, values: Values, law: Law) -> dict[str, float]:
    """Return how much faster than the mosaic's frame a member drifts and turns, in the layout's own units.

    The job may stretch the layout; its drifts then are those of the stretched one.
    """
    slow = values["period"] / layout.values["period"]
    slips = {"y": 0.0, "x": 0.0, "rotation": 0.0}
    for axis in "xy"[: law.dimensions]:
        wide = values[f"length_{axis}"] / layout.values[f"length_{axis}"]
        frame = values.get(f"drift_{axis}", 0.0) * slow / wide
        slips[axis] = layout.speed(cell, f"drift_{axis}") - frame
    if law.rotating_pair is not None:
        slips["rotation"] = layout.speed(cell, "rotation") - values.get("rotation", 0.0) * slow
    return slips


def _told(layout: Layout, lattice: Lattice) -> list[str]:
    names = [name for name in ("period", "length_x", "length_y") if name in layout.values]
    box = ", ".join(f"{n} {layout.values[n]:.6g}" for n in names if n != "period" or lattice.nt > 1)
    lines = [f"mosaic: {len(layout.cells)} members, {box}"]
    for cell in layout.cells:
        stretch = layout.stretch(cell)
        changed = [
            f"{100.0 * (s - 1.0):+.0f} % in {a}"
            for s, a in zip(stretch, "tyx", strict=True)
            if abs(s - 1.0) > STRETCHED
        ]
        if changed:
            lines.append(f"mosaic:   {cell_name(cell, layout)} stretched by {', '.join(changed)}")
    parameters = {
        n
        for c in layout.cells
        for n, v in c.member.source.values.items()
        if n in layout.values
        and n not in ("period", "length_x", "length_y", "rotation")
        and not n.startswith("drift_")
        and v != layout.values[n]
    }
    if parameters:
        lines.append(f"mosaic: caution: members differ in {', '.join(sorted(parameters))}")
    return lines


def _unread(first: int, last: int) -> Real:
    raise AssertionError("only rank 0 reads")
