"""`lattice info STATE`: tell what a state file holds."""

from __future__ import annotations

import argparse
from pathlib import Path


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("state", metavar="STATE", type=Path, help="a state file, or the folder of a run")
    parser.add_argument("--json", action="store_true", help="print everything as JSON, for a script")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.cli.paths import state_path

    state = state_path(options.state)
    from lattice.show.describe import describe_state, state_json

    print((state_json if options.json else describe_state)(state).rstrip())
    return 0
