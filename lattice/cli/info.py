"""`lattice info STATE`: tell what a state file holds, what kind of state it is, which symmetries it has."""

from __future__ import annotations

import argparse
from collections.abc import Iterator
from pathlib import Path

LARGEST = 20_000_000
"""Numbers of a field up to which its kind is judged here where the file does not tell."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("state", metavar="STATE", type=Path, help="a state file, or the folder of a run")
    parser.add_argument("--json", action="store_true", help="print everything as JSON, for a script")
    parser.add_argument(
        "--primitive",
        metavar="FILE",
        type=Path,
        help="store the smallest state that this one repeats",
    )
    parser.add_argument(
        "--canonical",
        metavar="FILE",
        type=Path,
        help="store this state shifted and reflected so that its largest value lies at the first node",
    )


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.cli.paths import state_path

    state = state_path(options.state)
    from lattice.show.describe import describe_state, state_json

    if options.json:
        print(state_json(state, _record(state)).rstrip())
    else:
        print(describe_state(state, list(_kind(state))).rstrip())
    for line in _written(options, state):
        print(line)
    return 0


def _record(state: Path) -> dict[str, object] | None:
    from mpi4py import MPI

    if not _judged(state):
        return None
    from lattice.classify.files import classification_of

    return classification_of(state, MPI.COMM_SELF).record()


def _kind(state: Path) -> Iterator[tuple[str, str]]:
    """Yield labels and lines about the kind of a converged state."""
    if not _judged(state):
        return
    from mpi4py import MPI

    from lattice.classify.files import classification_of
    from lattice.classify.words import lines
    from lattice.store.statefile import read_meta

    meta = read_meta(state)
    found = classification_of(state, MPI.COMM_SELF)
    yield from lines(found, meta.components, meta.values, meta.dimensions)


def _judged(state: Path) -> bool:
    """Tell whether a state's kind is known, or worth the time to find: a converged state of moderate size."""
    from lattice.store.statefile import read_meta

    meta = read_meta(state)
    small = meta.lattice.nodes * len(meta.components) <= LARGEST
    return bool(meta.classification) or (meta.outcome == "converged" and small)


def _written(options: argparse.Namespace, state: Path) -> Iterator[str]:
    """Write the files asked for and yield what to say about each."""
    if not (options.primitive or options.canonical):
        return
    from mpi4py import MPI

    from lattice.classify.files import write_canonical, write_primitive

    for target, write in ((options.primitive, write_primitive), (options.canonical, write_canonical)):
        if target:
            found = write(state, target, MPI.COMM_SELF)
            yield f"{target}: written, {found.kind}"
