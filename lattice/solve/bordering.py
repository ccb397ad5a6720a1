"""Block elimination of the free scalars around an inverse of the field part [1]_.

With the pinned field matrix K = J + sum_p s_p e_p e_p^T, the bordered system

    J x + B z = r,   C x = g

is K x + B z - sum_p s_p e_p y_p = r, C x = g, e_p^T x - y_p = 0: one inner solve per border and pin at
every set-up, one per application.

References
----------
.. [1] W. Govaerts, "Numerical Methods for Bifurcations of Dynamical Equilibria", SIAM 2000, chapter 3
   (from memory).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.system.unknowns import LOOSE

if TYPE_CHECKING:
    from lattice.solve.registry import FieldInverse
    from lattice.system.system import System

Array = NDArray[np.float64]


class Bordering:
    """A preconditioner of the bordered Jacobian made from one of its field part.

    Collective, as all its methods.

    Parameters
    ----------
    system : System
    inner : FieldInverse
    """

    def __init__(self, system: System, inner: FieldInverse) -> None:
        self.system, self.inner = system, inner
        self._work, self._solved = system.blocks.vector(), system.blocks.vector()
        self._right: list[Any] = []
        self._left: list[Any] = []
        self._schur: Array = np.zeros((0, 0))

    def update(self) -> None:
        """Set up the inner preconditioner and eliminate the borders at the system's point."""
        self.inner.update()
        self._free_columns()
        for column in self._columns():
            solved = self.system.blocks.vector()
            self.inner.apply(column, solved)
            self._right.append(solved)
        borders, pins = len(self.system.unknowns), len(self.inner.pins)
        schur = np.zeros((borders + pins, borders + pins))
        for k, solved in enumerate(self._right):
            schur[:, k] = -self._rows(solved)
        schur[borders:, borders:] -= np.eye(pins)
        for k, unknown in enumerate(self.system.unknowns):
            if unknown.condition == LOOSE:
                schur[k, k] += self.system.loose_weight
        self._schur = schur

    def _columns(self) -> list[Any]:
        """Return the field vectors of all borders and pins; those of pins are made for the call."""
        columns = list(self.system.columns)
        for row, size in self.inner.pins:
            pin = self._work.duplicate()
            pin.set(0.0)
            low, high = pin.getOwnershipRange()
            if low <= row < high:
                pin.setValue(row, -size)
            pin.assemble()
            columns.append(pin)
            self._left.append(pin)
        return columns

    def _rows(self, field: Any) -> Array:
        """Return the condition rows and the pinned entries of a field vector, on every rank."""
        pinned = np.zeros(len(self.inner.pins))
        low, high = field.getOwnershipRange()
        array = field.getArray(readonly=1)
        for k, (row, _) in enumerate(self.inner.pins):
            if low <= row < high:
                pinned[k] = array[row - low]
        total = self.system.comm.allreduce(pinned) if pinned.size else pinned
        return np.concatenate([self.system.border_rows(field), total])

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to the approximate inverse of the bordered Jacobian times `r`."""
        owned = self.system.blocks.owned_size
        border = self.system.border_of(r)
        self._work.getArray()[:] = r.getArray(readonly=1)[:owned]
        self.inner.apply(self._work, self._solved)
        known = np.concatenate([border, np.zeros(len(self.inner.pins))])
        scalars = solve_small(self._schur, known - self._rows(self._solved))
        for number, column in zip(scalars, self._right, strict=True):
            self._solved.axpy(-float(number), column)
        out = y.getArray()
        out[:owned] = self._solved.getArray(readonly=1)
        if self.system.last:
            out[owned:] = scalars[: border.size]

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transpose of `apply`'s operator times `r`."""
        owned, system = self.system.blocks.owned_size, self.system
        border, pins = system.border_of(r), len(self.inner.pins)
        self._work.getArray()[:] = r.getArray(readonly=1)[:owned]
        local = np.array([c.getArray(readonly=1) @ self._work.getArray(readonly=1) for c in self._right])
        products = system.comm.allreduce(local) if self._right else local
        known = np.concatenate([border, np.zeros(pins)])
        scalars = solve_small(self._schur.T, known - products)
        for unknown, number in zip(system.unknowns, scalars[: border.size], strict=True):
            system.add_row(unknown.condition, -float(number), self._work)
        low, high = self._work.getOwnershipRange()
        array = self._work.getArray()
        for (row, _), number in zip(self.inner.pins, scalars[border.size :], strict=True):
            if low <= row < high:
                array[row - low] -= number
        self.inner.apply_transpose(self._work, self._solved)
        out = y.getArray()
        out[:owned] = self._solved.getArray(readonly=1)
        if system.last:
            out[owned:] = scalars[: border.size]

    def _free_columns(self) -> None:
        for vector in (*self._right, *self._left):
            vector.destroy()
        self._right, self._left = [], []

    def destroy(self) -> None:
        """Free everything, the inner preconditioner too."""
        self._free_columns()
        self._work.destroy()
        self._solved.destroy()
        self.inner.destroy()


def solve_small(matrix: Array, right: Array) -> Array:
    """Solve a border-sized system; least squares where it is singular."""
    if not right.size:
        return right
    try:
        result: Array = np.linalg.solve(matrix, right)
    except np.linalg.LinAlgError:
        result = np.linalg.lstsq(matrix, right, rcond=None)[0]
    return result
