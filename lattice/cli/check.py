"""`lattice check STATE`: tell with numbers whether a state can be trusted, and certify it or not."""

from __future__ import annotations

import argparse
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING

from lattice.environment import find_launch
from lattice.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Callable

    from mpi4py import MPI

    from lattice.check.run import CheckOptions

CERTIFIED, CERTIFIED_WIDE, NOT_CERTIFIED = 0, 5, 6

EPILOG = """\
What is checked: the residual of every equation, on the state's own differences, on those of higher order and
with exact derivatives; what the residual may mean for the field (smallest singular values); kind and smallest
repeat; resolution of every axis; balances; the slices, marched from one to the next; and the state solved
again on refined lattices, which gives every observable a band. The certificate is kept in the state file and
holds until field, scalars, lattice or law change. Without refinement nothing is certified.

STATE may be a state file, a run's folder, or the job file of a run that has ended.

  lattice check runs/film
  lattice check runs/film --refinements 0            (no solve: about two Newton steps' time)
  lattice check runs/film --observable "slope=u_x**2" --threshold march=0.05

Thresholds, in a TOML file for --thresholds or as --threshold NAME=NUMBER (NAME_wide: up to there the verdict
is 'certified with wide bands'):
%THRESHOLDS%

exit codes: 0 certified, 5 certified with wide bands, 6 not certified, 2 refused input, 70 internal failure.

A certificate is about the law as written and its discretised equations, not about a plant.
"""


def _epilog() -> str:
    from lattice.check.thresholds import DEFAULTS, DESCRIPTIONS

    lines = []
    for name, text in DESCRIPTIONS.items():
        wide = DEFAULTS.get(f"{name}_wide")
        numbers = f"{DEFAULTS[name]:g}" + (f" / {wide:g}" if wide else "")
        lines.append(f"  {name:<14}{numbers:<16}{text}")
    return EPILOG.replace("%THRESHOLDS%", "\n".join(lines))


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = _epilog()
    parser.add_argument("state", metavar="STATE", type=Path, help="a state file, a run's folder or its job")
    parser.add_argument("--ranks", metavar="N", type=_count, help="run on N MPI ranks")
    parser.add_argument(
        "--refinements", metavar="N", type=int, default=2, help="refined lattices to solve on; default 2"
    )
    parser.add_argument(
        "--factor",
        metavar="F",
        type=float,
        default=1.4,
        help="nodes of a refined lattice over those of the one before, per axis; default 1.4",
    )
    parser.add_argument(
        "--observable",
        metavar="NAME=FORMULA",
        action="append",
        default=[],
        help="a mean to give a band to, in the notation of laws; may be repeated",
    )
    parser.add_argument("--thresholds", metavar="FILE", type=Path, help="thresholds in a TOML file")
    parser.add_argument(
        "--threshold", metavar="NAME=NUMBER", action="append", default=[], help="one threshold; see below"
    )
    parser.add_argument("--preconditioner", metavar="NAME", default="auto", help="of the linear solves")
    parser.add_argument("--no-march", action="store_true", help="do not march the slices")
    parser.add_argument(
        "--single-march",
        action="store_true",
        help="also make one march over the whole period, to see how little it says",
    )
    parser.add_argument(
        "--everything", action="store_true", help="refine a state that is refused already too"
    )
    parser.add_argument("--no-store", action="store_true", help="leave the state file as it is")
    parser.add_argument("--json", action="store_true", help="print the certificate as JSON, for a script")
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
    state = _state_of(options.state)
    wanted = _options(options)
    launch = find_launch()
    here = launch.ranks if launch is not None else 1
    if launch is None and options.ranks is not None and options.ranks > 1:
        return _start_ranks(options)
    if options.ranks not in (None, here):
        raise InputError(f"must equal the {here} rank(s) that run here, got {options.ranks}", key="--ranks")
    from lattice.cli.guard import run_guarded, stop_on_signals

    stop_on_signals(alone=here == 1)
    from mpi4py import MPI

    comm = MPI.COMM_WORLD
    return run_guarded(comm, lambda: _check(options, state, wanted, comm), options.debug)


def _state_of(given: Path) -> Path:
    """Return the state file meant: the file, that of a run's folder, or that of a job's folder."""
    from lattice.cli.paths import state_path

    if given.suffix != ".toml":
        return state_path(given)
    from lattice.job.reader import load_job

    return state_path(Path(load_job(given).output.folder or ""))


def _options(options: argparse.Namespace) -> CheckOptions:
    from lattice.check.run import CheckOptions
    from lattice.check.thresholds import read_thresholds
    from lattice.solve.registry import NAMES

    if not 0 <= options.refinements <= 4:
        raise InputError(f"must be from 0 to 4, got {options.refinements}", key="--refinements")
    if not 1.1 <= options.factor <= 4.0:
        # Below 1.1 rounding drowns the differences between lattices (common practice).
        raise InputError(f"must be from 1.1 to 4, got {options.factor:g}", key="--factor")
    if options.preconditioner not in NAMES:
        raise InputError(
            f"must be one of {', '.join(NAMES)}, got '{options.preconditioner}'", key="--preconditioner"
        )
    return CheckOptions(
        refinements=options.refinements,
        factor=options.factor,
        observables=tuple(options.observable),
        thresholds=read_thresholds(options.thresholds, options.threshold),
        preconditioner=options.preconditioner,
        march=not options.no_march,
        single_march=options.single_march,
        everything=options.everything,
        store=not options.no_store,
    )


def _start_ranks(options: argparse.Namespace) -> int:
    from lattice.cli.launch import check_crowd, find_launcher, is_oversubscribed, launch_command, run_ranks

    check_crowd(options.ranks)
    launcher = find_launcher(options.launcher)
    if is_oversubscribed(options.ranks):
        print(f"note: {options.ranks} ranks share fewer cores, and will be slow", file=sys.stderr)
    program = [sys.executable, "-m", "lattice", *options.typed]
    command = launch_command(launcher, options.ranks, program)
    return run_ranks(command, {**os.environ, "PYTHONUNBUFFERED": "1"})


def _check(options: argparse.Namespace, state: Path, wanted: CheckOptions, comm: MPI.Intracomm) -> int:
    from lattice.check.certificate import to_json
    from lattice.check.run import check_state
    from lattice.check.wording import to_text

    certificate = check_state(state, comm, wanted, _report(comm, options.json))
    if comm.Get_rank() == 0:
        if options.json:
            print(to_json(certificate), end="")
        else:
            print(f"\n{state}\n\n{to_text(certificate)}", end="", flush=True)
            if certificate.note:
                print(f"\n{certificate.note}")
    # A rank that left early with another code than 0 would have the launcher kill the rest.
    comm.Barrier()
    codes = {"certified": CERTIFIED, "certified with wide bands": CERTIFIED_WIDE}
    return codes.get(certificate.verdict, NOT_CERTIFIED)


def _report(comm: MPI.Intracomm, aside: bool) -> Callable[[str], None]:
    """Return what prints a line of progress on one rank, beside the output where that is for a script."""
    if comm.Get_rank() > 0:
        return lambda text: None
    stream = sys.stderr if aside else sys.stdout
    return lambda text: print(text, file=stream, flush=True)
