"""LU on fewer ranks than hold the matrix: beyond some number, more of them only add messages.

Neighbouring ranks form groups; the first of each group takes the group's rows, and those leaders share the
factorisation.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import LatticeError
from lattice.solve.direct import Factorisation
from lattice.store.agreement import raise_together

if TYPE_CHECKING:
    from mpi4py import MPI


class GatheredFactorisation:
    """LU factors held by the leaders of groups of ranks; the same methods as `Factorisation`.

    Collective, as all methods.

    Parameters
    ----------
    prefix : str
        Of its options in PETSc's database.
    comm : MPI.Intracomm
        Of the matrices and vectors.
    ranks : int
        Most ranks that share the factors.
    """

    def __init__(self, prefix: str, comm: MPI.Intracomm, ranks: int) -> None:
        from mpi4py import MPI

        self.comm = comm
        self.group = comm.Split(comm.rank // -(-comm.size // ranks), comm.rank)
        self.leads = self.group.rank == 0
        self.leaders = comm.Split(0 if self.leads else MPI.UNDEFINED, comm.rank)
        self._lu = Factorisation(prefix, self.leaders) if self.leads else None
        self._matrix: Any = None
        self._vectors: tuple[Any, Any] | None = None

    def factor(self, matrix: Any) -> None:
        """Factorise a matrix, replacing the factors held before; later ones have the first one's pattern.

        Raises
        ------
        FactorisationError
            On every rank, with the package's numbers, after every permitted retry.
        """
        starts, columns, values = matrix.getValuesCSR()
        lengths = self._gather(np.diff(starts))
        columns, values = self._gather(columns), self._gather(values)
        failure: LatticeError | None = None
        if self._lu is not None:
            self._take(lengths, columns, values, matrix.getSize()[0])
            try:
                self._lu.factor(self._matrix)
            except LatticeError as error:
                failure = error
        raise_together(self.comm, failure)

    def solve(self, r: Any, y: Any, transpose: bool = False) -> None:
        """Set `y` to the solution for right-hand side `r`.

        Raises
        ------
        FactorisationError
            On every rank, if the factors turn out unusable.
        """
        right = self._gather(r.getArray(readonly=1))
        failure: LatticeError | None = None
        solution = np.empty(0)
        if self._lu is not None:
            assert self._vectors is not None
            small, found = self._vectors
            small.getArray()[:] = right
            try:
                self._lu.solve(small, found, transpose)
            except LatticeError as error:
                failure = error
            solution = found.getArray(readonly=1)
        raise_together(self.comm, failure)
        out = y.getArray()
        counts = self.group.gather(out.size)
        self.group.Scatterv((solution, counts) if self.leads else None, out)

    def _gather(self, part: NDArray[Any]) -> NDArray[Any]:
        """Return the group's parts, one after the other, on its leader; nothing elsewhere."""
        counts = self.group.gather(part.size)
        whole = np.empty(sum(counts) if counts else 0, dtype=part.dtype)
        self.group.Gatherv(np.ascontiguousarray(part), (whole, counts) if self.leads else None)
        return whole

    def _take(self, lengths: NDArray[Any], columns: NDArray[Any], values: NDArray[Any], size: int) -> None:
        """Set the leaders' matrix to the group's rows: pattern and values first, then values alone."""
        from petsc4py import PETSc

        starts = np.zeros(lengths.size + 1, dtype=PETSc.IntType)
        np.cumsum(lengths, out=starts[1:])
        if self._matrix is not None:
            self._matrix.setValuesCSR(starts, columns, values)
            self._matrix.assemble()
            return
        layout = (lengths.size, size)
        self._matrix = PETSc.Mat().createAIJ(
            (layout, layout), csr=(starts, columns, values), comm=self.leaders
        )
        self._vectors = self._matrix.createVecs()

    def destroy(self) -> None:
        """Free the factors, the gathered matrix and the communicators."""
        if self._lu is not None:
            self._lu.destroy()
            for item in (*(self._vectors or ()), self._matrix):
                if item is not None:
                    item.destroy()
            self.leaders.Free()
        self.group.Free()
