"""`lattice recurrences JOB`: list the near recurrences of a job's march, to pick one."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError, LatticeError

if TYPE_CHECKING:
    from lattice.job.schema import Job
    from lattice.starts.recurrence import Found

EPILOG = """\
The job's start is kind = "recurrence". The march is that of `lattice solve`, so that numbers agree:
  lattice recurrences jobs/film-recurrences.toml
  lattice solve jobs/film-recurrences.toml --set start.pick=3 --out runs/third
The distance is the root mean square difference over that of the flow, with the best shift. A flow that
returns reflected returns as itself after twice the time; the period listed is that.
"""
HEAD = "number  distance       time     period  reflection"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("job", metavar="JOB", help='a job file with start.kind = "recurrence"')
    parser.add_argument(
        "--set",
        metavar="SECTION.KEY=VALUE",
        action="append",
        default=[],
        dest="overrides",
        help="a value that replaces the job file's; may be repeated",
    )
    parser.add_argument("--count", metavar="N", type=_count, default=20, help="how many to list; default 20")
    parser.add_argument(
        "--out", metavar="FILE", type=Path, help="the picture; default: JOB's name ending in -recurrences.png"
    )
    parser.add_argument("--json", action="store_true", help="print all of them as JSON, for a script")


def _count(text: str) -> int:
    if not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"must be an integer >= 1, got '{text}'")
    return int(text)


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.cli.paths import writable_path
    from lattice.environment import find_launch
    from lattice.job.reader import load_job

    launch = find_launch()
    if launch is not None and launch.ranks > 1:
        raise InputError(
            f"marches on one rank, got {launch.ranks}; run it without a launcher", key="recurrences"
        )
    job = load_job(options.job, options.overrides)
    if job.start.kind != "recurrence":
        raise InputError(
            f"must be 'recurrence', got '{job.start.kind}'; "
            "such as --set start='{ kind = \"recurrence\" }'",
            file=options.job,
            key="start.kind",
        )
    picture = writable_path(
        options.out or Path(f"{Path(options.job).stem.removesuffix('-recurrences')}-recurrences.png")
    )
    found = _scan(job)
    if options.json:
        print(json.dumps(records(found), indent=2))
    else:
        print("\n".join(table(found, options.count)))
    _draw(found, picture)
    if not options.json and found.recurrences:
        print(f"next: lattice solve {options.job} --set start.pick=1")
    return 0


def _scan(job: Job) -> Found:
    from lattice.starts.recurrence import find_recurrences

    start: Any = job.start

    def report(text: str) -> None:
        print(text, file=sys.stderr, flush=True)

    return find_recurrences(start, job.make_lattice(), job.make_values(), job.make_law(), report)


def table(found: Found, count: int) -> list[str]:
    """Return the closest recurrences as lines of a table."""
    if not found.recurrences:
        return ["no near recurrence; raise start.march_time, or widen start.shortest and start.longest"]
    lines = [HEAD]
    for number, each in enumerate(found.recurrences[:count], start=1):
        image = _image(found, each.image)
        lines.append(
            f"{number:6d}  {each.distance:8.4f}  {each.time:9.5g}  {each.period:9.5g}  {image}".rstrip()
        )
    if len(found.recurrences) > count:
        lines.append(f"and {len(found.recurrences) - count} more (--count)")
    return lines


def records(found: Found) -> list[dict[str, Any]]:
    """Return the recurrences for a script."""
    return [
        {
            "pick": number,
            "distance": each.distance,
            "time": each.time,
            "period": each.period,
            "reflection": _image(found, each.image) or None,
        }
        for number, each in enumerate(found.recurrences, start=1)
    ]


def _image(found: Found, image: int) -> str:
    from lattice.starts.recurrence import image_text

    return image_text(found.reflections[image - 1]) if image else ""


def _draw(found: Found, picture: Path) -> None:
    from lattice.show.returns import plot_returns

    names = [
        "the flow itself",
        *(f"reflected: {_image(found, n + 1)}" for n in range(len(found.reflections))),
    ]
    marks = [(each.image, each.time, each.lag) for each in found.recurrences]
    try:
        where = plot_returns(found.distances, found.row_time, found.lag_time, names, marks, picture)
        print(f"picture: {where}", file=sys.stderr)
    except LatticeError as error:
        print(f"no picture: {error}", file=sys.stderr)
