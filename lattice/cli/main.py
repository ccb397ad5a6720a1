"""The command `lattice`: reads the command line and calls one subcommand."""

from __future__ import annotations

import argparse
import importlib
import os
import sys
import traceback
from collections.abc import Sequence

from lattice import environment
from lattice.cli import exits
from lattice.cli.exits import PIPE_CLOSED, exit_code, explain
from lattice.errors import InputError

COMMANDS = {
    "solve": "solve a job for a steady, travelling or time-periodic state",
    "campaign": "run many starts from one file, and put their outcomes together",
    "study": "measure how solves scale with ranks, and report it",
    "size": "tell what memory, time and core hours a job needs, before it runs",
    "submit": "hand jobs to a scheduler, or run them in the background",
    "runs": "show how runs stand, or follow one",
    "cancel": "stop a submitted run",
    "leg": "run one leg of a submitted run; batch scripts call it",
    "check": "tell with numbers whether a state can be trusted, and certify it or not",
    "observe": "show observables of a state, or means over many beside a march",
    "info": "tell what a state file holds",
    "plot": "draw a state",
    "report": "write one page about a run: state, history, certificate, cost",
    "recurrences": "list times at which a march nearly repeats itself, to solve from one",
    "excerpt": "cut a window of a state and make it periodic, to solve it",
    "mosaic": "arrange states in time and space, their seams blended, to solve that",
    "laws": "list the laws, or describe one",
    "doctor": "tell what this machine is missing, and how to get it",
}


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return the exit code."""
    environment.prepare()
    given = list(sys.argv[1:] if arguments is None else arguments)
    try:
        code = _run(given)
        sys.stdout.flush()
    except BrokenPipeError:
        # Python flushes once more at exit, which would complain again.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return PIPE_CLOSED
    except KeyboardInterrupt as error:
        launch = environment.find_launch()
        if launch is None or launch.rank == 0:
            print(explain(error), file=sys.stderr)
        return exit_code(error)
    return code


def _run(arguments: list[str]) -> int:
    own, petsc_options = split_at_dashes(arguments)
    options = make_parser().parse_args(own)
    options.petsc_options, options.typed = petsc_options, arguments
    try:
        if petsc_options and options.command not in ("solve", "submit"):
            raise InputError(
                f"only solve and submit take options for PETSc, got {' '.join(petsc_options)}", key="--"
            )
        module = importlib.import_module(f"lattice.cli.{options.command}")
        return int(module.run(options))
    except BrokenPipeError:
        raise
    except Exception as error:  # noqa: BLE001 - the user gets a sentence, --debug the traceback
        if options.debug:
            traceback.print_exc()
        print(explain(error, options.debug), file=sys.stderr, flush=True)
        return exit_code(error)


def split_at_dashes(arguments: Sequence[str]) -> tuple[list[str], list[str]]:
    """Split at the first `--`: ours before, PETSc's after.

    Examples
    --------
    >>> split_at_dashes(["solve", "job.toml", "--", "-ksp_rtol", "1e-3"])
    (['solve', 'job.toml'], ['-ksp_rtol', '1e-3'])
    """
    if "--" not in arguments:
        return list(arguments), []
    place = list(arguments).index("--")
    return list(arguments[:place]), list(arguments[place + 1 :])


def make_parser() -> argparse.ArgumentParser:
    """Return the parser of the whole command line."""
    parser = argparse.ArgumentParser(
        prog="lattice",
        description="Find steady, travelling and time-periodic states of equations on a space-time lattice.",
        epilog=exits.TABLE,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="version", version=f"lattice {_version()}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND")
    for name, text in COMMANDS.items():
        module = importlib.import_module(f"lattice.cli.{name}")
        command = commands.add_parser(
            name,
            help=text,
            description=f"{text[0].upper()}{text[1:]}.",
            epilog=getattr(module, "EPILOG", None),
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        command.add_argument("--debug", action="store_true", help="show where an internal failure happened")
        module.add_arguments(command)
    return parser


def _version() -> str:
    from importlib.metadata import PackageNotFoundError, version

    try:
        return version("lattice-spacetime")
    except PackageNotFoundError:
        return "(not installed)"
