"""Images of a distributed field under the reflections of its law."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from lattice.classify.spectra import Real
from lattice.geometry.blocks import Blocks
from lattice.laws.law import Law, Reflection


def mirrored(blocks: Blocks, owned: Real, reflection: Reflection) -> Real:
    """Return this rank's part of the image of a field, mirrored about the first node of each axis.

    Collective. The value at (t, y, x) is the one at (-t, -y, -x), on the axes that are reflected, times the
    sign of its component.
    """
    from petsc4py import PETSc

    flips = (reflection.time, reflection.y, reflection.x)
    if any(flips):
        ranges = zip(blocks.block.slices, blocks.lattice.shape, flips, strict=True)
        places = [_places(part, nodes, flip) for part, nodes, flip in ranges]
        nodes = blocks.node_numbers(*np.ix_(*places)).reshape(-1)
        numbers = (nodes[:, None] * blocks.components + np.arange(blocks.components)).reshape(-1)
        source, target = blocks.vector(), blocks.vector()
        source.getArray()[:] = owned.reshape(-1)
        wanted = PETSc.IS().createGeneral(numbers.astype(PETSc.IntType), comm=blocks.comm)
        first = target.getOwnershipRange()[0]
        own = PETSc.IS().createStride(numbers.size, first, 1, comm=blocks.comm)
        scatter = PETSc.Scatter().create(source, wanted, target, own)
        scatter.begin(source, target)
        scatter.end(source, target)
        owned = blocks.owned(target).copy()
        for item in (scatter, wanted, own, source, target):
            item.destroy()
    signs = np.array(reflection.signs, dtype=float)
    return np.asarray(owned * signs)


def _places(part: slice, nodes: int, flip: bool) -> NDArray[np.int64]:
    own = np.arange(part.start, part.stop)
    return (-own) % nodes if flip else own


def mirrored_frame(law: Law, values: Mapping[str, float], reflection: Reflection) -> dict[str, float]:
    """Return the scalars of a state's image: velocities of its frame change sign with their axis and time."""
    found = dict(values)
    back = -1.0 if reflection.time else 1.0
    for axis, flip in (("x", reflection.x), ("y", reflection.y)):
        if f"drift_{axis}" in found:
            found[f"drift_{axis}"] *= back * (-1.0 if flip else 1.0)
    if law.rotating_pair and "rotation" in found:
        first, second = (law.components.index(name) for name in law.rotating_pair)
        found["rotation"] *= back * reflection.signs[first] * reflection.signs[second]
    return found
