"""`lattice runs`: how runs stand."""

from __future__ import annotations

import argparse
import json
from pathlib import Path

from lattice.errors import InputError

EPILOG = """\
Works from the runs' own files; each scheduler is asked once for all runs, and may stay silent. `finish` is
when the residual would be reached if it went on falling as over the last steps: a guide, no promise.
`lost` is a run that has ended without a word: its last state is kept, `lattice submit --resume` goes on.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument(
        "folder", metavar="FOLDER", nargs="?", help="where to look for run folders; default: runs"
    )
    parser.add_argument("--follow", metavar="RUN", help="show each step of one run until it ends")
    parser.add_argument("--json", action="store_true", help="print JSON, for a script")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.batch.table import as_json, follow, table
    from lattice.batch.watch import find_runs, view_runs

    if options.follow is not None:
        _check(Path(options.follow), "--follow")
        try:
            follow(Path(options.follow), lambda text: print(text, flush=True))
        except KeyboardInterrupt:
            print("the run goes on; `lattice cancel` would end it")
        return 0
    folder = Path(options.folder or "runs")
    _check(folder, "")
    views = view_runs(find_runs(folder))
    if options.json:
        print(json.dumps([as_json(view) for view in views], indent=1, ensure_ascii=False))
    elif views:
        print(table(views, folder))
    else:
        print(f"no runs in {folder}")
    return 0


def _check(folder: Path, key: str) -> None:
    if not folder.is_dir():
        raise InputError(f"no such folder: {folder}; give the folder of your runs", key=key)
