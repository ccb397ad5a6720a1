"""The inner preconditioners: exact where they should be, adjoint where asked, clear where they fail."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice.errors import FactorisationError, LatticeError
from lattice.job.schema import PatchesSection, SolveSection
from lattice.solve import direct
from lattice.solve.registry import make_preconditioner
from lattice.system.system import System
from tests.film import film_start, film_state, film_system, solve_film
from tests.parallel import results
from tests.problems import ALL, law_of, random_direction, random_unknowns, system_of

STEADY = pytest.mark.parametrize("steady", [False, True], ids=["periodic", "steady"])
PATCHED = SolveSection(preconditioner="patches", patches=PatchesSection(nt=4, nx=8, overlap=2))
MB = 2**20


@pytest.fixture(autouse=True)
def numpy_kernels(monkeypatch: pytest.MonkeyPatch) -> None:
    # That compiled loops equal these is shown in test_kernels.
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


@pytest.fixture
def petsc_option() -> Iterator[Callable[[str, str], None]]:
    """Set options in PETSc's database and take them out after the test."""
    from petsc4py import PETSc

    names = []

    def set_option(name: str, value: str) -> None:
        names.append(name)
        PETSc.Options().setValue(name, value)

    yield set_option
    for name in names:
        PETSc.Options().delValue(name)


def gauged(name: str) -> bool:
    return bool(law_of(name).symmetries.gauge)


def linearised(system: System, seed: int) -> None:
    x = random_unknowns(system, seed)
    system.set_reference(x)
    system.linearise(x)
    x.destroy()


def inverse_error(system: System, made: Any) -> float:
    """Return how far J times the inverse times r is from r, relative to r."""
    r, y, back = random_direction(system, 7), system.vector(), system.vector()
    made.apply(r, y)
    system.tangent(y, back)
    back.axpy(-1.0, r)
    error = back.norm() / r.norm()
    for vector in (r, y, back):
        vector.destroy()
    return float(error)


def adjoint_error(system: System, made: Any) -> float:
    """Return how far <w, P r> is from <P^T w, r>, relative to the norms."""
    r, w = random_direction(system, 8), random_direction(system, 9)
    along, back = system.vector(), system.vector()
    made.apply(r, along)
    made.apply_transpose(w, back)
    error = abs(w.dot(along) - back.dot(r)) / (w.norm() * along.norm() + back.norm() * r.norm())
    for vector in (r, w, along, back):
        vector.destroy()
    return float(error)


@STEADY
@pytest.mark.parametrize("usual", [True, False], ids=["frame", "box"])
@pytest.mark.parametrize("name", ALL)
def test_direct_inverts_the_bordered_jacobian_of_every_law(name: str, usual: bool, steady: bool) -> None:
    system = system_of(name, steady, usual)
    linearised(system, 4)
    made = make_preconditioner("direct", system, SolveSection())
    made.update()
    # The factorised matrix has 1e-7 of a gauge component in place of its mean: what that changes is 1e-7
    # of a component that may be much larger than the right-hand side.
    assert inverse_error(system, made) < (1e-3 if gauged(name) else 1e-9)
    assert adjoint_error(system, made) < (1e-7 if gauged(name) else 1e-12)
    made.destroy()
    system.destroy()


@pytest.mark.parametrize("name", ["kuramoto-sivashinsky", "film-2d", "kolmogorov", "constrained"])
def test_the_transpose_of_overlapping_patches_is_exact(name: str) -> None:
    system = system_of(name)
    linearised(system, 4)
    made = make_preconditioner("patches", system, PATCHED)
    made.update()
    assert adjoint_error(system, made) < (1e-9 if gauged(name) else 1e-12)
    assert inverse_error(system, made) > 1e-3  # patches that cover the lattice would make this no test
    made.destroy()
    system.destroy()


def test_direct_is_exact_at_a_state_where_the_jacobian_is_singular() -> None:
    system = film_system()
    field, values = film_state()
    x, slid = system.vector(), system.vector()
    system.pack(field, values, x)
    system.set_reference(x)
    system.linearise(x)
    # The state may slide in time: J u_t = 0 but for the lattice's own small change of it.
    shift = np.gradient(np.concatenate([field[-2:], field, field[:2]]), axis=0)[2:-2]
    system.store(slid, shift.reshape(-1), np.zeros(len(system.unknowns)))
    out = system.vector()
    system.tangent(slid, out)
    assert np.linalg.norm(system.field_of(out)) < 0.05 * np.linalg.norm(shift)
    made = make_preconditioner("direct", system, SolveSection())
    made.update()
    assert inverse_error(system, made) < 1e-9
    made.destroy()
    for vector in (x, slid, out):
        vector.destroy()
    system.destroy()


def test_direct_needs_at_most_three_linear_iterations_a_step(ranks: int) -> None:
    for name in ("film direct", "shear direct"):
        assert max(results(ranks)["solves"][name]["iterations"]) <= 3


def test_patches_of_given_sizes_converge_also_with_a_gauge(ranks: int) -> None:
    for name in ("film patches", "shear patches"):
        found = results(ranks)["solves"][name]
        assert found["converged"]
        assert max(found["iterations"]) < 100


def test_transposes_are_exact_on_any_ranks(ranks: int) -> None:
    for name, found in results(ranks)["solves"].items():
        assert found["adjoint"] < (1e-7 if name.startswith("shear") else 1e-12), name


def test_one_patch_that_is_the_whole_lattice_solves_like_direct() -> None:
    # The Jacobian of this patch is singular at the solution; it is pinned as the direct solver pins it.
    solve = solve_film(film_start(), preconditioner="patches")
    assert solve.result.converged
    assert max(step.linear_iterations for step in solve.result.steps) <= 1
    solve.destroy()


def test_more_workspace_is_tried_where_mumps_asks_for_it(monkeypatch: pytest.MonkeyPatch) -> None:
    needs_mumps()
    tried: list[int] = []
    attempt = direct.Factorisation._attempt

    def watched(self: Any, matrix: Any, relaxation: int) -> dict[str, int]:
        tried.append(relaxation)
        status = attempt(self, matrix, relaxation)
        assert (status["INFOG(1)"] == -9) == (relaxation < 0)
        return status

    monkeypatch.setattr(direct, "RELAXATIONS", (-80, -60, 20, 50))
    monkeypatch.setattr(direct.Factorisation, "_attempt", watched)
    system = film_system()
    linearised(system, 4)
    made = make_preconditioner("direct", system, SolveSection())
    made.update()
    assert tried == [-80, -60, 20]
    assert inverse_error(system, made) < 1e-9
    made.destroy()
    system.destroy()


@pytest.mark.parametrize(("kind", "prefix"), [("direct", "direct_"), ("patches", "patches_sub_")])
def test_workspace_that_stays_too_small_is_an_error_with_the_numbers(
    kind: str, prefix: str, petsc_option: Callable[[str, str], None]
) -> None:
    needs_mumps()
    system = film_system()
    linearised(system, 4)
    petsc_option(f"{prefix}mat_mumps_icntl_14", "-80")
    made = make_preconditioner(kind, system, SolveSection(preconditioner=kind))
    with pytest.raises(LatticeError, match=r"INFOG\(1\) = -9, INFOG\(2\) = \d+") as caught:
        made.update()
    assert "too small at -80 percent" in str(caught.value)
    assert f"'-- -{prefix}mat_mumps_icntl_14 400'" in str(caught.value)
    made.destroy()
    system.destroy()


@pytest.mark.parametrize("kind", ["direct", "patches"])
def test_a_jacobian_that_is_not_finite_is_a_clear_error(kind: str) -> None:
    needs_mumps()
    system = film_system()
    x = random_unknowns(system, 4)
    system.set_reference(x)
    x.getArray()[5] = np.nan
    system.linearise(x)
    made = make_preconditioner(kind, system, SolveSection(preconditioner=kind))
    with pytest.raises(LatticeError, match=r"INFOG\(1\) = -10.* singular or not finite"):
        made.update()
    made.destroy()
    x.destroy()
    system.destroy()


def test_a_failure_leaves_nothing_behind_that_spoils_the_next_set_up() -> None:
    system = film_system()
    good, bad = random_unknowns(system, 4), random_unknowns(system, 4)
    system.set_reference(good)
    bad.getArray()[5] = np.nan
    made = make_preconditioner("direct", system, SolveSection())
    system.linearise(bad)
    with pytest.raises(FactorisationError):
        made.update()
    system.linearise(good)
    made.update()
    assert inverse_error(system, made) < 1e-9
    made.destroy()
    for vector in (good, bad):
        vector.destroy()
    system.destroy()


def resident_memory() -> float:
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * 4096 / MB


@pytest.mark.parametrize("kind", ["direct", "patches"])
def test_memory_does_not_grow_from_set_up_to_set_up(kind: str) -> None:
    system = system_of("swift-hohenberg-2d", order=4)
    made = make_preconditioner(kind, system, SolveSection(preconditioner=kind))
    seen = []
    for seed in range(12):
        linearised(system, seed)
        made.update()
        seen.append(resident_memory())
    # The factors of one set-up take tens of MB: keeping those of one would show.
    assert seen[-1] - seen[3] < 5.0, seen
    made.destroy()
    system.destroy()


def needs_mumps() -> None:
    if direct.lu_package(1) != "mumps":
        pytest.skip("this PETSc has no MUMPS")
