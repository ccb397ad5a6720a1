"""Memory of one rank by part: what is counted, and what each byte is for.

Counts of arrays are those of `lattice.system`, `lattice.solve` and `lattice.spectral`; the factors are
MUMPS's own figures where they were analysed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from lattice.sizing.factors import Factors
from lattice.sizing.problem import Problem

NUMBER = 8.0
PROGRAM_MB = 250.0
"""A rank before it holds a field: interpreter, PETSc, MPI, HDF5, SymPy, Numba with compiled loops. Measured
here with PETSc 3.18 and Open MPI: 242 to 246 MB."""
FIELDS = 14
"""Field vectors of a solve besides those of every scalar: unknowns, reference, residuals, line search, the
operator's two padded blocks, the copy that is written."""
PER_SCALAR = 5
"""Field vectors of every free scalar: Jacobian column, template, two of the border, pin."""
KRYLOV_CHUNK = 10
"""PETSc's flexible GMRES makes vectors for so many iterations at a time, two for each."""
MATRIX_BYTES = 26.0
"""Of a nonzero of the assembled Jacobian: pattern and values here (12), in PETSc (12), in its set-up."""
HANDED_BYTES = 18.0
"""Of a nonzero in the copy that PETSc hands to MUMPS, and MUMPS's analysis."""
SPREAD_BYTES = 40.0
"""The same where the matrix is spread over ranks."""
USED = 1.0
"""Of the workspace that MUMPS asks for, the part it touches, with what it is handed."""
TRANSFORM = 9
"""Field-size arrays of a transform: pencils, spectra, plans' own buffers, what is moved to them."""
SYMBOL = 4
"""Arrays of C x C complex numbers per mode while a symbol is made and inverted."""
COARSE_FIELDS = 12
"""Field vectors of the two-level preconditioner on the fine lattice, transfer included."""
DAMPED_FIELDS = 13
"""Field vectors of the damped stage: six of steps, five of conjugate gradients, two more."""


@dataclass(frozen=True)
class LuTask:
    """A matrix that is factorised.

    Parameters
    ----------
    problem : Problem
        The lattice it belongs to.
    factors : Factors
        Of one matrix, spread over the ranks where it is shared.
    copies : int
        Such matrices on every rank; 1 where it is shared.
    shared : bool
        All ranks hold one matrix together.
    """

    problem: Problem
    factors: Factors
    copies: int = 1
    shared: bool = True


def memory_parts(
    problem: Problem,
    ranks: int,
    iterations: int,
    tasks: Sequence[LuTask],
    coarse: Problem | None = None,
    spectral: bool = False,
    damped: bool = False,
    program_mb: float = PROGRAM_MB,
) -> dict[str, float]:
    """Return the memory of the fullest rank by part, MB (1e6 bytes).

    Parameters
    ----------
    problem : Problem
    ranks : int
    iterations : int
        Of the longest linear solve.
    tasks : sequence of LuTask
        What is factorised.
    coarse : Problem, optional
        The coarse lattice, where there are two levels.
    spectral : bool
        The spectral smoother is used.
    damped : bool
        Damped steps are made.
    program_mb : float
        A rank before it holds a field.

    Returns
    -------
    dict of str to float
        program, fields, Krylov basis, matrix, LU, FFT, damped stage; parts that are absent are left out.
    """
    owned, padded = problem.owned(ranks), problem.padded(ranks)
    vectors = FIELDS + PER_SCALAR * problem.scalars
    fields = NUMBER * (vectors * owned + 2 * padded)
    parts = {"program": program_mb}
    two_level = coarse is not None
    if coarse is not None:
        small = coarse.owned(ranks)
        more = (
            COARSE_FIELDS * owned + (FIELDS + PER_SCALAR * coarse.scalars) * small + 2 * coarse.padded(ranks)
        )
        fields += NUMBER * more
    parts["fields"] = fields / 1e6
    parts["Krylov basis"] = NUMBER * 2 * KRYLOV_CHUNK * -(-(iterations + 2) // KRYLOV_CHUNK) * owned / 1e6
    matrix = lu = 0.0
    for task in tasks:
        own = task.problem.nonzeros / ranks if task.shared else task.problem.nonzeros * task.copies
        matrix += MATRIX_BYTES * own
        lu += (SPREAD_BYTES if task.shared and ranks > 1 else HANDED_BYTES) * own
        lu += 1e6 * USED * (task.factors.largest if task.shared else task.factors.megabytes * task.copies)
    if any(not task.shared for task in tasks):
        matrix += MATRIX_BYTES * problem.nonzeros / ranks  # the whole one, from which patches are cut
    if tasks:
        parts["matrix"], parts["LU"] = matrix / 1e6, lu / 1e6
    if two_level or damped:
        parts["FFT"] = _transforms(problem, ranks, coarse, spectral or damped) / 1e6
    if damped:
        parts["damped stage"] = NUMBER * DAMPED_FIELDS * owned / 1e6
        parts["damped stage"] += _symbols(problem, ranks) / 1e6
    return parts


def _transforms(problem: Problem, ranks: int, coarse: Problem | None, symbols: bool) -> float:
    """Return the bytes of transforms and symbols."""
    total = NUMBER * TRANSFORM * problem.owned(ranks)
    if coarse is not None:
        total += NUMBER * TRANSFORM * coarse.owned(ranks)
    return total + (_symbols(problem, ranks) if symbols else 0.0)


def _symbols(problem: Problem, ranks: int) -> float:
    modes = 0.5 * problem.owned(ranks) / problem.components
    return 2 * NUMBER * modes * SYMBOL * problem.components**2


def checkpoint_mb(problem: Problem) -> float:
    """Return the largest size of a state file of the whole lattice, MB."""
    return (NUMBER * problem.numbers + 60_000) / 1e6
