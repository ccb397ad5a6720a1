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


def judge(folder: CampaignFolder, record: Record, others: Sequence[Record]) -> Record:
    """Return a record with the verdict on its state, compared with those judged before."""
    from lattice.campaign.likeness import alike, fingerprint

    numbers = {**record.numbers, "fingerprint": fingerprint(folder.member(record.member).state)}
    kind, repeats = _classified(folder, record)
    same = [
        other.member
        for other in others
        if other.judged and other.same_as is None and other.member != record.member
        if alike(numbers, other.numbers) and confirmed(folder, record, other)
    ]
    return replace(
        record, judged=True, kind=kind, repeats=repeats, same_as=min(same, default=None), numbers=numbers
    )


def _classified(folder: CampaignFolder, record: Record) -> tuple[str, tuple[int, ...]]:
    """Return kind and repeats: as the run's summary has them, else judged here."""
    told = record.numbers.get("classification")
    if told:
        return str(told["kind"]), tuple(told["repeats"])
    from mpi4py import MPI

    from lattice.classify.kind import classify
    from lattice.geometry.blocks import Blocks
    from lattice.job.reader import load_job
    from lattice.solve.petsc import start_petsc
    from lattice.store.statefile import open_state

    start_petsc([])
    files = folder.member(record.member)
    law, state = load_job(files.job).make_law(), open_state(files.state)
    blocks = Blocks(state.meta.lattice, len(law.components), 0, MPI.COMM_SELF)
    found = classify(law, state.meta.lattice, state.meta.values, state.field, blocks, MPI.COMM_SELF)
    return found.kind, tuple(found.repeats)


def confirmed(folder: CampaignFolder, one: Record, other: Record) -> bool:
    """Whether the fields themselves agree up to symmetry; told by the numbers alone where one is gone."""
    return True


def main(arguments: Sequence[str]) -> int:
    """Judge members in turn and print the verdicts, one line each."""
    environment.prepare()
    from lattice.campaign.folder import CampaignFolder

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
