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

from lattice.solve.direct import lu_package
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

    Parameters
    ----------
    system : System
    patches : list of Patch
        This rank's, at least one.
    prefix : str
        Of its options in PETSc's database; the patches' solvers have it with `sub_` appended.
    """

    def __init__(self, system: System, patches: list[Patch], prefix: str = "patches_") -> None:
        self.system, self.patches, self.prefix = system, patches, prefix
        self._assembled = AssembledJacobian(system.operator)
        self._pc: Any = None
        self.pins: list[tuple[int, float]] = []

    def update(self) -> None:
        """Assemble and factorise every patch. Collective."""
        matrix = self._assembled.update()
        if self._pc is None:
            self._pc = self._make(matrix)
        self._pc.setOperators(matrix)
        self._pc.setUp()

    def _make(self, matrix: Any) -> Any:
        from petsc4py import PETSc

        pc = PETSc.PC().create(self.system.comm)
        pc.setOptionsPrefix(self.prefix)
        pc.setOperators(matrix)
        pc.setType("asm")
        pc.setASMType(PETSc.PC.ASMType.RESTRICT)
        inner, outer = self._index_sets()
        pc.setASMLocalSubdomains(len(outer), outer, inner)
        options = PETSc.Options(f"{self.prefix}sub_")
        package = lu_package(1)
        defaults = {"ksp_type": "preonly", "pc_type": "lu", "pc_factor_mat_solver_type": package}
        if package != "mumps":
            defaults["pc_factor_shift_type"] = "nonzero"
        for name, value in defaults.items():
            if not options.hasName(name):
                options.setValue(name, value)
        pc.setFromOptions()
        return pc

    def _index_sets(self) -> tuple[list[Any], list[Any]]:
        """Return PETSc index sets of this rank's patches without and with their overlap."""
        from petsc4py import PETSc

        inner, outer = [], []
        ordering = self.system.blocks.dm.getAO()
        for patch in self.patches:
            for sets, overlaps in ((inner, (0, 0, 0)), (outer, patch.overlaps)):
                natural = self._natural(patch.spans, overlaps).astype(PETSc.IntType)
                rows = np.sort(ordering.app2petsc(natural))
                sets.append(PETSc.IS().createGeneral(rows, comm=PETSc.COMM_SELF))
        return inner, outer

    def _natural(self, spans: tuple[Span, Span, Span], overlaps: tuple[int, int, int]) -> NDArray[np.int64]:
        """Return the lattice-order numbers of all unknowns of a patch, wrapped around the axes."""
        axes = []
        for (low, high), reach, nodes in zip(spans, overlaps, self.system.lattice.shape, strict=True):
            axes.append(np.unique(np.arange(low - reach, high + reach) % nodes) if nodes > 1 else np.zeros(1, int))
        t, y, x = np.ix_(*axes)
        components = self.system.blocks.components
        nodes = (t * self.system.lattice.ny + y) * self.system.lattice.nx + x
        return np.asarray((nodes[..., None] * components + np.arange(components)).reshape(-1))

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to the sum of all patch solves, each restricted to its own nodes. Collective."""
        self._pc.apply(r, y)
        rescale_gauge(self.system.operator, y)

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transpose. Collective."""
        scaled = r.copy()
        rescale_gauge(self.system.operator, scaled)
        self._pc.applyTranspose(scaled, y)
        scaled.destroy()

    def destroy(self) -> None:
        """Free patches and matrix. Collective."""
        if self._pc is not None:
            self._pc.destroy()
        self._assembled.destroy()


class RankPatches(Patches):
    """The `patches` preconditioner: each rank's block, or the smaller patches the job asks for."""

    def __init__(self, system: System, options: Any) -> None:
        super().__init__(system, block_patches(system, options.patches))
