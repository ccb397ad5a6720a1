"""`lattice solve JOB`: solve a job, here or on several MPI ranks."""

from __future__ import annotations

import argparse
import os
import sys
import time
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

from lattice.batch.codes import CONVERGED, REFUSED
from lattice.environment import Launch, find_launch
from lattice.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Callable

    from mpi4py import MPI

    from lattice.job.schema import Job

EPILOG = """\
Options for PETSc follow after `--`, for instance
  lattice solve jobs/film-first.toml --ranks 4 -- -log_view -ksp_monitor

The run's folder holds state.h5, summary.json, steps.jsonl, job.toml and field.png. The state is written
after every step. Ctrl-C, SIGTERM or SIGUSR1 ends the run at the next step with exit code 4.

exit codes: 0 converged, 2 refused input, 3 not converged (state kept), 4 interrupted with a usable
state, 70 internal failure, 130 interrupted before there was a state.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("job", metavar="JOB", help="a job file")
    parser.add_argument("--ranks", metavar="N", type=_count, help="run on N MPI ranks")
    parser.add_argument("--out", metavar="DIR", help="the run's folder, instead of output.folder")
    parser.add_argument(
        "--set",
        metavar="SECTION.KEY=VALUE",
        action="append",
        default=[],
        dest="overrides",
        help="a value that replaces the job file's; may be repeated",
    )
    parser.add_argument("--force", action="store_true", help="replace the run that the folder holds")
    parser.add_argument(
        "--check",
        action="store_true",
        help="certify the state at the end, as `lattice check` does; the verdict leaves the exit code alone",
    )
    parser.add_argument(
        "--resume",
        action="store_true",
        help="go on with the run that the folder holds, on any number of ranks",
    )
    parser.add_argument(
        "--launcher",
        metavar="COMMAND",
        help="what starts the ranks, with its options; default: LATTICE_LAUNCHER, else mpiexec",
    )


def _count(text: str) -> int:
    if not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"must be an integer >= 1, got '{text}'")
    return int(text)


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    _check_petsc_options(options.petsc_options)
    launch = find_launch()
    if launch is not None and options.ranks not in (None, launch.ranks):
        _refuse(
            launch,
            f"must equal the {launch.ranks} rank(s) that {launch.launcher} started, got {options.ranks};"
            " leave --ranks out",
        )
    if launch is not None and launch.ranks > 1:
        return _run_as_rank(options, launch)
    if options.ranks is not None and options.ranks > 1:
        return _start_ranks(options)
    return _run_alone(options)


def _refuse(launch: Launch, message: str) -> NoReturn:
    """Refuse on all ranks, before MPI is started; the first one tells why."""
    if launch.rank > 0:
        # A launcher may kill the first rank, message unsaid, once another has ended in failure.
        time.sleep(1.0)
        sys.exit(REFUSED)
    raise InputError(message, key="--ranks")


def _check_petsc_options(given: list[str]) -> None:
    if given and not given[0].startswith("-"):
        raise InputError(f"PETSc options must start with a dash, got '{given[0]}'", key="--")


def _start_ranks(options: argparse.Namespace) -> int:
    """Judge the job here, so that a refusal costs no launch, then start the ranks."""
    from lattice.batch.ending import Ending
    from lattice.cli.launch import check_crowd, find_launcher, is_oversubscribed, launch_command, run_ranks

    job, _ = _read_job(options, options.ranks)
    check_crowd(options.ranks)
    launcher = find_launcher(options.launcher)
    if is_oversubscribed(options.ranks):
        print(f"note: {options.ranks} ranks share fewer cores, and will be slow", file=sys.stderr)
    program = [sys.executable, "-m", "lattice", *options.typed]
    command = launch_command(launcher, options.ranks, program)
    ending = Ending(Path(job.output.folder or ""), options.ranks, options.resume)
    return ending.conclude(run_ranks(command, {**os.environ, "PYTHONUNBUFFERED": "1"}, ending.note))


def _run_alone(options: argparse.Namespace) -> int:
    """Solve in this process."""
    job, cautions = _read_job(options, 1)
    warn(job, cautions)
    from lattice.cli.guard import run_guarded, stop_on_signals

    stop_on_signals(alone=True)
    from mpi4py import MPI

    comm = MPI.COMM_WORLD
    return run_guarded(comm, lambda: _solve(options, job, comm), options.debug)


def _run_as_rank(options: argparse.Namespace, launch: Launch) -> int:
    """Solve as one of several ranks that a launcher has started."""
    from lattice.cli.guard import run_guarded, stop_on_signals

    stop_on_signals(alone=False)
    from mpi4py import MPI

    comm = MPI.COMM_WORLD
    if comm.Get_size() != launch.ranks:
        _refuse(
            launch,
            f"{launch.launcher} started {launch.ranks} ranks, but MPI sees {comm.Get_size()}: launcher and"
            " MPI library do not match; use that library's launcher (for srun try --mpi=pmix or --mpi=pmi2)",
        )
    return run_guarded(comm, lambda: _solve_together(options, comm), options.debug)


def _solve_together(options: argparse.Namespace, comm: MPI.Intracomm) -> int:
    """Read the job on one rank, give it to all, solve."""
    answer: tuple[Job | None, str] = (None, "")
    if comm.Get_rank() == 0:
        answer = _answer(options, comm.Get_size())
    job, complaint = comm.bcast(answer)
    if job is None:
        # The same error on all ranks, told by one of them.
        raise InputError(complaint)
    code = _solve(options, job, comm)
    # A rank that left early with another code than 0 would have the launcher kill the rest.
    comm.Barrier()
    return code


def _answer(options: argparse.Namespace, ranks: int) -> tuple[Job | None, str]:
    try:
        job, cautions = _read_job(options, ranks)
    except InputError as error:
        return None, str(error)
    warn(job, cautions)
    return job, ""


def _read_job(options: argparse.Namespace, ranks: int) -> tuple[Job, tuple[str, ...]]:
    from lattice.cli.paths import check_run_folder
    from lattice.job.ranks import check_ranks
    from lattice.job.reader import load_job_with_cautions

    job, cautions = load_job_with_cautions(options.job, options.overrides, folder=options.out)
    check_ranks(job, ranks)
    check_run_folder(Path(job.output.folder or ""), options.force or options.resume)
    return job, cautions


def warn(job: Job, cautions: tuple[str, ...]) -> None:
    """Tell what the user should be warned of."""
    from lattice.job.resolution import resolution_cautions

    for caution in (*cautions, *resolution_cautions(job)):
        print(f"caution: {caution}", file=sys.stderr, flush=True)


def _solve(options: argparse.Namespace, job: Job, comm: MPI.Intracomm) -> int:
    from lattice.job.writer import job_to_toml
    from lattice.solve.run import run_job

    folder, text = Path(job.output.folder or ""), job_to_toml(job)
    report = _report(comm)
    code = run_job(job, folder, comm, options.petsc_options, report, text, options.resume).exit_code
    if options.check and code == CONVERGED:
        _check(job, folder, comm, report)
    return code


def _check(job: Job, folder: Path, comm: MPI.Intracomm, report: Callable[[str], None]) -> None:
    """Check the state that was solved, and print its certificate."""
    from lattice.check.run import CheckOptions, check_state
    from lattice.check.wording import to_text

    options = CheckOptions(preconditioner=job.solve.preconditioner)
    certificate = check_state(folder / "state.h5", comm, options, report)
    report(f"\n{to_text(certificate)}\n{certificate.note}")


def _report(comm: MPI.Intracomm) -> Callable[[str], None]:
    """Return what prints a line of progress on one rank."""
    if comm.Get_rank() > 0:
        return lambda text: None
    return lambda text: print(text, flush=True)
