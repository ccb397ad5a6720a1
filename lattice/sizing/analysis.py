"""MUMPS's analysis of a lattice Jacobian, without the factorisation: what the factors will need.

The analysis alone takes seconds where the factorisation takes minutes, and tells the memory it will ask for.
Lattices too large even for that are analysed at two smaller sizes of the same shape.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.sizing.factors import Factors, assumed, growth
from lattice.sizing.problem import Problem, problem_of
from lattice.sizing.sample import waves
from lattice.solve.direct import lu_package
from lattice.system.assembly import AssembledJacobian
from lattice.system.system import System

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.geometry.subspace import Subspace

MOST_NONZEROS = 6_000_000
"""Largest Jacobian that is analysed itself: some seconds and half a gigabyte."""
STOP_NUMERIC = 1
"""ICNTL(23), the most megabytes a rank may allocate: so few that MUMPS stops after the analysis."""


def analyse(
    law: Law,
    lattice: Lattice,
    values: Mapping[str, float],
    free: Sequence[str],
    comm: MPI.Intracomm,
    subspace: Subspace | None = None,
) -> Factors:
    """Return what the factors of a law's Jacobian on a lattice will need on the ranks of a communicator.

    Collective. Of a lattice with more than `MOST_NONZEROS` from two smaller ones; by growth laws alone where
    PETSc has no MUMPS.
    """
    problem = problem_of(law, lattice, free, values, subspace)
    if lu_package(comm.size) != "mumps":
        return assumed(problem.numbers, problem.nonzeros, problem.axes)
    try:
        if problem.nonzeros <= MOST_NONZEROS:
            return _analysed(law, lattice, values, free, comm, subspace)
        sizes = [_shrunk(lattice, problem, most) for most in (MOST_NONZEROS // 4, MOST_NONZEROS)]
        parts = [_analysed(law, small, _shrunk_values(values, small, lattice), free, comm) for small in sizes]
    except InputError:
        # A part, such as a slab, may be too thin for a periodic lattice of its own.
        return assumed(problem.numbers, problem.nonzeros, problem.axes)
    return growth(parts[0], parts[1], problem.numbers, problem.axes)


def _shrunk(lattice: Lattice, problem: Problem, most: int) -> Lattice:
    """Return a lattice of the same shape with about so many nonzeros; no axis below what stencils need."""
    factor = (most / problem.nonzeros) ** (1.0 / problem.axes)
    least = 2 * problem.halo + 1
    counts = {
        name: nodes if nodes == 1 else min(nodes, max(least, round(nodes * factor)))
        for name, nodes in zip(("nt", "ny", "nx"), lattice.shape, strict=True)
    }
    return replace(lattice, **counts)


def _shrunk_values(values: Mapping[str, float], small: Lattice, lattice: Lattice) -> dict[str, float]:
    """Return the scalars of a box cut down with its lattice, so that the spacings stay."""
    factors = {
        "period": small.nt / lattice.nt,
        "length_x": small.nx / lattice.nx,
        "length_y": small.ny / lattice.ny,
    }
    return {name: value * factors.get(name, 1.0) for name, value in values.items()}


def _analysed(
    law: Law,
    lattice: Lattice,
    values: Mapping[str, float],
    free: Sequence[str],
    comm: MPI.Intracomm,
    subspace: Subspace | None = None,
) -> Factors:
    system = System(law, lattice, values, free, {}, comm, (), subspace)
    field = system.blocks.vector()
    system.blocks.owned(field)[...] = waves(system)
    # No conditions, no pins: they change no entry's place, and the loops they need would be compiled.
    system.operator.linearise(field, system.values)
    assembled = AssembledJacobian(system.operator)
    found = analysis_of(assembled.update())
    for item in (assembled, field, system):
        item.destroy()
    return found


def analysis_of(matrix: Any) -> Factors:
    """Return what MUMPS's analysis says of an assembled PETSc matrix. Collective."""
    from petsc4py import PETSc

    ksp = PETSc.KSP().create(matrix.comm)
    ksp.setType("preonly")
    ksp.setOperators(matrix)
    pc = ksp.getPC()
    pc.setType("lu")
    pc.setFactorSolverType("mumps")
    pc.setFactorSetUpSolverType()
    factor = pc.getFactorMatrix()
    factor.setMumpsIcntl(23, STOP_NUMERIC)
    ksp.setUp()
    count = factor.getMumpsInfog
    entries = float(count(20))
    # A negative count is in millions: MUMPS users' guide, INFOG(20).
    entries = -1e6 * entries if entries < 0 else entries
    found = Factors(
        int(matrix.getSize()[0]),
        round(matrix.getInfo(PETSc.Mat.InfoType.GLOBAL_SUM)["nz_used"]),
        entries,
        float(factor.getMumpsRinfog(1)),
        float(count(17)),
        float(count(16)),
    )
    ksp.destroy()
    if not math.isfinite(found.flops) or found.entries <= 0:
        return assumed(found.unknowns, found.nonzeros, 2)
    return found
