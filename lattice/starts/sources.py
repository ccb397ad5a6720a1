"""The stored fields that can be cut and composed: state files, and arrays with the box they cover."""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.laws.law import Law
from lattice.starts.array import ArrayLevels, open_array
from lattice.starts.options import ArrayOptions, ExcerptOptions
from lattice.starts.state import check_components
from lattice.starts.stepper import Values
from lattice.starts.streaming import ReadLevels

if TYPE_CHECKING:
    from lattice.store.statemeta import StateMeta

Real = NDArray[np.float64]

EXTENTS = ("period", "length_y", "length_x")


@dataclass(frozen=True)
class Source:
    """A stored field's nodes and the box they cover, the same on all ranks.

    Parameters
    ----------
    nodes : tuple of int
        (nt, ny, nx).
    covers : tuple of float
        Lengths of the axes t, y, x: the distance between nodes times their number.
    periodic : tuple of bool
        Along which of the axes t, y, x the field repeats.
    values : dict of str to float
        Scalars of a stored state; empty for an array.
    orders : tuple of int, optional
        Orders of a stored state's differences in t, y, x.
    outcome : str
        Of a stored state; empty for an array.
    """

    nodes: tuple[int, int, int]
    covers: tuple[float, float, float]
    periodic: tuple[bool, bool, bool]
    values: Values = field(default_factory=dict)
    orders: tuple[int, int, int] | None = None
    outcome: str = ""


def is_state_file(path: str) -> bool:
    """Tell whether a file says of itself that it is a state file; damaged ones count."""
    from lattice.store.layout import SCHEMA

    try:
        import h5py

        if not (Path(path).is_file() and h5py.is_hdf5(path)):
            return False
        with h5py.File(path, "r") as file:
            schema = file.attrs.get("schema", "")
            return (schema.decode() if isinstance(schema, bytes) else str(schema)) == SCHEMA
    except OSError:
        return True


def describe_source(start: ExcerptOptions, law: Law) -> Source:
    """Return what a source holds. Not collective: call it on one rank.

    Raises
    ------
    StateFileError, InputError
        If the file cannot be used with this law, or an array comes without the box it covers.
    """
    if start.dataset is None and is_state_file(start.file):
        return _refuse_cover(start, describe_state(start.file, law))
    with ExitStack() as files:
        nodes = ArrayLevels(open_array(ArrayOptions(start.file, start.dataset), files), law, start.file).nodes
    periodic = tuple(axis in start.periodic for axis in "tyx")
    covers = [_cover(axis, start, nodes["tyx".index(axis)], law) for axis in "tyx"]
    return Source(nodes, (covers[0], covers[1], covers[2]), (periodic[0], periodic[1], periodic[2]))


def describe_state(path: str, law: Law) -> Source:
    """Return what a state file holds. Not collective.

    Raises
    ------
    StateFileError, InputError
        If the file cannot be used with this law.
    """
    from lattice.store.statefile import read_meta

    meta = read_meta(path)
    check_components(meta, law, path)
    lattice = meta.lattice
    covers = [meta.values.get(name, 1.0) for name in EXTENTS]
    known = {*law.defaults, *EXTENTS, "drift_x", "drift_y", "rotation"}
    known |= {f"source_{component}" for component in law.components}
    values = {name: value for name, value in meta.values.items() if name in known}
    return Source(
        lattice.shape,
        (covers[0], covers[1], covers[2]),
        (True, True, True),
        values,
        (lattice.order_t, lattice.order_y, lattice.order_x),
        meta.outcome,
    )


def stored_law(meta: StateMeta) -> Law:
    """Return the law of a stored state: the shipped one of its name and text, else the text read again."""
    from lattice.laws.catalogue import law_names, load_law, read_law

    if meta.law in law_names() and load_law(meta.law).text == tuple(meta.text):
        return load_law(meta.law)
    return read_law("own", meta.text, meta.components, dict(meta.parameters), meta.dimensions)


def open_levels(start: ExcerptOptions, law: Law, files: ExitStack) -> ReadLevels:
    """Return what reads levels of a source that `describe_source` accepts. Not collective."""
    if start.dataset is None and is_state_file(start.file):
        return open_state_levels(start.file, files)
    return ArrayLevels(open_array(ArrayOptions(start.file, start.dataset), files), law, start.file).read


def open_state_levels(path: str, files: ExitStack) -> ReadLevels:
    """Return what reads levels of a state file. Not collective."""
    from lattice.store.statefile import StateFile

    opened = files.enter_context(StateFile(path))
    ny, nx = opened.meta.lattice.ny, opened.meta.lattice.nx

    def read(first: int, last: int) -> Real:
        return opened.block(Block(first, last, 0, ny, 0, nx))

    return read


def _refuse_cover(start: ExcerptOptions, source: Source) -> Source:
    given = [f"covers_{axis}" for axis in "tyx" if getattr(start, f"covers_{axis}") is not None]
    if given or start.periodic:
        name = given[0] if given else "periodic"
        raise InputError(f"start.{name} is for arrays, and {start.file} is a state, which says so itself")
    return source


def _cover(axis: str, start: ExcerptOptions, nodes: int, law: Law) -> float:
    given = getattr(start, f"covers_{axis}")
    if axis == "y" and law.dimensions == 1:
        return 1.0
    if given is None and nodes > 1:
        raise InputError(
            f"start.covers_{axis} is required for an array: the distance between its nodes along {axis} "
            f"times their number, {nodes}"
        )
    return 1.0 if given is None else float(given)
