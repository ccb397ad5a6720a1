"""The lattice Jacobian of the field as a PETSc AIJ matrix, filled by one generated loop.

The free scalars are not in it; a gauge component's mean term is replaced by a small multiple of the
component itself, so that the matrix is sparse and not singular (see `GAUGE_PIN`).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.kernels.build import Rows
from lattice.kernels.scheme import widest
from lattice.system.operator import FieldOperator, build_once

GAUGE_PIN = 1e-7
"""Replaces the mean of a gauge component in its equation, R - mean(psi) -> R - GAUGE_PIN * psi.

A solve then returns the level mean of psi too large by 1/GAUGE_PIN, which `rescale_gauge` puts right, and
everything else changed by a relative GAUGE_PIN at most (the smallest squared wavenumber being O(1))."""


class AssembledJacobian:
    """The field Jacobian about the operator's point of linearisation.

    Collective. The pattern is made once; `update` writes values in place.

    Parameters
    ----------
    operator : FieldOperator

    Raises
    ------
    InputError
        If a stencil would meet itself around a periodic axis.
    """

    def __init__(self, operator: FieldOperator) -> None:
        self.operator, self.blocks = operator, operator.blocks
        if not self.blocks.folded:
            check_overlap(operator)
        tangent = operator.forms["tangent"]
        self._rows = build_once(operator.comm, lambda: Rows(tangent, operator.scheme))
        self._evolving = [e.evolving and operator.lattice.nt > 1 for e in operator.law.equations]
        self._indptr, self._columns, signs = self._pattern()
        self._values = np.zeros(self._columns.size)
        # Near a mirror a row names columns twice, with signs.
        self._sums = None if signs is None else RepeatedColumns(self._indptr, self._columns, signs)
        if self._sums:
            self._indptr, self._columns = self._sums.indptr, self._sums.columns
        self.matrix: Any = None

    def update(self) -> Any:
        """Fill the matrix for the current point and return it."""
        from petsc4py import PETSc

        scalars = self.operator.values
        self._rows.prepare(self.operator.geometry(scalars), scalars)
        levels, rows, _ = self.blocks.block.shape
        self._rows(self._values.reshape(levels, rows, -1), self.operator.padded_point())
        values = self._sums.add(self._values) if self._sums else self._values
        if self.matrix is None:
            size = ((self.blocks.owned_size, self.blocks.size),) * 2
            csr = (self._indptr, self._columns, values)
            self.matrix = PETSc.Mat().createAIJ(size, csr=csr, comm=self.blocks.comm)
        else:
            self.matrix.setValuesCSR(self._indptr, self._columns, values)
        self.matrix.assemble()
        self._pin_gauge()
        return self.matrix

    def add_to_diagonal(self, pins: list[tuple[int, float]]) -> None:
        """Add numbers to single diagonal entries, given as (row, number). Collective."""
        from petsc4py import PETSc

        low, high = self.matrix.getOwnershipRange()
        for row, number in pins:
            if low <= row < high:
                self.matrix.setValue(row, row, number, addv=PETSc.InsertMode.ADD_VALUES)
        self.matrix.assemble()

    def _pin_gauge(self) -> None:
        law = self.operator.law
        if not self.operator.gauge:
            return
        diagonal = self.blocks.vector()
        for component in self.operator.gauge:
            self.blocks.owned(diagonal)[..., law.components.index(component)] = -GAUGE_PIN
        from petsc4py import PETSc

        self.matrix.setDiagonal(diagonal, addv=PETSc.InsertMode.ADD_VALUES)
        self.matrix.assemble()
        diagonal.destroy()

    def _pattern(self) -> tuple[NDArray[np.int32], NDArray[np.int32], NDArray[np.float64] | None]:
        """Return the row pointers and global columns of this rank's rows, and signs where not all are 1."""
        from petsc4py import PETSc

        offsets, sizes = self._offsets()
        halo_t, halo_y, halo_x = self.blocks.halos
        _, my, mx, components = self.blocks.padded_shape
        levels, rows, columns = self.blocks.block.shape
        n, j, i = np.ogrid[:levels, :rows, :columns]
        own = ((n + halo_t) * my + j + halo_y) * mx + i + halo_x
        local = (own[..., None] * components + offsets).astype(PETSc.IntType).reshape(-1)
        if local.size > np.iinfo(PETSc.IntType).max:
            raise InputError(
                f"the assembled Jacobian has {local.size} nonzeros on one rank, more than this PETSc's"
                " indices can count; use more ranks or another preconditioner",
                key="solve.preconditioner",
            )
        table, signs = self.blocks.columns(local)
        lengths = np.tile(sizes, levels * rows * columns)
        indptr = np.concatenate([[0], np.cumsum(lengths)]).astype(PETSc.IntType)
        return indptr, np.asarray(table, dtype=PETSc.IntType), signs

    def _offsets(self) -> tuple[NDArray[np.int64], list[int]]:
        """Return the flat padded offsets of one node's columns, and how many each equation has."""
        _, my, mx, components = self.blocks.padded_shape
        below, levels = self.operator.scheme.below, self.operator.scheme.levels
        offsets: list[int] = []
        sizes = []
        for points, evolving in zip(self._rows.points, self._evolving, strict=True):
            first = len(offsets)
            for k in range(-below, levels - below) if evolving else (0,):
                offsets += [((k * my + dy) * mx + dx) * components + c for dy, dx, c in points]
            sizes.append(len(offsets) - first)
        return np.array(offsets), sizes

    def destroy(self) -> None:
        """Free the matrix. Collective."""
        if self.matrix is not None:
            self.matrix.destroy()


class RepeatedColumns:
    """Sums the entries of a sparse matrix that stand in one place, with a sign each.

    Parameters
    ----------
    indptr, columns : ndarray
        Row pointers and columns of the entries as they come.
    signs : ndarray
        Of the entries.

    Attributes
    ----------
    indptr, columns : ndarray
        Of the sums.
    """

    def __init__(
        self, indptr: NDArray[np.int32], columns: NDArray[np.int32], signs: NDArray[np.float64]
    ) -> None:
        count = int(columns.max(initial=0)) + 1
        rows = np.repeat(np.arange(indptr.size - 1, dtype=np.int64), np.diff(indptr))
        places, self._place = np.unique(rows * count + columns, return_inverse=True)
        self._signs = signs
        self.columns = (places % count).astype(columns.dtype)
        self.indptr = np.searchsorted(places // count, np.arange(indptr.size)).astype(indptr.dtype)

    def add(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the sums."""
        sums = np.bincount(self._place, weights=values * self._signs, minlength=self.columns.size)
        return np.asarray(sums, dtype=np.float64)


def check_overlap(operator: FieldOperator) -> None:
    """Refuse a lattice on which a row would name a column twice.

    Raises
    ------
    InputError
        Naming the axis and the fewest nodes that work.
    """
    lattice = operator.lattice
    reach_x, reach_y = widest([operator.forms["tangent"]], lattice.order_x, lattice.order_y)
    least = {"nt": operator.scheme.levels, "ny": 2 * reach_y + 1, "nx": 2 * reach_x + 1}
    for name, needed in least.items():
        if name == "nt" and lattice.nt == 1:
            continue
        if getattr(lattice, name) < needed:
            raise InputError(
                f"must be at least {needed} for an assembled Jacobian of these orders, got"
                f" {getattr(lattice, name)}; raise it or lower the orders",
                key=f"lattice.{name}",
            )


def rescale_gauge(operator: FieldOperator, solution: Any) -> None:
    """Correct the level means of gauge components in a solution of the pinned matrix. Collective."""
    for component in operator.gauge:
        index = operator.law.components.index(component)
        means = operator.level_means(solution, index)
        operator.blocks.owned(solution)[..., index] -= (1.0 - GAUGE_PIN) * means[:, None, None]
