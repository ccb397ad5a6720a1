"""Fields of a subspace on the ranks: the halo of the part that carries them, and the whole field.

The halo of a part is filled by one PETSc scatter from the nodes that carry the values, and signs; so a half
lattice's mirrored end and a half period's other end need nothing else from whoever reads the halo.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.subspace import Subspace

if TYPE_CHECKING:
    from lattice.geometry.blocks import Blocks

Array = NDArray[np.float64]


class FoldedHalo:
    """The values and the global numbers of a padded block of a subspace's part.

    Collective.

    Parameters
    ----------
    blocks : Blocks
        Of the part.
    subspace : Subspace

    Attributes
    ----------
    columns : ndarray, shape (numbers of the padded block,)
        For every number of the padded block the global number that carries it.
    signs : ndarray, the same shape
        What that is to be multiplied by.
    """

    def __init__(self, blocks: Blocks, subspace: Subspace) -> None:
        from petsc4py import PETSc

        low = (blocks.block.t0, blocks.block.y0, blocks.block.x0)
        places = [
            np.arange(start - halo, start - halo + nodes)
            for start, halo, nodes in zip(low, blocks.halos, blocks.padded_shape[:3], strict=True)
        ]
        numbers, signs = _carriers(blocks, subspace, places)
        self.columns, self.signs = numbers, signs.reshape(-1)
        field, padded = blocks.vector(), blocks.padded_vector()
        source = PETSc.IS().createGeneral(numbers.astype(PETSc.IntType), comm=PETSc.COMM_SELF)
        target = PETSc.IS().createStride(numbers.size, 0, 1, comm=PETSc.COMM_SELF)
        self._scatter = PETSc.Scatter().create(field, source, padded, target)
        for item in (source, target, field, padded):
            item.destroy()

    def fill(self, field: Any, padded: Any) -> None:
        """Fill a padded vector from a field vector. Collective."""
        self._scatter.begin(field, padded)
        self._scatter.end(field, padded)
        padded.getArray()[:] *= self.signs

    def destroy(self) -> None:
        """Free the scatter. Collective."""
        self._scatter.destroy()


class Unfolding:
    """Turns a field on a subspace's part into the whole field, and projects whole fields onto it.

    Collective.

    Parameters
    ----------
    part : Blocks
    whole : Blocks
        Of the whole lattice, on the same communicator.
    subspace : Subspace
    """

    def __init__(self, part: Blocks, whole: Blocks, subspace: Subspace) -> None:
        from petsc4py import PETSc

        self.part, self.whole, self._order = part, whole, subspace.order
        places = [np.arange(s.start, s.stop) for s in whole.block.slices]
        numbers, signs = _carriers(part, subspace, places)
        self._signs = signs.reshape(whole.shape)
        self._field, self._full = part.vector(), whole.vector()
        source = PETSc.IS().createGeneral(numbers.astype(PETSc.IntType), comm=part.comm)
        first = self._full.getOwnershipRange()[0]
        target = PETSc.IS().createStride(numbers.size, first, 1, comm=part.comm)
        self._scatter = PETSc.Scatter().create(self._field, source, self._full, target)
        source.destroy()
        target.destroy()

    def unfold(self, owned: Array) -> Array:
        """Return this rank's part of the whole field. Collective."""
        self.part.owned(self._field)[...] = owned
        self._scatter.begin(self._field, self._full)
        self._scatter.end(self._field, self._full)
        return np.asarray(self.whole.owned(self._full) * self._signs)

    def project(self, owned: Array) -> Array:
        """Return the nearest field of the subspace to a whole one: the mean over the images. Collective."""
        from petsc4py import PETSc

        self.whole.owned(self._full)[...] = owned * self._signs
        self._field.set(0.0)
        how = {"addv": PETSc.InsertMode.ADD_VALUES, "mode": PETSc.ScatterMode.REVERSE}
        self._scatter.begin(self._full, self._field, **how)
        self._scatter.end(self._full, self._field, **how)
        return np.asarray(self.part.owned(self._field) / self._order)

    def destroy(self) -> None:
        """Free vectors and the scatter. Collective."""
        for item in (self._scatter, self._field, self._full):
            item.destroy()


def _carriers(
    part: Blocks, subspace: Subspace, places: list[NDArray[np.int64]]
) -> tuple[NDArray[np.int64], Array]:
    """Return the global numbers that carry the values at nodes (t, y, x) of the whole, and their signs."""
    t, y, x, signs = subspace.images(part.whole, part.components, *np.ix_(*places))
    nodes = part.node_numbers(t, y, x)
    numbers = nodes[..., None] * part.components + np.arange(part.components)
    return numbers.reshape(-1), signs
