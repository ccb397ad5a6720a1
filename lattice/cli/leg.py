"""`lattice leg FOLDER`: one leg of a submitted run; batch scripts call it."""

from __future__ import annotations

import argparse
from pathlib import Path

EPILOG = """\
Runs the job of a submitted run's folder within the wall clock of this batch job, from the last kept state,
and submits the next leg where one is needed. You need not call it yourself: `lattice submit` writes the
scripts that do.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("folder", metavar="FOLDER", help="the run's folder, or with --study the study's")
    parser.add_argument("--number", metavar="N", type=int, default=1, help="which leg this is; default 1")
    parser.add_argument("--study", action="store_true", help="run this job's member of a study")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.batch.leg import run_leg
    from lattice.batch.study import run_members

    folder = Path(options.folder).absolute()
    if options.study:
        return run_members(folder)
    return run_leg(folder, options.number)
