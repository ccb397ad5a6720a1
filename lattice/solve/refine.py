"""Lattices refined from one another, and fields carried between them by their Fourier series."""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.blocks import Blocks
from lattice.geometry.lattice import Lattice
from lattice.spectral.transfer import Transfer
from lattice.spectral.transform import Transform
from lattice.system.system import System

Array = NDArray[np.float64]
FEWEST = 4
EXTENTS = {"nt": "period", "ny": "length_y", "nx": "length_x"}


def refined_lattice(lattice: Lattice, factor: float) -> Lattice:
    """Return the lattice with `factor` times the nodes on every axis, as near as even counts allow.

    Axes with one node stay.

    Examples
    --------
    >>> refined_lattice(Lattice(nt=40, ny=1, nx=54), 1.4).shape
    (56, 1, 76)
    """
    return replace(lattice, **{name: _even(getattr(lattice, name), factor) for name in ("nt", "ny", "nx")})


def _even(nodes: int, factor: float) -> int:
    return nodes if nodes == 1 else max(FEWEST, 2 * round(nodes * factor / 2.0))


def carry(source: System, owned: Array, target: System) -> Array:
    """Return this rank's part of a field on another system's lattice.

    Collective. The Fourier series on the source's lattice is evaluated on the target's; waves that the
    target cannot carry are left out, as is the shortest wave of an even number of nodes.

    Parameters
    ----------
    source : System
        Where the field is given.
    owned : ndarray, shape (levels, rows, columns, components)
        This rank's part there, of the whole field where the system is one of a subspace.
    target : System
        Of the same law, on the same communicator.

    Returns
    -------
    ndarray, shape (levels, rows, columns, components)
        This rank's part on the target's lattice.
    """
    if source.whole_lattice.shape == target.whole_lattice.shape:
        return owned.copy()
    between = _between(source, target)
    stations = [source.whole_blocks, *([between] if between else []), target.whole_blocks]
    field = _vector(source.whole_blocks, owned)
    for here, there in itertools.pairwise(stations):
        field = _move(here, field, there)
    carried = target.whole_blocks.owned(field).copy()
    field.destroy()
    if between:
        between.destroy()
    return carried


def _between(source: System, target: System) -> Blocks | None:
    """Return blocks with the larger count on every axis, where neither lattice has them all."""
    pairs = list(zip(source.whole_lattice.shape, target.whole_lattice.shape, strict=True))
    if all(a <= b for a, b in pairs) or all(a >= b for a, b in pairs):
        return None
    nt, ny, nx = (max(pair) for pair in pairs)
    lattice = replace(target.whole_lattice, nt=nt, ny=ny, nx=nx)
    return Blocks(lattice, target.blocks.components, target.operator.scheme.halo_x, target.comm)


def _vector(blocks: Blocks, owned: Array) -> Any:
    field = blocks.vector()
    blocks.owned(field)[...] = owned
    return field


def _move(here: Blocks, field: Any, there: Blocks) -> Any:
    """Return a field vector on other blocks, all of whose axes are finer or all coarser; free the old one."""
    moved = there.vector()
    refining = there.lattice.nodes >= here.lattice.nodes
    fine, coarse = (Transform(there), Transform(here)) if refining else (Transform(here), Transform(there))
    transfer = Transfer(fine, coarse, (False,) * here.components)
    (transfer.prolong if refining else transfer.restrict)(field, moved, rows=False)
    for item in (transfer, fine, coarse, field):
        item.destroy()
    return moved


def fitted_lattice(lattice: Lattice, values: Mapping[str, float], spacings: Mapping[str, float]) -> Lattice:
    """Return the lattice whose spacings in a box are as near to given ones as even counts allow.

    Examples
    --------
    >>> box = {"period": 26.0, "length_x": 44.0}
    >>> fitted_lattice(Lattice(nt=40, ny=1, nx=56), box, {"nt": 0.5, "nx": 0.8}).shape
    (52, 1, 56)
    """
    counts = {axis: max(FEWEST, 2 * round(values[EXTENTS[axis]] / h / 2.0)) for axis, h in spacings.items()}
    return replace(lattice, **counts)


def still_fits(
    lattice: Lattice, values: Mapping[str, float], spacings: Mapping[str, float], most: float
) -> bool:
    """Tell whether no spacing has changed by more than a share `most` that another count would mend."""
    fitted = fitted_lattice(lattice, values, spacings)
    changes = [
        abs(values[EXTENTS[axis]] / (getattr(lattice, axis) * h) - 1.0)
        for axis, h in spacings.items()
        if getattr(fitted, axis) != getattr(lattice, axis)
    ]
    return max(changes, default=0.0) <= most
