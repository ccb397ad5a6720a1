"""The `patches` preconditioner: overlapping restricted additive Schwarz on blocks of the lattice.

Each patch, with its overlap, is factorised on its own [1]_. A patch that is whole in space is a slab of
time levels.

References
----------
.. [1] X.-C. Cai, M. Sarkis, "A restricted additive Schwarz preconditioner for general sparse linear
   systems", SIAM J. Sci. Comput. 21 (1999) 792-797.
"""

from __future__ import annotations

import itertools
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.solve.direct import lu_package
from lattice.system.assembly import AssembledJacobian, rescale_gauge

if TYPE_CHECKING:
    from lattice.system.system import System


class Patches:
    """Restricted additive Schwarz with LU on every patch.

    Parameters
    ----------
    system : System
    options : object
        The job's solve section: `options.patches` has nt, ny, nx (None: the rank's whole block) and
        overlap, all in nodes.
    """

    def __init__(self, system: System, options: Any) -> None:
        self.system, self.options = system, options.patches
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
        pc.setOptionsPrefix("patches_")
        pc.setOperators(matrix)
        pc.setType("asm")
        pc.setASMType(PETSc.PC.ASMType.RESTRICT)
        inner, outer = self._index_sets()
        pc.setASMLocalSubdomains(len(outer), outer, inner)
        options = PETSc.Options("patches_sub_")
        options.setValue("ksp_type", "preonly")
        options.setValue("pc_type", "lu")
        package = lu_package(1)
        options.setValue("pc_factor_mat_solver_type", package)
        if package != "mumps":
            options.setValue("pc_factor_shift_type", "nonzero")
        pc.setFromOptions()
        return pc

    def _index_sets(self) -> tuple[list[Any], list[Any]]:
        """Return PETSc index sets of this rank's patches without and with their overlap."""
        from petsc4py import PETSc

        inner, outer = [], []
        ordering = self.system.blocks.dm.getAO()
        for spans in self._patch_spans():
            for sets, overlap in ((inner, 0), (outer, self.options.overlap)):
                natural = self._natural(spans, overlap).astype(PETSc.IntType)
                rows = np.sort(ordering.app2petsc(natural))
                sets.append(PETSc.IS().createGeneral(rows, comm=PETSc.COMM_SELF))
        return inner, outer

    def _patch_spans(self) -> list[tuple[tuple[int, int], ...]]:
        """Return the spans (first, end) in t, y, x of every patch of this rank's block."""
        block = self.system.blocks.block
        bounds = ((block.t0, block.t1), (block.y0, block.y1), (block.x0, block.x1))
        asked = (self.options.nt, self.options.ny, self.options.nx)
        return list(itertools.product(*(_cut(b, size) for b, size in zip(bounds, asked, strict=True))))

    def _natural(self, spans: tuple[tuple[int, int], ...], overlap: int) -> NDArray[np.int64]:
        """Return the lattice-order numbers of all unknowns of a patch, wrapped around the axes."""
        axes = []
        for (low, high), nodes in zip(spans, self.system.lattice.shape, strict=True):
            reach = overlap if nodes > 1 else 0
            axes.append(np.unique(np.arange(low - reach, high + reach) % nodes))
        t, y, x = np.ix_(*axes)
        components = self.system.blocks.components
        nodes = (t * self.system.lattice.ny + y) * self.system.lattice.nx + x
        return (nodes[..., None] * components + np.arange(components)).reshape(-1)

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


def _cut(bounds: tuple[int, int], size: int | None) -> list[tuple[int, int]]:
    """Cut a span into parts as equal as possible, each at most `size` long."""
    low, high = bounds
    count = 1 if size is None else -(-(high - low) // size)
    marks = np.linspace(low, high, count + 1).round().astype(int)
    return [(int(a), int(b)) for a, b in itertools.pairwise(marks)]
