"""Newton's method: how fast it converges, how it ends, and that no rank is ever left waiting."""

from __future__ import annotations

import itertools
import json
import os
import signal
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice.errors import LatticeError
from lattice.geometry.lattice import Lattice
from lattice.job.schema import PatchesSection, SolveSection
from lattice.laws.catalogue import read_law
from lattice.solve import reasons
from lattice.solve.newton import Newton, Step
from lattice.solve.registry import make_preconditioner
from lattice.solve.stop import StopFlag
from lattice.store.statefile import read_meta
from lattice.system.system import System
from tests.film import far_start, film_start, film_state, film_system, solve_film
from tests.mpi import run_ranks
from tests.problems import TURN, values_of


@pytest.fixture(autouse=True)
def numpy_kernels(monkeypatch: pytest.MonkeyPatch) -> None:
    # That compiled loops equal these is shown in test_kernels.
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


class Asked:
    """A stop flag that has been asked to stop from its `after`-th look on."""

    name, agreed = "SIGUSR1", 0

    def __init__(self, after: int) -> None:
        self.left = after

    def poll(self) -> bool:
        self.left -= 1
        self.agreed = int(signal.SIGUSR1) if self.left < 0 else 0
        return self.left < 0


def residuals(result: Any) -> list[float]:
    return [step.residual_rms for step in result.steps]


def test_steps_square_the_residual_near_a_state() -> None:
    solve = solve_film(film_start(), linear_rtol=1e-10, residual_rms=1e-12)
    found = residuals(solve.result)
    assert solve.result.converged
    assert solve.result.reason == "residual_rms is at most 1.0e-12"
    assert len(found) <= 6
    # Kantorovich's theorem: r[k+1] <= C r[k]**2 with one C, until rounding (1e-13 here) takes over.
    quotients = [after / before**2 for before, after in itertools.pairwise(found) if after > 1e-12]
    assert len(quotients) >= 3
    assert max(quotients) < 20.0
    solve.destroy()


def test_the_residual_of_a_result_is_that_of_its_vector() -> None:
    solve = solve_film(film_start(), newton_steps=2)
    out = solve.system.vector()
    solve.system.residual(solve.x, out)
    assert out.norm() / solve.system.root_size == pytest.approx(residuals(solve.result)[-1], rel=1e-12)
    function = solve.newton.function().copy()
    function.axpy(-1.0, out)
    assert function.norm() <= 1e-12 * out.norm()
    for vector in (out, function):
        vector.destroy()
    solve.destroy()


def test_each_step_is_told_once_with_the_vector_it_ends_at() -> None:
    seen: list[tuple[int, float, float]] = []

    def after_step(step: Step, x: Any) -> None:
        seen.append((step.number, step.residual_rms, x.norm()))

    solve = solve_film(film_start(), after_step=after_step)
    assert [number for number, *_ in seen] == list(range(len(solve.result.steps)))
    assert [rms for _, rms, _ in seen] == residuals(solve.result)
    assert seen[-1][2] == pytest.approx(solve.x.norm(), rel=1e-14)
    assert solve.result.linear_iterations == solve.newton._snes.getLinearSolveIterations()
    solve.destroy()


def test_the_line_search_never_lets_the_residual_grow() -> None:
    searched = solve_film(far_start(), newton_steps=8)
    found = residuals(searched.result)
    assert all(after < before for before, after in itertools.pairwise(found))
    searched.destroy()
    # A second solve in the same process must not inherit the first one's options.
    plain = solve_film(far_start(), newton_steps=8, line_search=False)
    assert max(residuals(plain.result)) > 10 * found[0]
    assert not plain.result.converged
    plain.destroy()


def test_a_residual_that_grows_without_bound_ends_the_solve() -> None:
    solve = solve_film(far_start(), newton_steps=40, line_search=False)
    assert solve.result.reason == "the residual grows without bound"
    assert not solve.result.interrupted
    assert len(solve.result.steps) < 20
    solve.destroy()


def no_root(**options: Any) -> tuple[System, Newton, Any]:
    """Return a solve of u_t + u**2 + 1 = u_xx, which has no steady state, and its start."""
    from mpi4py import MPI

    law, lattice = read_law("own", ["u_t + u**2 + 1 = u_xx"], ["u"], {}, 1), Lattice(1, 1, 16)
    values = {**values_of(law), "period": 1.0, "drift_x": 0.0, "length_x": 6.0}
    system = System(law, lattice, values, (), {}, MPI.COMM_SELF)
    section = SolveSection(preconditioner="direct", **options)
    made = make_preconditioner("direct", system, section)
    newton = Newton(system, made, section, StopFlag(system.comm), lambda step, x: None)
    x = system.vector()
    system.pack(0.7 + 0.1 * np.cos(TURN * np.arange(16) / 16)[None, None, :, None], {}, x)
    system.set_reference(x)
    return system, newton, x


def test_an_equation_without_a_solution_is_not_solved() -> None:
    system, newton, x = no_root()
    result = newton.solve(x)
    assert not result.converged
    assert result.reason == "no step lowers the residual any more"
    # |u**2 + 1| has its least value 1 at u = 0.
    assert residuals(result)[-1] == pytest.approx(1.0, rel=1e-3)
    newton.destroy()
    x.destroy()
    system.destroy()


@pytest.mark.parametrize("steps", [0, 1, 2])
def test_the_step_limit_ends_the_solve_with_the_last_step_kept(steps: int) -> None:
    solve = solve_film(film_start(), newton_steps=steps)
    assert not solve.result.converged
    assert not solve.result.interrupted
    assert solve.result.reason == "the largest number of Newton steps is used up"
    assert len(solve.result.steps) == steps + 1
    solve.destroy()


def test_a_solution_needs_no_step() -> None:
    field, values = film_state()
    system = film_system()
    section = SolveSection(residual_rms=1e-10, newton_steps=0, preconditioner="direct")
    made = make_preconditioner("direct", system, section)
    newton = Newton(system, made, section, StopFlag(system.comm), lambda step, x: None)
    x = system.vector()
    system.pack(field, values, x)
    system.set_reference(x)
    result = newton.solve(x)
    assert result.converged
    assert len(result.steps) == 1
    newton.destroy()
    x.destroy()
    system.destroy()


def test_linear_solves_that_do_not_converge_are_told_with_a_remedy() -> None:
    patches = PatchesSection(nt=4, nx=8, overlap=0)
    solve = solve_film(film_start(), preconditioner="patches", patches=patches, linear_iterations=3)
    assert not solve.result.converged
    assert solve.result.reason == (
        "a linear solve failed: it reached the largest number of iterations; raise solve.linear_iterations or "
        "change the preconditioner"
    )
    solve.destroy()


def test_a_start_that_is_not_finite_is_refused() -> None:
    start = film_start().copy()
    start[3, 0, 4, 0] = np.nan
    with pytest.raises(LatticeError, match="the field is not finite everywhere"):
        solve_film(start)


def test_a_residual_that_is_not_finite_ends_the_solve() -> None:
    system, newton, x = no_root()
    x.getArray()[3] = np.nan
    result = newton.solve(x)
    assert not result.converged
    assert result.reason == "the residual is not finite"
    newton.destroy()
    x.destroy()
    system.destroy()


@pytest.mark.parametrize("name", ["SNORM_RELATIVE", "LINE_SEARCH", "MAX_IT", "LINEAR_SOLVE", "DTOL"])
def test_every_way_petsc_ends_a_solve_has_words(name: str) -> None:
    from petsc4py import PETSc

    kinds = PETSc.SNES.ConvergedReason
    number = getattr(kinds, f"CONVERGED_{name}", None) or getattr(kinds, f"DIVERGED_{name}")
    assert not reasons.nonlinear_text(int(number)).startswith("PETSc")


def test_a_request_between_steps_keeps_the_last_step() -> None:
    solve = solve_film(film_start(), stop=Asked(2))
    assert solve.result.interrupted
    assert not solve.result.converged
    assert solve.result.reason == "stopped by SIGUSR1"
    assert len(solve.result.steps) == 3
    solve.destroy()


def test_a_request_during_a_linear_solve_keeps_the_step_before_it() -> None:
    patches = PatchesSection(nt=4, nx=8, overlap=0)
    before: list[float] = []
    solve = solve_film(
        film_start(), Asked(3), lambda step, x: before.append(x.norm()),
        preconditioner="patches", patches=patches,
    )  # fmt: skip
    assert solve.result.interrupted
    assert solve.newton._snes.getLinearSolveIterations() < 100
    assert solve.x.norm() == before[-1]
    solve.destroy()


def test_a_request_that_comes_with_the_solution_does_not_spoil_it() -> None:
    steps = len(residuals_of_film())
    solve = solve_film(film_start(), stop=Asked(steps - 1))
    assert solve.result.converged
    assert not solve.result.interrupted
    solve.destroy()


def residuals_of_film() -> list[float]:
    solve = solve_film(film_start())
    found = residuals(solve.result)
    solve.destroy()
    return found


def test_a_signal_is_remembered_and_its_handler_put_back() -> None:
    from mpi4py import MPI

    before = signal.getsignal(signal.SIGUSR1)
    with StopFlag(MPI.COMM_SELF) as stop:
        assert not stop.poll()
        assert stop.name == ""
        os.kill(os.getpid(), signal.SIGUSR1)
        assert stop.poll()
        assert stop.name == "SIGUSR1"
    assert signal.getsignal(signal.SIGUSR1) is before


JOB = """
law.name = "kuramoto-sivashinsky"
box = { period = 17.67, length_x = 17.631 }
lattice = { nt = 32, nx = 32 }
start = { kind = "array", file = "film.npy" }
solve = { preconditioner = "direct", residual_rms = 1e-30 }
output.picture = false
"""

# After two steps are on disk, the second rank alone gets SIGUSR1; each rank tells where it stopped.
ONE_SIGNAL = """
import os, subprocess, sys, time
from lattice import environment
environment.prepare()
from mpi4py import MPI
from lattice.cli.main import main
from lattice.solve.newton import Newton
from lattice.system.system import System
comm = MPI.COMM_WORLD
linearise = System.linearise
def slowly(self, x):
    time.sleep(0.3)  # on a fast machine the solve would be over before the signal
    linearise(self, x)
System.linearise = slowly
if comm.rank == 1:
    wait = "while [ ! -s run/steps.jsonl ] || [ $(wc -l < run/steps.jsonl) -lt 2 ]; do sleep 0.02; done"
    subprocess.Popen(["sh", "-c", f"{wait}; kill -USR1 {os.getpid()}"])
solve = Newton.solve
def told(self, x):
    result = solve(self, x)
    print(f"rank {comm.rank}: {len(result.steps)} {result.reason} {x.norm():.12e}", flush=True)
    return result
Newton.solve = told
sys.exit(main(["solve", "film.toml", "--out", "run"]))
"""

# The third tangent product fails on one rank, after the other may have gone on.
ONE_FAILURE = """
import sys
from lattice import environment
environment.prepare()
from mpi4py import MPI
from lattice.cli.main import main
from lattice.system.system import System
tangent, calls = System.tangent, []
def failing(self, v, out):
    calls.append(1)
    if MPI.COMM_WORLD.rank == 1 and len(calls) == 3:
        raise ArithmeticError("a broken product")
    tangent(self, v, out)
System.tangent = failing
sys.exit(main(["solve", "film.toml", "--out", "run"]))
"""


@pytest.fixture
def job_folder(tmp_path: Path) -> Path:
    (tmp_path / "film.toml").write_text(JOB, encoding="utf-8")
    np.save(tmp_path / "film.npy", film_start())
    return tmp_path


def test_a_signal_to_one_rank_stops_all_at_the_same_step_with_code_4(job_folder: Path) -> None:
    done = run_ranks(2, ONE_SIGNAL, cwd=job_folder, check=False, timeout=120.0)
    assert done.returncode == 4, done.stdout + done.stderr
    told = [line.partition(": ")[2] for line in done.stdout.splitlines() if line.startswith("rank ")]
    assert len(told) == 2
    assert told[0] == told[1]
    assert "stopped by SIGUSR1" in told[0]
    state = read_meta(job_folder / "run" / "state.h5")
    steps = [json.loads(line) for line in (job_folder / "run" / "steps.jsonl").read_text().splitlines()]
    assert state.outcome == "interrupted"
    assert len(state.history) == len(steps) == int(told[0].split()[0])


def test_a_failing_rank_ends_the_run_with_one_message(job_folder: Path) -> None:
    done = run_ranks(2, ONE_FAILURE, cwd=job_folder, check=False, timeout=120.0)
    assert done.returncode == 70
    assert done.stderr.count("rank 1 of 2: internal failure: ArithmeticError: a broken product") == 1
    assert "Traceback" not in done.stderr
    assert read_meta(job_folder / "run" / "state.h5").outcome == "running"
