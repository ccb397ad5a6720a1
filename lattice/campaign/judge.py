"""Judges a member's state: its kind, what it repeats, whether another member found it before.

`python -m lattice.campaign.judge FOLDER MEMBER..` prints each verdict as a line of JSON. It is a process of
its own, since it starts MPI, and a process that has done so must not start others that do.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice import environment

if TYPE_CHECKING:
    from lattice.campaign.folder import CampaignFolder, Record


SAME_LATTICE, OTHER_LATTICE = 1e-3, 1e-2
"""Largest relative distance of two fields of one state up to symmetry, solved on like lattices and on others,
whose errors differ."""


def judge(folder: CampaignFolder, record: Record, others: Sequence[Record]) -> Record:
    """Return a record with the verdict on its state, compared with those judged before."""
    from lattice.campaign.likeness import fingerprint

    kind, repeats = _classified(folder, record)
    waves = fingerprint(folder.member(record.member).state, kind, repeats)
    judged = replace(
        record, judged=True, kind=kind, repeats=repeats, numbers={**record.numbers, "fingerprint": waves}
    )
    firsts = [o for o in others if o.judged and o.same_as is None and o.member != record.member]
    same = (other.member for other in firsts if _same(folder, judged, other))
    return replace(judged, same_as=min(same, default=None))


def _classified(folder: CampaignFolder, record: Record) -> tuple[str, tuple[int, ...]]:
    """Return kind and repeats: as the run's summary has them, else judged here."""
    told = record.numbers.get("classification")
    if told:
        return str(told["kind"]), tuple(told["repeats"])
    from mpi4py import MPI

    from lattice.classify.files import classification_of

    found = classification_of(folder.member(record.member).state, MPI.COMM_SELF)
    return found.kind, tuple(found.repeats)


def _same(folder: CampaignFolder, one: Record, other: Record) -> bool:
    """Whether two states are one up to symmetry: by their fields, by numbers alone where one is gone."""
    from lattice.campaign.likeness import CERTAIN, POSSIBLE, Likeness

    mine = Likeness.of(one.numbers, one.kind, one.repeats)
    theirs = Likeness.of(other.numbers, other.kind, other.repeats)
    if not mine.near(theirs, POSSIBLE):
        return False
    first, second = (folder.member(record.member).state for record in (one, other))
    if not second.exists():
        return mine.near(theirs, CERTAIN)
    from mpi4py import MPI

    from lattice.classify.canonical import compare_files

    like = one.numbers.get("lattice") == other.numbers.get("lattice")
    return compare_files(first, second, MPI.COMM_SELF).same(SAME_LATTICE if like else OTHER_LATTICE)


def main(arguments: Sequence[str]) -> int:
    """Judge members in turn and print the verdicts, one line each."""
    environment.prepare()
    from lattice.campaign.folder import CampaignFolder
    from lattice.solve.petsc import start_petsc

    start_petsc([])
    folder = CampaignFolder(Path(arguments[0]))
    known = {record.member: record for record in folder.records(_all_members(folder))}
    for number in map(int, arguments[1:]):
        known[number] = _printed(folder, known[number], list(known.values()))
    return 0


def _all_members(folder: CampaignFolder) -> list[int]:
    return [int(member["member"]) for member in folder.stored_members()]


def _printed(folder: CampaignFolder, record: Record, others: Sequence[Record]) -> Record:
    answer: dict[str, Any] = {"member": record.member}
    try:
        record = judge(folder, record, others)
        answer |= {"kind": record.kind, "repeats": record.repeats, "same_as": record.same_as}
        answer["fingerprint"] = record.numbers["fingerprint"]
    except Exception as error:  # noqa: BLE001 - one state that cannot be judged must not keep the others back
        answer["failure"] = f"{type(error).__name__}: {error}"
        record = replace(record, judged=True)
    sys.stdout.write(json.dumps(answer) + "\n")
    return record


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
