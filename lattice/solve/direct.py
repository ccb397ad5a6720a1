"""The `direct` preconditioner: sparse LU of the assembled lattice Jacobian.

At a solution the Jacobian is singular along every phase and open mean. One diagonal entry per border is
therefore raised (a pin) before it is factorised; the bordering undoes the pins exactly.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from lattice.errors import FactorisationError
from lattice.system.assembly import AssembledJacobian, rescale_gauge
from lattice.system.unknowns import LOOSE

if TYPE_CHECKING:
    from lattice.system.system import System

RELAXATIONS = (20, 50, 100, 200)
"""Percent of workspace beyond MUMPS's own estimate, tried in turn (20 is its default)."""
WORKSPACE_CODES = (-8, -9, -17, -20)
"""INFOG(1) values that a larger workspace can cure."""


def lu_package(comm_size: int) -> str:
    """Return the LU package to use: MUMPS, else SuperLU_DIST, else PETSc's own."""
    from petsc4py import PETSc

    for name in ("mumps", "superlu_dist"):
        if PETSc.Sys.hasExternalPackage(name):
            return name
    return "petsc" if comm_size == 1 else "redundant"


class Factorisation:
    """LU factors of one matrix at a time, rebuilt with more workspace where MUMPS asks for it.

    Collective. The analysis of a matrix is kept: when its values change, only they are factorised anew.

    Parameters
    ----------
    prefix : str
        Of its options in PETSc's database.
    comm : MPI.Comm
    """

    def __init__(self, prefix: str, comm: Any) -> None:
        self.prefix, self.comm = prefix, comm
        self.package = lu_package(comm.size)
        self._ksp: Any = None
        self._matrix: Any = None

    def factor(self, matrix: Any) -> None:
        """Factorise a matrix, replacing the factors held before.

        `matrix` must outlive the factors.

        Raises
        ------
        FactorisationError
            With the package's numbers, after every permitted retry.
        """
        if self._ksp is not None and self._matrix == matrix and self._renew(matrix):
            return
        relaxations = RELAXATIONS if self.package == "mumps" else (0,)
        for relaxation in relaxations:
            status = self._attempt(matrix, relaxation)
            if status["INFOG(1)"] >= 0:
                self._matrix = matrix
                return
            if status["INFOG(1)"] not in WORKSPACE_CODES or status["ICNTL(14)"] != relaxation:
                break  # a larger workspace is no cure, or the user's option sets it
        self.destroy()
        raise FactorisationError(_explain(status, self.prefix), status)

    def _renew(self, matrix: Any) -> bool:
        """Factorise new values with the old analysis; tell whether that worked."""
        self._ksp.setOperators(matrix)
        self._ksp.setUp()
        return bool(self._ksp.getConvergedReason() >= 0 and self._status(self._ksp.getPC())["INFOG(1)"] >= 0)

    def _attempt(self, matrix: Any, relaxation: int) -> dict[str, int]:
        from petsc4py import PETSc

        self.destroy()
        ksp = self._ksp = PETSc.KSP().create(self.comm)
        ksp.setOptionsPrefix(self.prefix)
        ksp.setType("preonly")
        ksp.setOperators(matrix)
        pc = ksp.getPC()
        if self.package == "redundant":
            pc.setType("redundant")
        else:
            pc.setType("lu")
            pc.setFactorSolverType(self.package)
        if self.package == "mumps":
            pc.setFactorSetUpSolverType()
            factor = pc.getFactorMatrix()
            # PETSc gives it the prefix at a matrix's second factorisation only.
            factor.setOptionsPrefix(self.prefix)
            factor.setMumpsIcntl(14, relaxation)
        ksp.setFromOptions()
        ksp.setUp()
        return self._status(pc)

    def _status(self, pc: Any) -> dict[str, int]:
        """Return MUMPS's own numbers; "INFOG(1)" of 0 alone where another package factorised."""
        if self.package == "mumps" and pc.getFactorSolverType() == "mumps":
            return _mumps_status(pc)
        return {"INFOG(1)": 0}

    def numbers(self) -> dict[str, float]:
        """Return what the factors cost: entries and operations of all ranks, and of this one.

        Not collective; empty before the first factorisation, and where another package than MUMPS made it.
        """
        pc = self._ksp.getPC() if self._ksp is not None else None
        if pc is None or self.package != "mumps" or pc.getFactorSolverType() != "mumps":
            return {}
        factor = pc.getFactorMatrix()
        entries = {"entries": factor.getMumpsInfog(29), "own_entries": factor.getMumpsInfo(27)}
        flops = {"flops": factor.getMumpsRinfog(3), "own_flops": factor.getMumpsRinfo(3)}
        # A negative count is in millions (MUMPS users' guide).
        return {name: float(n if n >= 0 else -1e6 * n) for name, n in entries.items()} | flops

    def solve(self, r: Any, y: Any, transpose: bool = False) -> None:
        """Set `y` to the solution for right-hand side `r`.

        Raises
        ------
        FactorisationError
            If the factors turn out unusable.
        """
        (self._ksp.solveTranspose if transpose else self._ksp.solve)(r, y)
        reason = self._ksp.getConvergedReason()
        if reason < 0:
            raise FactorisationError(
                f"the factorised matrix cannot be solved with (PETSc reason {reason}): it is singular or not "
                "finite; start from another field or raise the resolution"
            )

    def destroy(self) -> None:
        """Free the factors. Collective."""
        if self._ksp is not None:
            self._ksp.destroy()
            self._ksp = self._matrix = None


def _mumps_status(pc: Any) -> dict[str, int]:
    factor = pc.getFactorMatrix()
    status = {f"INFOG({k})": int(factor.getMumpsInfog(k)) for k in (1, 2, 16, 17, 18, 19)}
    return status | {"ICNTL(14)": int(factor.getMumpsIcntl(14))}


def _explain(status: dict[str, int], prefix: str) -> str:
    code = status["INFOG(1)"]
    estimate = f"{status['INFOG(17)']} MB in all, {status['INFOG(16)']} MB on the fullest rank"
    numbers = f"MUMPS INFOG(1) = {code}, INFOG(2) = {status['INFOG(2)']}"
    if code in WORKSPACE_CODES:
        advice = (
            f"its workspace was still too small at {status['ICNTL(14)']} percent extra; try"
            f" '-- -{prefix}mat_mumps_icntl_14 400'"
        )
    elif code in (-13, -19):
        advice = (
            f"memory ran out (estimate {estimate}); use more ranks or nodes, a smaller lattice, or another"
            " preconditioner"
        )
    elif code == -10:
        advice = (
            "the matrix is singular or not finite; start from another field or free the scalars that are held"
        )
    else:
        advice = f"see INFOG in the MUMPS users' guide (estimate {estimate})"
    return f"LU factorisation failed ({numbers}): {advice}"


class Direct:
    """LU of the whole field Jacobian; see the module's description.

    Parameters
    ----------
    system : System
    options : object
        The job's solve section; nothing of it is used here.
    prefix : str
        Of its options in PETSc's database.
    ranks : int, optional
        Most ranks that share the factors; all by default.
    """

    def __init__(
        self, system: System, options: Any = None, prefix: str = "direct_", ranks: int | None = None
    ) -> None:
        self.system = system
        self._assembled = AssembledJacobian(system.operator)
        self._lu = _factorisation(prefix, system.comm, ranks)
        self.pins: list[tuple[int, float]] = []

    def update(self) -> None:
        """Assemble and factorise at the system's point of linearisation. Collective."""
        matrix = self._assembled.update()
        self.pins = choose_pins(self.system, matrix)
        self._assembled.add_to_diagonal(self.pins)
        self._lu.factor(matrix)

    def numbers(self) -> dict[str, float]:
        """Return what the factors cost, where that is known; see `Factorisation.numbers`."""
        return dict(self._lu.numbers()) if isinstance(self._lu, Factorisation) else {}

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to the inverse of the pinned Jacobian times `r`. Collective."""
        self._lu.solve(r, y)
        rescale_gauge(self.system.operator, y)

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transposed inverse times `r`. Collective."""
        scaled = r.copy()
        rescale_gauge(self.system.operator, scaled)
        self._lu.solve(scaled, y, transpose=True)
        scaled.destroy()

    def destroy(self) -> None:
        """Free factors and matrix. Collective."""
        self._lu.destroy()
        self._assembled.destroy()


def _factorisation(prefix: str, comm: Any, ranks: int | None) -> Any:
    """Return LU factors on all ranks, or on a number of them."""
    if ranks is None or ranks >= comm.size:
        return Factorisation(prefix, comm)
    from lattice.solve.gathered import GatheredFactorisation

    return GatheredFactorisation(prefix, comm, ranks)


def choose_pins(system: System, matrix: Any) -> list[tuple[int, float]]:
    """Return one diagonal entry to raise per border: where its near-null vector is largest.

    The near-null vectors of the phases are the state's derivatives; each is reduced by those before it at
    their pins, as in Gaussian elimination with pivoting. Collective.
    """
    # Not the diagonal's size: it is zero throughout for a law of odd derivatives only.
    size = matrix.norm() / system.root_size
    chosen: list[tuple[int, Any]] = []
    for unknown in system.unknowns:
        if unknown.condition == LOOSE:
            continue
        candidate = _near_null(system, unknown.condition)
        for row, earlier in chosen:
            candidate.axpy(-_entry(candidate, row) / _entry(earlier, row), earlier)
        sizes = candidate.copy()
        sizes.abs()
        row, largest = sizes.max()
        sizes.destroy()
        if largest > 0.0:
            chosen.append((row, candidate))
        else:
            candidate.destroy()
    pins = [(int(row), float(size)) for row, _ in chosen]
    for _, vector in chosen:
        vector.destroy()
    return pins


def _near_null(system: System, condition: str) -> Any:
    kind, _, which = condition.partition("_")
    if kind == "phase":
        return system.template(condition).copy()
    vector = system.blocks.vector()
    system.blocks.owned(vector)[..., system.law.components.index(which)] = 1.0
    return vector


def _entry(vector: Any, row: int) -> float:
    """Return one entry of a distributed vector, on every rank."""
    low, high = vector.getOwnershipRange()
    mine = float(vector.getValue(row)) if low <= row < high else 0.0
    return float(vector.comm.tompi4py().allreduce(mine))
