"""`lattice plot STATE`: draw a state."""

from __future__ import annotations

import argparse
from pathlib import Path


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("state", metavar="STATE", type=Path, help="a state file, or the folder of a run")
    parser.add_argument(
        "--out", metavar="FILE", type=Path, help="the picture; default: beside the state, ending in .png"
    )


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.cli.paths import state_path, writable_path

    state = state_path(options.state)
    picture = writable_path(options.out or state.with_suffix(".png"))
    from lattice.show.pictures import plot_state

    plot_state(state, picture)
    print(picture)
    return 0
