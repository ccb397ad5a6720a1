"""`lattice plot STATE`: draw a state."""

from __future__ import annotations

import argparse
import math
from collections.abc import Sequence
from pathlib import Path

from lattice.errors import InputError

EPILOG = """\
The usual picture of one space dimension is a space-time plane with spectra, of two a sheet of snapshots
with a cut through space and time. A coordinate held fixed leaves a plane or a line:
  lattice plot runs/film --cut t=3.5
  lattice plot runs/film-2d --cut y=8 --component u --out cut.pdf
"""
LARGEST_SIZE = 60.0
"""Inches; a picture of more would fill the memory."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("state", metavar="STATE", type=Path, help="a state file, or the folder of a run")
    parser.add_argument(
        "--out", metavar="FILE", type=Path, help="a .png, .pdf or .svg file; default: STATE ending in .png"
    )
    parser.add_argument(
        "--cut",
        metavar="AXIS=VALUE",
        action="append",
        default=[],
        help="hold t, x or y at a value; may be repeated",
    )
    parser.add_argument("--component", metavar="NAME", help="draw this component only")
    parser.add_argument("--size", metavar="WIDTHxHEIGHT", help="size in inches, for instance 8x5")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.cli.paths import state_path, writable_path

    cut, size = read_cut(options.cut), read_size(options.size)
    state = state_path(options.state)
    picture = writable_path(options.out or state.with_suffix(".png"))
    from lattice.show.pictures import PictureOptions, plot_state

    plot_state(state, picture, PictureOptions(cut=cut, component=options.component, size=size))
    print(picture)
    return 0


def read_cut(given: Sequence[str]) -> dict[str, float]:
    """Return the coordinates held fixed, by axis.

    Raises
    ------
    InputError
        For text that is not `axis=value`, or an axis named twice.

    Examples
    --------
    >>> read_cut(["t=3.5", "y=8"])
    {'t': 3.5, 'y': 8.0}
    """
    cut: dict[str, float] = {}
    for text in given:
        axis, _, value = text.partition("=")
        number = _number(value)
        if axis not in ("t", "x", "y") or number is None:
            raise InputError(
                f"must be t, x or y = a number, got '{text}'; for example --cut t=3.5", key="--cut"
            )
        if axis in cut:
            raise InputError(f"must hold each axis once, got {axis} twice; remove one", key="--cut")
        cut[axis] = number
    return cut


def read_size(given: str | None) -> tuple[float, float] | None:
    """Return width and height in inches.

    Raises
    ------
    InputError
        For text that is not two sizes.
    """
    if given is None:
        return None
    numbers = [_number(text) for text in given.lower().split("x")]
    sizes = [number for number in numbers if number is not None and 0 < number <= LARGEST_SIZE]
    if len(numbers) != 2 or len(sizes) != 2:
        raise InputError(
            f"must be width x height in inches, at most {LARGEST_SIZE:g} each, got '{given}'; such as 8x5",
            key="--size",
        )
    return sizes[0], sizes[1]


def _number(text: str) -> float | None:
    try:
        number = float(text)
    except ValueError:
        return None
    return number if math.isfinite(number) else None
