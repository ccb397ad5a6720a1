"""Compose fields and keep them in state files: excerpts and mosaics, to look at, to solve, to compose again.

A composed field is no solution: its file says `composed, not solved`, and its residual says how far it is
from one.
"""

from __future__ import annotations

import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts import STARTS
from lattice.starts.distance import residual_field
from lattice.starts.excerpt import excerpt_cuts, excerpt_values
from lattice.starts.layout import Layout
from lattice.starts.mosaic import plan_mosaic
from lattice.starts.options import ExcerptOptions, MemberOptions, MosaicOptions, Report, silent
from lattice.starts.sources import Source, describe_source, stored_law
from lattice.starts.stepper import Values
from lattice.starts.streaming import on_root
from lattice.store.statemeta import COMPOSED, StateMeta

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]
Path = str | os.PathLike[str]
Nodes = Mapping[str, int]

FEWEST = 16
"""Fewest nodes of an axis that is cut or composed: enough for any order."""


@dataclass(frozen=True)
class Composition:
    """What is to be composed: the start, the lattice it is put on, and the scalars it gives."""

    kind: str
    start: ExcerptOptions | MosaicOptions
    law: Law
    lattice: Lattice
    values: Values


def excerpt_state(
    source: Path,
    out: Path,
    *,
    t: Sequence[float] | None = None,
    x: Sequence[float] | None = None,
    y: Sequence[float] | None = None,
    blend: float = 0.3,
    blend_space: float = 0.5,
    nodes: Nodes | None = None,
    coarsen: float = 1.0,
    comm: MPI.Intracomm | None = None,
    report: Report = silent,
) -> StateMeta:
    """Cut a window of a stored state, make it periodic, and keep it as a state file that is not solved.

    Collective over `comm`. The window's frame is that of the state, as in its picture.

    Parameters
    ----------
    source : path-like
        A state file.
    out : path-like
        The file to write.
    t, x, y : (float, float), optional
        Where the window begins and ends; the whole axis unless given.
    blend, blend_space : float
        Fraction of the window that is blended with what follows it, in time and in space.
    nodes : dict of str to int, optional
        Any of `nt`, `nx`, `ny`; for the others the state's spacings are kept.
    coarsen : float
        Factor by which those spacings become wider: damped steps need no fine lattice, and a solve refines.
    comm : MPI.Intracomm, optional
        The ranks; this process alone unless given.
    report : callable
        Takes lines of text.

    Returns
    -------
    StateMeta
        The record of the file written: lattice, scalars, residual_rms.

    Raises
    ------
    StateFileError, InputError
        For a file that cannot be read or a window it does not hold.
    """
    comm = _ranks(comm)
    options = ExcerptOptions(os.fspath(source), None, t, x, y, blend, blend_space)
    planned = on_root(comm, lambda: plan_excerpt(options, nodes or {}, coarsen))
    return write_composition(planned, out, comm, report)


def mosaic_states(
    rows: Sequence[str],
    members: Mapping[str, Path | Mapping[str, Any]],
    out: Path,
    *,
    blend: float = 0.5,
    nodes: Nodes | None = None,
    coarsen: float = 1.0,
    comm: MPI.Intracomm | None = None,
    report: Report = silent,
) -> StateMeta:
    """Arrange stored states in time and space, blend their seams, keep the field as one that is not solved.

    Collective over `comm`.

    Parameters
    ----------
    rows : sequence of str
        Names of members, one text for each time, the earliest first; in it the names follow x, and in two
        dimensions slashes part the lines along y. `["a b", "b a"]` has a before b at small x.
    members : dict
        For every name a state file, or a dict with `file` and any of `repeat_t`, `repeat_x`, `repeat_y`,
        `shift_t`, `shift_x`, `shift_y`, `reflect` ("x", "y", "xy" or "sign"), `period`, `length_x` and
        `length_y`.
    out : path-like
        The file to write.
    blend : float
        Width of the zone that neighbours share, as a fraction of the shorter one.
    nodes : dict of str to int, optional
        Any of `nt`, `nx`, `ny`; for the others the finest of the members' spacings is kept.
    coarsen : float
        Factor by which that spacing becomes wider: damped steps need no fine lattice, and a solve refines.
    comm : MPI.Intracomm, optional
        The ranks; this process alone unless given.
    report : callable
        Takes lines of text.

    Returns
    -------
    StateMeta
        The record of the file written: lattice, scalars, residual_rms.

    Raises
    ------
    StateFileError, InputError
        For a member that cannot be read, a layout that makes no sense.
    """
    comm = _ranks(comm)
    options = MosaicOptions(tuple(rows), {name: _member(given) for name, given in members.items()}, blend)
    planned = on_root(comm, lambda: plan_composed_mosaic(options, nodes or {}, coarsen))
    return write_composition(planned, out, comm, report)


def plan_excerpt(options: ExcerptOptions, nodes: Nodes, coarsen: float = 1.0) -> Composition:
    """Return what an excerpt of a state will be. Not collective."""
    law, lattice = _law_and_lattice(options.file)
    source = describe_source(options, law)
    cuts = excerpt_cuts(options, source, law)
    found = {}
    for axis, name in zip("tyx", ("nt", "ny", "nx"), strict=True):
        cut = cuts[axis]
        kept = cut.nodes * cut.length / cut.covered / coarsen
        found[name] = _count(name, kept, nodes, fewest=min(cut.nodes, FEWEST))
    values = {**law.defaults, **excerpt_values(options, source, law)}
    if source.nodes[0] == 1:
        values["period"] = 1.0
    return Composition("excerpt", options, law, _lattice(lattice, found), values)


def plan_composed_mosaic(options: MosaicOptions, nodes: Nodes, coarsen: float = 1.0) -> Composition:
    """Return what a mosaic of states will be. Not collective."""
    if not options.members:
        raise InputError("a mosaic needs members; give each name of its rows a state file")
    law, lattice = _law_and_lattice(next(iter(options.members.values())).file)
    counts = [_law_and_lattice(member.file)[1].nt for member in options.members.values()]
    timed = max(counts) > 1 or len(options.rows) > 1 or nodes.get("nt", 1) > 1
    layout = plan_mosaic(options, law, 2 if timed else 1)
    found = {}
    for place, name in enumerate(("nt", "ny", "nx")):
        fewest = 1 if place == 0 and not timed else FEWEST
        found[name] = _count(name, _finest(layout, place) / coarsen, nodes, fewest)
    if law.dimensions == 1:
        found["ny"] = 1
    return Composition("mosaic", options, law, _lattice(lattice, found), {**law.defaults, **layout.values})


def write_composition(
    planned: Composition, out: Path, comm: MPI.Intracomm, report: Report = silent, job_text: str = ""
) -> StateMeta:
    """Compose, and write the state file. Collective; return its record."""
    from mpi4py import MPI

    from lattice.store.statefile import write_state
    from lattice.store.versions import versions
    from lattice.system.operator import FieldOperator

    law, lattice = planned.law, planned.lattice
    operator = FieldOperator(law, lattice, comm)
    block = operator.blocks.block
    operator.destroy()
    start = STARTS[planned.kind]
    owned, values = start(planned.start, lattice, planned.values, law, block, comm, report)
    residual = residual_field(law, lattice, values, owned, block, comm)
    square, largest = math.nan, math.nan
    if residual is not None:
        total = comm.allreduce(float((residual * residual).sum()))
        square = math.sqrt(total / (lattice.nodes * len(law.components)))
        largest = comm.allreduce(float(np.abs(residual).max()), op=MPI.MAX)
    meta = StateMeta.of_law(
        law,
        lattice,
        values,
        residual_rms=square,
        residual_max=largest,
        mean_square=comm.allreduce(float((owned * owned).sum())) / lattice.nodes,
        outcome=COMPOSED,
        versions=versions(),
        job_text=job_text,
    )
    write_state(out, owned, block, meta, comm)
    return meta


def _ranks(comm: MPI.Intracomm | None) -> MPI.Intracomm:
    from mpi4py import MPI

    return MPI.COMM_SELF if comm is None else comm


def _member(given: Path | Mapping[str, Any]) -> MemberOptions:
    if isinstance(given, Mapping):
        return MemberOptions(**{**given, "file": os.fspath(given["file"])})
    return MemberOptions(os.fspath(given))


def _law_and_lattice(path: str) -> tuple[Law, Lattice]:
    from lattice.store.statefile import read_meta

    meta = read_meta(path)
    return stored_law(meta), meta.lattice


def _finest(layout: Layout, axis: int) -> float:
    """Return the nodes of the whole axis at the finest spacing among the members."""
    whole = layout.ends[axis][-1]
    return max(_density(layout, n, axis) for n in range(len(layout.cells))) * whole


def _density(layout: Layout, number: int, axis: int) -> float:
    cell = layout.cells[number]
    source: Source = cell.member.source
    return source.nodes[axis] / (source.covers[axis] * layout.stretch(cell)[axis])


def _count(name: str, kept: float, nodes: Nodes, fewest: int) -> int:
    """Return the number of nodes of an axis: the one given, else about those that keep the spacing."""
    if nodes.get(name) is not None:
        return int(nodes[name])
    if fewest == 1:
        return 1
    whole = round(kept)
    even = whole if math.isclose(kept, whole, rel_tol=1e-9) else 2 * round(0.5 * kept)
    return max(fewest, even)


def _lattice(like: Lattice, nodes: Mapping[str, int]) -> Lattice:
    orders = {name: getattr(like, name) for name in ("order_t", "order_x", "order_y")}
    return Lattice(nodes["nt"], nodes["ny"], nodes["nx"], like.dimensions, **orders)
