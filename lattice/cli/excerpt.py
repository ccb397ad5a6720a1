"""`lattice excerpt STATE`: cut a window of a state and make it periodic."""

from __future__ import annotations

import argparse
import math
from pathlib import Path

from lattice.errors import InputError

EPILOG = """\
Times and places are those of the state's picture, which `lattice plot` draws; an axis that is not named is
taken whole. The window is blended into what follows it, so that it joins itself:
  lattice excerpt runs/film --t 0:20 --x 10:54 --out piece.h5
It is no solution: piece.h5 says `composed, not solved`. Look at piece.png, then solve:
  lattice solve piece.toml
Windows may reach beyond the end of the period or box: the state goes on there from its beginning.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    from lattice.cli.composing import add_output_arguments

    parser.add_argument("state", metavar="STATE", type=Path, help="a state file, or the folder of a run")
    for axis, what in (("t", "time"), ("x", "x"), ("y", "y")):
        parser.add_argument(
            f"--{axis}", metavar="FROM:TO", help=f"where the window begins and ends in {what}"
        )
    parser.add_argument(
        "--blend", metavar="FRACTION", default="0.3", help="part of the window's time blended; default 0.3"
    )
    parser.add_argument(
        "--blend-space", metavar="FRACTION", default="0.5", help="the same in x and y; default 0.5"
    )
    add_output_arguments(parser)


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.cli.composing import chosen_coarsening, chosen_nodes, compose
    from lattice.cli.paths import state_path

    windows = {axis: read_window(axis, getattr(options, axis)) for axis in "txy"}
    blend = read_fraction("--blend", options.blend)
    blend_space = read_fraction("--blend-space", options.blend_space)
    coarsen = chosen_coarsening(options)
    state = state_path(options.state)
    from lattice.starts.compose import Composition, plan_excerpt
    from lattice.starts.options import ExcerptOptions

    asked = ExcerptOptions(
        str(state), t=windows["t"], x=windows["x"], y=windows["y"], blend=blend, blend_space=blend_space
    )

    def plan() -> Composition:
        return plan_excerpt(asked, chosen_nodes(options), coarsen)

    given = ", ".join(f"{axis} {getattr(options, axis)}" for axis in "txy" if windows[axis] is not None)
    return compose(options, plan, f"{options.state}: {given or 'the whole state'}")


def read_window(axis: str, text: str | None) -> tuple[float, float] | None:
    """Return where a window begins and ends.

    Raises
    ------
    InputError
        For text that is not `from:to`.

    Examples
    --------
    >>> read_window("t", "0:20.5")
    (0.0, 20.5)
    """
    if text is None:
        return None
    try:
        begin, end = (float(part) for part in text.split(":"))
    except ValueError:
        begin = end = math.nan
    if not (math.isfinite(begin) and math.isfinite(end) and begin < end):
        raise InputError(
            f"must be FROM:TO with FROM < TO, got '{text}'; such as --{axis} 0:20", key=f"--{axis}"
        )
    return begin, end


def read_fraction(key: str, text: str) -> float:
    """Return a fraction from 0 to below 1.

    Raises
    ------
    InputError
        For other text.
    """
    try:
        fraction = float(text)
    except ValueError:
        fraction = math.nan
    if not 0.0 <= fraction < 1.0:
        raise InputError(f"must be from 0 to below 1, got '{text}'", key=key)
    return fraction
