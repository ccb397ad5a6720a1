"""Planes and lines of a stored field at the resolution of a screen, read in bounded memory."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.store.statefile import StateFile
from lattice.store.statemeta import StateMeta

Real = npt.NDArray[np.float64]

PIXELS = 1600
"""Most nodes shown along an axis; of a longer axis every second, third .. node is shown."""
BATCH_VALUES = 2**22
"""Field values read at a time."""
EXTENTS = {"t": "period", "y": "length_y", "x": "length_x"}


@dataclass(frozen=True)
class Plane:
    """One component on a plane of the lattice.

    Parameters
    ----------
    values : ndarray, shape (rows, columns)
        Rows run along `vertical`, columns along `horizontal`.
    vertical, horizontal : ndarray
        Coordinates of rows and columns.
    """

    values: Real
    vertical: Real
    horizontal: Real


def extent(meta: StateMeta, axis: str) -> float:
    """Return the length of an axis: its period."""
    return meta.values.get(EXTENTS[axis], 1.0)


def nodes_of(meta: StateMeta, axis: str) -> int:
    """Return the number of nodes on an axis."""
    return {"t": meta.lattice.nt, "y": meta.lattice.ny, "x": meta.lattice.nx}[axis]


def nearest_node(meta: StateMeta, axis: str, value: float) -> int:
    """Return the node nearest to a coordinate between 0 and the axis's length.

    Raises
    ------
    InputError
        If the state has no such axis or the coordinate lies outside.
    """
    if axis not in meta.axes:
        raise InputError(f"must name one of the axes {', '.join(meta.axes)}, got {axis!r}", key="--cut")
    length = extent(meta, axis)
    if not 0.0 <= value <= length:
        raise InputError(f"{axis} must be between 0 and {length:g}, got {value:g}", key="--cut")
    nodes = nodes_of(meta, axis)
    return round(value / length * nodes) % nodes


def read_plane(
    file: StateFile,
    component: str,
    vertical: str,
    horizontal: str,
    at: Mapping[str, int],
    pixels: int = PIXELS,
) -> Plane:
    """Read one component on a plane.

    Parameters
    ----------
    file : StateFile
        Open.
    component : str
        Its name.
    vertical, horizontal : str
        Axes of the plane, in the order t, y, x.
    at : mapping of str to int
        Node of the axis that the plane cuts.
    pixels : int
        Most nodes returned along an axis.
    """
    meta = file.meta
    rows, columns = nodes_of(meta, vertical), nodes_of(meta, horizontal)
    row_step, column_step = -(-rows // pixels), -(-columns // pixels)
    batch = max(1, BATCH_VALUES // (columns * row_step)) * row_step
    parts = []
    for start in range(0, rows, batch):
        stop = min(start + batch, rows)
        block = _block(meta, {vertical: (start, stop), horizontal: (0, columns)}, at)
        parts.append(
            file.part(component, block).reshape(stop - start, columns)[::row_step, ::column_step].copy()
        )
    return Plane(
        np.concatenate(parts),
        meta.coordinate(vertical)[::row_step],
        meta.coordinate(horizontal)[::column_step],
    )


def read_line(file: StateFile, component: str, axis: str, at: Mapping[str, int]) -> Real:
    """Read one component along an axis, all nodes."""
    block = _block(file.meta, {axis: (0, nodes_of(file.meta, axis))}, at)
    return file.part(component, block).reshape(-1)


def _block(meta: StateMeta, ranges: Mapping[str, tuple[int, int]], at: Mapping[str, int]) -> Block:
    limits: list[int] = []
    for axis in ("t", "y", "x"):
        limits += ranges.get(axis, (at.get(axis, 0), at.get(axis, 0) + 1))
    return Block(*limits)
