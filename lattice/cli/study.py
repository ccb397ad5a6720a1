"""`lattice study FILE`: measure how solves scale, and report it."""

from __future__ import annotations

import argparse
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.batch.codes import CONVERGED, FAILED, INTERRUPTED
from lattice.environment import find_launch
from lattice.errors import InputError

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.batch.site import Site
    from lattice.study.points import Point
    from lattice.study.reader import Study

EPILOG = """\
A study file names a base job, what grows and on how many ranks it is measured, for instance
  job = "film-first.toml"
  [study]
  kind = "strong"
  ranks = [1, 2, 4]
  newton_steps = 1
  repeats = 5

Every point runs under the MPI launcher in processes of its own. Raw rows go to rows.jsonl in the study's
folder, the report to report.html and report.md there; the same command goes on where it was stopped.
With --site every point becomes a job of its own there, the largest last; once they have run, --report.

Points with more ranks than cores are marked; their counts are exact, their times prove nothing. Ask the
site before you fill its queue; its rules come before anything this program does.

exit codes: 0 all points measured; 2 refused input; 4 stopped with points left, the same command goes on;
70 a point failed.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("file", metavar="FILE", nargs="+", help="a study file; several with --report")
    parser.add_argument(
        "--report", action="store_true", help="make the report from raw rows, measure nothing"
    )
    parser.add_argument("--list", action="store_true", help="show the points, measure none")
    parser.add_argument("--site", metavar="SITE", help="submit the points there; name or file of the site")
    parser.add_argument("--out", metavar="DIR", help="the folder of rows and report, instead of study.folder")
    parser.add_argument("--ranks", metavar="N[,N...]", type=_counts, help="instead of study.ranks")
    parser.add_argument("--repeats", metavar="N", type=_count, help="instead of study.repeats")
    parser.add_argument("--budget", metavar="SECONDS", type=float, help="instead of study.budget")
    parser.add_argument("--point", metavar="K", type=_number, help="measure point K only, for a batch job")
    parser.add_argument("--of", metavar="N[,N...]", type=_counts, help=argparse.SUPPRESS)
    parser.add_argument("--cores", type=_count, help=argparse.SUPPRESS)
    parser.add_argument("--time", metavar="T", type=_time, help="with --site: wall clock of a point's job")
    parser.add_argument("--queue", metavar="NAME", help="with --site: queue or partition")
    parser.add_argument("--dry-run", action="store_true", help="with --site: print scripts, submit nothing")
    parser.add_argument("--yes", action="store_true", help="with --site: do not ask")
    parser.add_argument("--launcher", metavar="COMMAND", help="what starts the ranks, with its options")


def _count(text: str) -> int:
    if not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"must be an integer >= 1, got '{text}'")
    return int(text)


def _number(text: str) -> int:
    if not text.isdigit():
        raise argparse.ArgumentTypeError(f"must be the number of a point, from 0, got '{text}'")
    return int(text)


def _counts(text: str) -> tuple[int, ...]:
    return tuple(_count(part.strip()) for part in text.split(","))


def _time(text: str) -> int:
    from lattice.batch.duration import parse_duration

    try:
        return parse_duration(text)
    except ValueError as error:
        raise argparse.ArgumentTypeError(str(error)) from None


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    if options.report:
        return _report(options)
    if len(options.file) > 1:
        raise InputError("is for one study, unless with --report", key="FILE")
    if options.point is not None:
        return _point(options)
    study = _read(options)
    if options.list:
        return _list(study)
    if options.site is not None:
        return _submit(options, study)
    return _run(options, study)


def _read(options: argparse.Namespace) -> Study:
    from lattice.study.reader import read_study

    # A batch job passes the rank count of its point, which the file has, too.
    ranks = options.of if options.point is not None else options.ranks
    changes: dict[str, Any] = {"ranks": ranks, "repeats": options.repeats, "budget": options.budget}
    changes = {name: list(v) if isinstance(v, tuple) else v for name, v in changes.items()}
    return read_study(options.file[0], options.out, _ranks_per_node(options), changes)


def _ranks_per_node(options: argparse.Namespace) -> int:
    from lattice.cli.launch import count_cores

    if options.site is None:
        return count_cores()
    from lattice.batch.sites import load_site

    _, site = load_site(options.site)
    return site.ranks_per_node or site.cores_per_node or count_cores()


def _list(study: Study) -> int:
    from lattice.study.rows import is_measured, read_rows

    rows = read_rows(study.folder)
    for point in study.points:
        done = "measured" if is_measured(study, point, rows) else "to measure"
        print(f"{point.number:4d}  {point.label}: {done}")
    print(f"rows and report in {study.folder}")
    return CONVERGED


def _run(options: argparse.Namespace, study: Study) -> int:
    from lattice.cli.launch import check_crowd, find_launcher
    from lattice.study.counters import counter_library
    from lattice.study.run import run_study

    for point in study.points:
        check_crowd(point.ranks)
    find_launcher(options.launcher)
    library, reason = counter_library()
    if library is None:
        print(f"caution: MPI is not counted ({reason}): no messages, no POP efficiencies", file=sys.stderr)
    passed = [] if options.repeats is None else ["--repeats", str(options.repeats)]
    if options.ranks is not None:
        passed += ["--of", ",".join(map(str, options.ranks))]
    result = run_study(study, lambda text: print(text, flush=True), options.launcher, passed)
    _write_report([study])
    if not result.waiting:
        return CONVERGED
    print(f"{result.waiting} point(s) left: {result.stopped}; the same command goes on")
    return FAILED if result.stopped.startswith("failed") else INTERRUPTED


def _point(options: argparse.Namespace) -> int:
    """Measure one point: start its ranks, or be one of them."""
    study = _read(options)
    if options.point >= len(study.points):
        raise InputError(f"must be a point, 0 to {len(study.points) - 1}, got {options.point}", key="--point")
    point = study.points[options.point]
    launch = find_launch()
    if launch is not None and launch.ranks == point.ranks:
        return _measure(options, study, point)
    return _start(options, study, point)


def _start(options: argparse.Namespace, study: Study, point: Point) -> int:
    """Start the ranks of a point under the launcher, one rank too, with MPI counted."""
    from lattice.cli.launch import check_crowd, count_cores, find_launcher, launch_command, run_ranks
    from lattice.study.counters import counted
    from lattice.study.run import reason_to_stop

    stopped = reason_to_stop(study, point)
    if stopped:
        print(f"not measured: {stopped}")
        return CONVERGED
    check_crowd(point.ranks)
    # Asked here: the launcher may bind each rank to one core.
    program = [sys.executable, "-m", "lattice", *options.typed, "--cores", str(count_cores() * _hosts())]
    program = counted(program)
    command = launch_command(find_launcher(options.launcher), point.ranks, program)
    return run_ranks(command, {**os.environ, "PYTHONUNBUFFERED": "1"})


def _measure(options: argparse.Namespace, study: Study, point: Point) -> int:
    """Measure as one of the ranks; the first appends the rows."""
    from lattice.cli.guard import run_guarded, stop_on_signals

    stop_on_signals(alone=False)
    from mpi4py import MPI

    comm = MPI.COMM_WORLD
    cores: int = options.cores or 1
    return run_guarded(comm, lambda: _measure_together(study, point, comm, cores), options.debug)


def _measure_together(study: Study, point: Point, comm: MPI.Intracomm, cores: int) -> int:
    from lattice.solve.petsc import start_petsc
    from lattice.study.measure import measure
    from lattice.study.rows import append_rows, describe_host, describe_point

    start_petsc([])
    crowded = point.ranks > cores
    rows = measure(point, study.section, comm, 1 if crowded else study.section.repeats)
    if comm.Get_rank() == 0:
        told = describe_point(study, point, cores, crowded) | describe_host()
        told["command"] = f"lattice study {os.path.relpath(study.file)}"
        append_rows(study.folder, [{**told, **row} for row in rows])
    comm.Barrier()
    return CONVERGED


def _hosts() -> int:
    """Return the number of nodes of this allocation, 1 where no scheduler tells."""
    for name in ("SLURM_NNODES", "PBS_NUM_NODES"):
        if os.environ.get(name, "").isdigit():
            return int(os.environ[name])
    return 1


def _report(options: argparse.Namespace) -> int:
    from lattice.batch.sites import load_site

    given, out = options.file, options.out
    site = None if options.site is None else load_site(options.site)[1]
    several = len(given) > 1
    studies = []
    for file in given:
        options.file, options.out = [file], None if several else out
        studies.append(_read(options))
    _write_report(studies, Path(out) if out is not None and several else None, site)
    return CONVERGED


def _write_report(studies: list[Study], folder: Path | None = None, site: Site | None = None) -> None:
    from lattice.study.report import write_report

    for path in write_report(studies, folder, site):
        print(f"report: {path}")


def _submit(options: argparse.Namespace, study: Study) -> int:
    """Submit the points that have not been measured, after asking."""
    from lattice.batch.prepare import Wishes
    from lattice.batch.sites import load_site
    from lattice.study.submission import cost, entries, scripts, submit

    name, site = load_site(options.site)
    found = entries(study, name, site, Wishes(None, options.time, 1, options.queue), options.ranks)
    if options.dry_run:
        print("\n".join(scripts(found)), end="")
        return CONVERGED
    print(cost(found))
    if not options.yes:
        _ask()
    submit(found, lambda text: print(text, flush=True))
    print(f"watch with `lattice runs`; then `lattice study {options.file[0]} --report --out {study.folder}`")
    return CONVERGED


def _ask() -> None:
    """Ask before jobs are handed to a queue."""
    if not sys.stdin.isatty():
        raise InputError(
            "is needed where nobody can be asked: read what is submitted above, then add it", key="--yes"
        )
    answer = input(
        "Do the site's rules allow this, and has the smallest point run in the short queue [y/N]? "
    )
    if answer.strip().lower() not in ("y", "yes"):
        raise InputError("nothing is submitted")
