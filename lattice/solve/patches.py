"""Overlapping restricted additive Schwarz on patches of the lattice, each factorised on its own [1]_.

As a preconditioner of its own (`patches`), as the solver of a coarse lattice that is too large for one
LU, and, with patches that are whole in space (slabs of time levels), as a smoother.

References
----------
.. [1] X.-C. Cai, M. Sarkis, "A restricted additive Schwarz preconditioner for general sparse linear
   systems", SIAM J. Sci. Comput. 21 (1999) 792-797.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import FactorisationError
from lattice.solve.direct import Factorisation, choose_pins
from lattice.store.agreement import raise_together
from lattice.system.assembly import AssembledJacobian, rescale_gauge

if TYPE_CHECKING:
    from lattice.system.system import System

Span = tuple[int, int]


@dataclass(frozen=True)
class Patch:
    """The levels, rows and columns (first, end) one rank solves for, and the overlap around them."""

    spans: tuple[Span, Span, Span]
    overlaps: tuple[int, int, int]


def block_patches(system: System, options: Any) -> list[Patch]:
    """Return this rank's block cut into patches of at most the asked sizes.

    Parameters
    ----------
    system : System
    options : object
        nt, ny, nx (None: the whole block) and overlap, in nodes.
    """
    block = system.blocks.block
    bounds = ((block.t0, block.t1), (block.y0, block.y1), (block.x0, block.x1))
    asked = (options.nt, options.ny, options.nx)
    cuts = [_cut(b, size) for b, size in zip(bounds, asked, strict=True)]
    return [Patch((t, y, x), (options.overlap,) * 3) for t, y, x in itertools.product(*cuts)]


def slab_patches(system: System, count: int, overlap: int) -> list[Patch]:
    """Return the slabs of time levels, whole in space, that this rank solves for.

    Parameters
    ----------
    system : System
    count : int
        Slabs on all ranks together, at least one a rank.
    overlap : int
        Levels by which a slab reaches into each neighbour.
    """
    lattice, comm = system.lattice, system.comm
    marks = np.linspace(0, lattice.nt, count + 1).round().astype(int)
    mine = [s for s in range(count) if s * comm.size // count == comm.rank]
    whole_y, whole_x = (0, lattice.ny), (0, lattice.nx)
    return [Patch(((int(marks[s]), int(marks[s + 1])), whole_y, whole_x), (overlap, 0, 0)) for s in mine]


def _cut(bounds: Span, size: int | None) -> list[Span]:
    """Cut a span into parts as equal as possible, each at most `size` long."""
    low, high = bounds
    count = 1 if size is None else -(-(high - low) // size)
    marks = np.linspace(low, high, count + 1).round().astype(int)
    return [(int(a), int(b)) for a, b in itertools.pairwise(marks)]


class Patches:
    """Restricted additive Schwarz with LU on every patch.

    Each patch solves for its own nodes and its overlap, and keeps the values of its own nodes; the
    transpose takes the residual of its own nodes and keeps all values.

    Parameters
    ----------
    system : System
    patches : list of Patch
        This rank's, at least one. Own nodes of all patches together are the lattice.
    prefix : str
        Of its options in PETSc's database; the patches' solvers have it with `sub_` appended.
    """

    def __init__(self, system: System, patches: list[Patch], prefix: str = "patches_") -> None:
        from mpi4py import MPI
        from petsc4py import PETSc

        self.system, self.patches = system, patches
        self.pins: list[tuple[int, float]] = []
        self._assembled = AssembledJacobian(system.operator)
        self._rows = [self._numbers(patch.spans, patch.overlaps) for patch in patches]
        own = [self._numbers(patch.spans, (0, 0, 0)) for patch in patches]
        self._masks = [np.isin(rows, mine) for rows, mine in zip(self._rows, own, strict=True)]
        self._solvers = [Factorisation(f"{prefix}sub_", MPI.COMM_SELF) for _ in patches]
        self._sets = [PETSc.IS().createGeneral(rows, comm=PETSc.COMM_SELF) for rows in self._rows]
        self._right = [PETSc.Vec().createSeq(rows.size) for rows in self._rows]
        self._left = [PETSc.Vec().createSeq(rows.size) for rows in self._rows]
        self._gathered = PETSc.Vec().createSeq(sum(rows.size for rows in self._rows))
        self._scatter = self._make_scatter()
        self._matrices: list[Any] = []

    def _make_scatter(self) -> Any:
        """Return the scatter from a field vector to all of this rank's patches, one after another."""
        from petsc4py import PETSc

        rows = np.concatenate(self._rows)
        source = PETSc.IS().createGeneral(rows, comm=PETSc.COMM_SELF)
        target = PETSc.IS().createStride(rows.size, 0, 1, comm=PETSc.COMM_SELF)
        field = self.system.blocks.vector()
        scatter = PETSc.Scatter().create(field, source, self._gathered, target)
        for item in (field, source, target):
            item.destroy()
        return scatter

    def update(self) -> None:
        """Assemble the Jacobian and factorise every patch. Collective.

        Raises
        ------
        LatticeError
            On every rank, if a patch cannot be factorised on any.
        """
        matrix = self._pinned(self._assembled.update())
        for old in self._matrices:
            old.destroy()
        self._matrices = matrix.createSubMatrices(self._sets)
        failure: FactorisationError | None = None
        for solver, part in zip(self._solvers, self._matrices, strict=True):
            try:
                solver.factor(part)
            except FactorisationError as error:
                failure = error
        raise_together(self.system.operator.comm, failure)

    def _pinned(self, matrix: Any) -> Any:
        """Return the matrix to cut the patches from."""
        return matrix

    def _numbers(self, spans: tuple[Span, Span, Span], overlaps: tuple[int, int, int]) -> NDArray[np.int32]:
        """Return the numbers of a patch's unknowns in PETSc's order, wrapped around the axes, sorted."""
        from petsc4py import PETSc

        axes = []
        for (low, high), reach, nodes in zip(spans, overlaps, self.system.lattice.shape, strict=True):
            wrapped = np.unique(np.arange(low - reach, high + reach) % nodes)
            axes.append(wrapped if nodes > 1 else np.zeros(1, dtype=int))
        t, y, x = np.ix_(*axes)
        components = self.system.blocks.components
        places = self.system.blocks.node_numbers(t, y, x)
        numbers = (places[..., None] * components + np.arange(components)).reshape(-1)
        return np.sort(numbers).astype(PETSc.IntType)

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to the sum of all patch solves, each restricted to its own nodes. Collective."""
        self._solve(r, y, transpose=False)
        rescale_gauge(self.system.operator, y)

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transpose. Collective."""
        scaled = r.copy()
        rescale_gauge(self.system.operator, scaled)
        self._solve(scaled, y, transpose=True)
        scaled.destroy()

    def _solve(self, r: Any, y: Any, transpose: bool) -> None:
        from petsc4py import PETSc

        self._scatter.begin(r, self._gathered)
        self._scatter.end(r, self._gathered)
        gathered = self._gathered.getArray()
        first = 0
        for right, left, mask, solver in zip(
            self._right, self._left, self._masks, self._solvers, strict=True
        ):
            part = slice(first, first + mask.size)
            right.getArray()[:] = gathered[part] * mask if transpose else gathered[part]
            solver.solve(right, left, transpose)
            found = left.getArray(readonly=1)
            gathered[part] = found if transpose else found * mask
            first += mask.size
        del gathered
        y.set(0.0)
        add, back = PETSc.InsertMode.ADD_VALUES, PETSc.ScatterMode.REVERSE
        self._scatter.begin(self._gathered, y, addv=add, mode=back)
        self._scatter.end(self._gathered, y, addv=add, mode=back)

    def destroy(self) -> None:
        """Free factors, matrices and vectors. Collective."""
        for item in (
            *(self._solvers, self._matrices, self._sets, self._right, self._left),
            *([self._gathered], [self._scatter], [self._assembled]),
        ):
            for part in item:
                part.destroy()


class RankPatches(Patches):
    """The `patches` preconditioner: each rank's block, or the smaller patches the job asks for.

    A patch that is the whole lattice, as on one rank, is as singular as the Jacobian and is pinned
    like it.
    """

    def __init__(self, system: System, options: Any, prefix: str = "patches_") -> None:
        super().__init__(system, block_patches(system, options.patches), prefix)
        whole = any(rows.size == system.blocks.size for rows in self._rows)
        self._some_whole = bool(system.comm.allreduce(int(whole)))

    def _pinned(self, matrix: Any) -> Any:
        if self._some_whole:
            self.pins = choose_pins(self.system, matrix)
            self._assembled.add_to_diagonal(self.pins)
        return matrix
