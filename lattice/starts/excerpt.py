"""Start from an excerpt: a window of a stored field or of a user's array, made periodic.

Along every axis that is cut the window's first fraction is mixed with what follows one length on, so that
it joins itself smoothly; an axis that is taken whole stays as it is. Of a state, times and places are those
of its own frame, as in its picture.
"""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.distance import report_residual
from lattice.starts.options import ExcerptOptions, Report, silent
from lattice.starts.sampler import Moment, Stored, add_samples
from lattice.starts.seams import window_samples
from lattice.starts.sources import Source, describe_source, open_levels
from lattice.starts.stepper import Values
from lattice.starts.streaming import on_root

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]

AXES = "tyx"
SCALARS = {"t": "period", "y": "length_y", "x": "length_x"}
WHOLE = 1e-9
"""Relative difference of a window's length from its axis's below which the axis is whole."""


@dataclass(frozen=True)
class Cut:
    """What an excerpt takes along one axis of a source.

    Parameters
    ----------
    axis : str
        "t", "y" or "x".
    begin, length : float
        Of the window, in the source's coordinate.
    covered : float
        Length of the source's axis.
    nodes : int
        Of the source.
    blend : float
        Fraction of the window that is mixed with its continuation; 0 where the axis is whole.
    """

    axis: str
    begin: float
    length: float
    covered: float
    nodes: int
    blend: float


def excerpt(
    start: ExcerptOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, Values]:
    """Return this rank's part of an excerpt on this lattice, and the values.

    Collective. Rank 0 reads the source slab by slab; no rank holds it whole.

    Parameters
    ----------
    start : ExcerptOptions
        The job's `start` section.
    lattice : Lattice
        The lattice wanted.
    values : dict of str to float
        Scalars of the job, which win over those of the excerpt: another period or length stretches it.
    law : Law
        Must have the components of a stored state's law.
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
        Period and lengths of the window, other scalars of a stored state, overridden by those of the job.

    Raises
    ------
    StateFileError, InputError
        On every rank: a source that cannot be read, a window it does not hold.
    """
    source = on_root(comm, lambda: describe_source(start, law))
    cuts = excerpt_cuts(start, source, law)
    owned = np.zeros((*block.shape, len(law.components)))
    ranges = ((block.t0, block.t1), (block.y0, block.y1), (block.x0, block.x1))
    with ExitStack() as files:
        read = open_levels(start, law, files) if comm.rank == 0 else _unread
        stored = Stored(source.nodes, source.periodic, read)
        moments = _moments(cuts["t"], lattice.nt, *ranges[0])
        carried = {cut.axis: n * cut.covered / cut.length for cut, n in _paired(cuts, lattice)}
        rows = [_matrix(stored, cuts[axis], lattice, ranges["tyx".index(axis)]) for axis in "yx"]
        add_samples(stored, moments, carried["t"], rows[0], rows[1], owned, comm)
    found = {**excerpt_values(start, source, law), **values}
    for line in _told(cuts, law):
        report(line)
    report_residual("excerpt", law, lattice, found, owned, block, comm, report)
    return owned, found


def excerpt_cuts(start: ExcerptOptions, source: Source, law: Law) -> dict[str, Cut]:
    """Return what an excerpt takes along every axis.

    Raises
    ------
    InputError
        For a window that the source does not hold, or that is empty.
    """
    return {axis: _cut(axis, start, source, law) for axis in AXES}


def _cut(axis: str, start: ExcerptOptions, source: Source, law: Law) -> Cut:
    place = AXES.index(axis)
    nodes, covered, periodic = source.nodes[place], source.covers[place], source.periodic[place]
    window = getattr(start, axis)
    if axis == "y" and law.dimensions == 1:
        if window is not None:
            raise InputError(f"start.y must be left out: law {law.name} has one space dimension")
        return Cut(axis, 0.0, 1.0, 1.0, 1, 0.0)
    begin, end = (0.0, covered) if window is None else (float(window[0]), float(window[1]))
    if not end > begin:
        raise InputError(f"start.{axis} must be [from, to] with to > from, got [{begin:g}, {end:g}]")
    if nodes == 1:
        return Cut(axis, begin, end - begin, end - begin, 1, 0.0)
    blend = start.blend if axis == "t" else start.blend_space
    length = end - begin
    if window is not None and not law.symmetries.homogeneous.get(axis, True):
        raise InputError(
            f"start.{axis} must be left out: law {law.name} depends on {axis}, so that no part of its box "
            "can stand for the whole"
        )
    if periodic:
        return Cut(axis, begin, length, covered, nodes, _needed(blend, length, covered))
    _check_held(axis, begin, length, blend, covered * (nodes - 1) / nodes, window is None)
    return Cut(axis, begin, length, covered, nodes, blend)


def _needed(blend: float, length: float, covered: float) -> float:
    """Return the blend of a window of a periodic axis: none where it holds whole periods."""
    turns = length / covered
    whole = round(turns) >= 1 and abs(turns - round(turns)) < WHOLE * round(turns)
    return 0.0 if whole else blend


def _check_held(axis: str, begin: float, length: float, blend: float, last: float, whole: bool) -> None:
    needed = begin + length * (1.0 + blend)
    if begin < 0.0 or needed > last * (1.0 + WHOLE):
        advice = f"give start.{axis}" if whole else "shorten the window or the blend"
        raise InputError(
            f"start.{axis} with its blend takes {begin:g} to {needed:g}, but the array ends at {last:g} and "
            f"does not repeat along {axis}; {advice}, or name the axis in start.periodic"
        )


def excerpt_values(start: ExcerptOptions, source: Source, law: Law) -> Values:
    """Return the scalars of an excerpt: those of a stored state, with the window's period and lengths."""
    cuts = excerpt_cuts(start, source, law)
    found = dict(source.values)
    for axis, name in SCALARS.items():
        if axis == "y" and law.dimensions == 1:
            continue
        if axis == "t" and source.nodes[0] == 1 and start.t is None:
            continue
        found[name] = cuts[axis].length
    return found


def _paired(cuts: dict[str, Cut], lattice: Lattice) -> list[tuple[Cut, int]]:
    return list(zip((cuts[axis] for axis in AXES), lattice.shape, strict=True))


def _moments(cut: Cut, nt: int, first: int, last: int) -> list[Moment]:
    samples = window_samples(nt, cut.length, cut.blend, first, last)
    spacing = cut.covered / cut.nodes
    return [Moment(s.node - first, s.weight, (cut.begin + s.place) / spacing) for s in samples]


def _matrix(stored: Stored, cut: Cut, lattice: Lattice, own: tuple[int, int]) -> Real:
    """Return the matrix from the source's nodes of a space axis to this rank's, blended."""
    axis = AXES.index(cut.axis)
    nodes, spacing = lattice.shape[axis], cut.covered / cut.nodes
    samples = list(window_samples(nodes, cut.length, cut.blend, *own))
    places = [(cut.begin + s.place) / spacing for s in samples]
    rows = stored.rows(axis, places, nodes * cut.covered / cut.length)
    matrix = np.zeros((own[1] - own[0], cut.nodes))
    for sample, row in zip(samples, rows, strict=True):
        matrix[sample.node - own[0]] += sample.weight * row
    return matrix


def _told(cuts: dict[str, Cut], law: Law) -> list[str]:
    axes = [cut for cut in cuts.values() if cut.nodes > 1]
    parts = [f"{c.axis} {c.begin:g} to {c.begin + c.length:g} of {c.covered:.6g}" for c in axes]
    return [f"excerpt: {', '.join(parts)}"]


def _unread(first: int, last: int) -> Real:
    raise AssertionError("only rank 0 reads")
