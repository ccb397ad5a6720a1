"""Solve a law on a lattice in this process, and measure the solution, for tests of the main job."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from lattice.geometry.lattice import Lattice
from lattice.job.schema import SolveSection
from lattice.kernels.forms import sourced
from lattice.laws.catalogue import load_law
from lattice.laws.law import Law
from lattice.solve.newton import Newton, NewtonResult
from lattice.solve.petsc import start_petsc
from lattice.solve.registry import make_preconditioner
from lattice.solve.stop import StopFlag
from lattice.system.assembly import AssembledJacobian
from lattice.system.system import System

Real = NDArray[np.float64]
TURN = 2.0 * np.pi


@dataclass(frozen=True)
class Solved:
    """A converged state.

    Parameters
    ----------
    field : ndarray, shape (nt, ny, nx, components)
    values : dict of str to float
        Every scalar by name.
    result : NewtonResult
    """

    field: Real
    values: dict[str, float]
    result: NewtonResult


def scalars(law: Law, **given: float) -> dict[str, float]:
    """Return every scalar of a law: those given, else the law's defaults, no drift, no source."""
    values = {"period": 1.0, "drift_x": 0.0, **({"drift_y": 0.0} if law.dimensions == 2 else {})}
    values |= {f"source_{c}": 0.0 for c in sourced(law)}
    return {**values, **law.defaults, **given}


def solve(
    law: Law | str,
    lattice: Lattice,
    field: Real,
    free: Sequence[str] = (),
    means: dict[str, float] | None = None,
    residual_rms: float = 1e-10,
    **given: float,
) -> Solved:
    """Solve by Newton with LU on one rank and assert that it converges.

    Parameters
    ----------
    law : Law or str
        A law, or the name of a shipped one.
    lattice : Lattice
    field : ndarray, shape (nt, ny, nx, components), or without components for a law of one
        Start.
    free : sequence of str
        Scalars to solve for.
    means : dict of str to float, optional
        Given means of components whose mean is open.
    residual_rms : float
        Where Newton stops.
    **given : float
        Lengths, period, drifts and parameters that are not the law's defaults.
    """
    from mpi4py import MPI

    start_petsc([])
    law = load_law(law) if isinstance(law, str) else law
    options = SolveSection(residual_rms=residual_rms)
    system = System(law, lattice, scalars(law, **given), free, means or {}, MPI.COMM_SELF)
    newton = Newton(
        system, make_preconditioner("direct", system, options), options, StopFlag(MPI.COMM_SELF), _nothing
    )
    x = system.vector()
    system.pack(np.array(field, dtype=float).reshape(system.blocks.shape), {}, x)
    system.set_reference(x)
    result = newton.solve(x)
    solved = Solved(system.field_of(x), system.values_of(x), result)
    newton.destroy()
    x.destroy()
    system.destroy()
    assert result.converged, f"{result.reason}: {[step.residual_rms for step in result.steps]}"
    return solved


def _nothing(step: Any, x: Any) -> None:
    """Look at no step."""


def residual(law: Law | str, lattice: Lattice, field: Real, **given: float) -> Real:
    """Return the residual of the law's equations at a field, shape (nt, ny, nx, components)."""
    system, x = _system_at(law, lattice, field, given)
    out = system.vector()
    system.residual(x, out)
    found = system.field_of(out)
    for vector in (x, out):
        vector.destroy()
    system.destroy()
    return found


def jacobian(law: Law | str, lattice: Lattice, field: Real, **given: float) -> csr_array:
    """Return the assembled Jacobian of the field at a state, sparse, rows and columns in lattice order."""
    system, x = _system_at(law, lattice, field, given)
    system.linearise(x)
    assembled = AssembledJacobian(system.operator)
    pointers, columns, entries = assembled.update().getValuesCSR()
    # Copies: the arrays belong to the PETSc matrix.
    matrix = csr_array((entries.copy(), columns.copy(), pointers.copy()), shape=2 * (system.blocks.size,))
    assembled.destroy()
    x.destroy()
    system.destroy()
    return matrix


def _system_at(law: Law | str, lattice: Lattice, field: Real, given: dict[str, float]) -> tuple[System, Any]:
    """Return the system of a law without free scalars but its sources, and the unknowns at a field."""
    from mpi4py import MPI

    start_petsc([])
    law = load_law(law) if isinstance(law, str) else law
    system = System(law, lattice, scalars(law, **given), (), {}, MPI.COMM_SELF)
    x = system.vector()
    system.pack(np.array(field, dtype=float).reshape(system.blocks.shape), {}, x)
    system.set_reference(x)
    return system, x


def nodes(count: int, length: float) -> Real:
    """Return the coordinates of periodic nodes."""
    return np.arange(count) * (length / count)


def mean_square(field: Real, length_x: float, derivative: int = 0) -> float:
    """Return the mean square of a derivative in x, by Fourier series on the nodes, shape (..., nx, 1)."""
    spectrum = np.fft.rfft(field[..., 0], norm="forward")
    k = TURN / length_x * np.arange(spectrum.shape[-1])
    weight = np.where((k > 0.0) & (2 * np.arange(k.size) < field.shape[-2]), 2.0, 1.0)
    return float((np.abs(spectrum) ** 2 * k ** (2 * derivative) * weight).sum(axis=-1).mean())


def limit(counts: Sequence[int], results: Sequence[float], order: int) -> float:
    """Return the limit of results on lattices of rising node counts, n nodes erring by a/n^p + b/n^(p+2) + ...

    Richardson, Phil. Trans. A 210 (1911) 307 (from memory).
    """
    n = np.asarray(counts, dtype=float)
    powers = [np.ones_like(n), *(n ** -(order + 2.0 * j) for j in range(len(n) - 1))]
    return float(np.linalg.solve(np.stack(powers, axis=-1), np.asarray(results))[0])


def observed_order(counts: Sequence[int], errors: Sequence[float]) -> float:
    """Return the order shown by the errors of the last two lattices."""
    return float(np.log(abs(errors[-2] / errors[-1])) / np.log(counts[-1] / counts[-2]))
