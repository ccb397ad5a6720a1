"""Which members' fields stay on the disk."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from lattice.campaign.folder import CampaignFolder, Record
from lattice.campaign.schema import OutputSection
from lattice.campaign.tally import find_originals
from lattice.store.replacement import discard

FIELDS = ("state.h5", "reference.h5", "field.png")
"""What a run's folder holds besides words: the state, what fixes its phases on resuming, its picture."""


def not_kept(records: Sequence[Record], output: OutputSection) -> list[Record]:
    """Return the ended members whose fields need not stay.

    Examples
    --------
    >>> new, old = Record(1, "converged", judged=True), Record(0, "stalled")
    >>> [record.member for record in not_kept([old, new], OutputSection(keep="states"))]
    [0]
    """
    originals = find_originals([record for record in records if record.judged])
    states = [record.member for record in records if originals.get(record.member) == record.member]
    beyond = set(states[output.most_states :]) if output.most_states else set[int]()
    dropped = []
    for record in records:
        waits = record.outcome == "converged" and not record.judged
        goes_on = not record.final or record.limit is not None
        idle = output.keep == "states" and record.member not in states
        if record.kept and not waits and not goes_on and (idle or record.member in beyond):
            dropped.append(record)
    return dropped


def drop_fields(folder: CampaignFolder, records: Sequence[Record], output: OutputSection) -> None:
    """Remove the fields of those that need not stay; numbers, words and the job to repeat it remain."""
    for record in not_kept(records, output):
        # The record first: a kill in between leaves a field too many, not a promise of one that is gone.
        folder.keep_record(replace(record, kept=False))
        for name in FIELDS:
            discard(folder.member(record.member).run / name)
