"""`lattice mosaic`: arrange stored states in time and space and blend their seams."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.cli.excerpt import read_fraction
from lattice.errors import InputError

if TYPE_CHECKING:
    from lattice.starts.compose import Composition
    from lattice.starts.options import MemberOptions

EPILOG = """\
Each --row is one time, the earliest first (the lowest in the picture); the names in it follow x. In two
dimensions slashes part the lines along y: --row "a b / b a".
  lattice mosaic a=runs/calm b=runs/wave --row "a b" --row "b a" --out four.h5
A member may be repeated, shifted, reflected where the law allows it, or given another size:
  lattice mosaic a=runs/calm b=runs/wave,reflect=x,shift_x=3,repeat_t=2,length_x=20 --row "a b" --out pair.h5
The same from a job file with start.kind = "mosaic":
  lattice mosaic four.toml --out four.h5
It is no solution: the file says `composed, not solved`, and the residual of each member shows where it is
far from one. Look at the picture, then solve: lattice solve four.toml
"""
WHOLE_NUMBERS = ("repeat_t", "repeat_x", "repeat_y")
NUMBERS = ("shift_t", "shift_x", "shift_y", "period", "length_x", "length_y")
REFLECTIONS = ("x", "y", "xy", "sign")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    from lattice.cli.composing import add_output_arguments

    parser.add_argument(
        "members",
        metavar="NAME=STATE[,KEY=VALUE...]",
        nargs="+",
        help="a member: a state file or the folder of a run; or, alone, a job file",
    )
    parser.add_argument(
        "--row", metavar="NAMES", action="append", default=[], help="names along x; the earliest row first"
    )
    parser.add_argument(
        "--blend",
        metavar="FRACTION",
        default="0.5",
        help="width of a seam over the shorter neighbour; default 0.5",
    )
    add_output_arguments(parser)


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.cli.composing import chosen_coarsening, chosen_nodes, compose

    if len(options.members) == 1 and "=" not in options.members[0]:
        job = options.members[0]
        return compose(options, lambda: _from_job(job, options), f"the mosaic of {job}", Path(job))
    members = dict(read_member(text) for text in options.members)
    if not options.row:
        raise InputError('is needed: the names of members along x, such as --row "a b"', key="--row")
    blend, coarsen = read_fraction("--blend", options.blend), chosen_coarsening(options)
    from lattice.starts.compose import plan_composed_mosaic
    from lattice.starts.options import MosaicOptions

    asked = MosaicOptions(tuple(options.row), members, blend)
    told = "; ".join(options.row)
    return compose(
        options,
        lambda: plan_composed_mosaic(asked, chosen_nodes(options), coarsen),
        f"the mosaic {told} (earliest first)",
    )


def _from_job(path: str, options: argparse.Namespace) -> Composition:
    from lattice.job.reader import load_job
    from lattice.starts.compose import Composition

    if options.row:
        raise InputError("is for members given here; the job file has start.rows", key="--row")
    overrides = [
        f"lattice.{name}={getattr(options, name)}" for name in ("nt", "nx", "ny") if getattr(options, name)
    ]
    job = load_job(path, overrides)
    if job.start.kind != "mosaic":
        raise InputError(f"must be 'mosaic', got '{job.start.kind}'", file=path, key="start.kind")
    start: Any = job.start
    return Composition("mosaic", start, job.make_law(), job.make_lattice(), job.make_values())


def read_member(text: str) -> tuple[str, MemberOptions]:
    """Return a member's name and what is to be done with it.

    Raises
    ------
    InputError
        For text that is not NAME=STATE with known keys, or a state that is not there.
    """
    from lattice.cli.paths import state_path
    from lattice.starts.options import MemberOptions

    name, _, rest = text.partition("=")
    file, *pairs = rest.split(",")
    if not name.isidentifier() or not file:
        raise InputError(f"a member must be NAME=STATE, got '{text}'; such as a=runs/calm", key="NAME=STATE")
    given = dict(_read_pair(pair, name) for pair in pairs)
    return name, MemberOptions(str(state_path(Path(file))), **given)


def _read_pair(pair: str, member: str) -> tuple[str, Any]:
    key, _, value = pair.partition("=")
    known = (*WHOLE_NUMBERS, *NUMBERS, "reflect")
    if key not in known:
        raise InputError(f"must be one of {', '.join(known)}, got '{key}'", key=member)
    if key == "reflect":
        if value not in REFLECTIONS:
            raise InputError(f"reflect must be one of {', '.join(REFLECTIONS)}, got '{value}'", key=member)
        return key, value
    try:
        number = int(value) if key in WHOLE_NUMBERS else float(value)
    except ValueError:
        number = 0 if key in WHOLE_NUMBERS else float("nan")
    positive = key not in ("shift_t", "shift_x", "shift_y")
    if number != number or abs(number) == float("inf") or (positive and number <= 0):
        kind = "an integer >= 1" if key in WHOLE_NUMBERS else "a positive number" if positive else "a number"
        raise InputError(f"{key} must be {kind}, got '{value}'", key=member)
    return key, number
