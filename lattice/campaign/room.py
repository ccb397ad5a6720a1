"""What a campaign's files take, and whether the disk has room for them."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING

from lattice.errors import InputError

if TYPE_CHECKING:
    from lattice.campaign.reader import Campaign
    from lattice.job.schema import Job

WORDS_BYTES = 300_000
"""Job, log, steps and summaries of a member; logs of long runs are the largest part."""
PICTURE_BYTES = 600_000
"""A run's picture: the largest of ours, in two dimensions and time, has 0.5 MB."""
GROWN = 2.0
"""Nodes over those of the job's own lattice that a damped stage may make where period and lengths grow."""
MB = 1e6


def state_bytes(job: Job) -> int:
    """Return the size of a job's state file on the finest lattice it may end on."""
    lattice, law, stages = job.make_lattice(), job.make_law(), job.solve.stages
    axes = law.dimensions if lattice.nt == 1 else law.dimensions + 1
    nodes = float(lattice.nodes)
    if stages is None or "refine" in stages:
        nodes *= job.solve.refine.factor ** (axes * job.solve.refine.count)
    if stages is None or "damped" in stages:
        nodes *= GROWN
    return int(8 * nodes * len(law.components))


def member_bytes(job: Job) -> int:
    """Return what a running member may take: two states, as the new one is whole before the old one goes."""
    # Checkpoints may keep a second field, which fixes the phases.
    return 3 * state_bytes(job) + _beside(job)


def kept_bytes(job: Job) -> int:
    """Return what a member with a state leaves."""
    return 2 * state_bytes(job) + _beside(job)


def _beside(job: Job) -> int:
    return WORDS_BYTES + (PICTURE_BYTES if job.output.picture else 0)


def estimate(campaign: Campaign, numbers: Iterable[int]) -> float:
    """Return the bytes that members still to run may take at most, as far as the campaign keeps them."""
    jobs = [job for number in numbers if (job := campaign.members[number].job) is not None]
    if not jobs:
        return 0.0
    kept = sorted((kept_bytes(job) for job in jobs), reverse=True)
    most = campaign.output.most_states
    fields = sum(kept if most is None else kept[:most])
    running = campaign.limits.at_once * max(member_bytes(job) for job in jobs)
    total = fields + len(jobs) * WORDS_BYTES + running
    limit = campaign.limits.disk_mb
    return min(total, max(0.0, limit * MB - used_bytes(campaign.folder))) if limit else total


def used_bytes(folder: Path) -> int:
    """Return what the files below a folder take on the disk."""
    total = 0
    for root, _, names in os.walk(folder):
        for name in names:
            try:
                total += Path(root, name).lstat().st_blocks * 512
            except OSError:  # a file that a running member has just replaced
                continue
    return total


def free_bytes(folder: Path) -> int:
    """Return the room on the file system that a folder is, or will be, on."""
    while not folder.exists() and folder != folder.parent:
        folder = folder.parent
    return shutil.disk_usage(folder).free


def check_room(campaign: Campaign, numbers: Iterable[int]) -> None:
    """Refuse a campaign whose members might not fit.

    Raises
    ------
    InputError
        With what is needed, what there is, and the remedy.
    """
    numbers = list(numbers)
    if not numbers:
        return
    needed, free = estimate(campaign, numbers), free_bytes(campaign.folder)
    if needed > free:
        raise InputError(
            f"may take {needed / MB:.0f} MB for {len(numbers)} member(s), the file system has"
            f" {free / MB:.0f} MB; free some, choose another --out, or keep less with limits.disk_mb or"
            ' output.keep = "states" and output.most_states',
            file=str(campaign.folder),
        )
    largest = max(numbers, key=lambda number: _needed(campaign, [number]))
    if reason := shortage(campaign, largest, running=()):
        raise InputError(reason, file=str(campaign.file), key=f"member {largest}")


def shortage(campaign: Campaign, number: int, running: Iterable[int]) -> str:
    """Return why a member must not begin now, as it or those running might not fit; empty where they do."""
    needed = _needed(campaign, [number, *running])
    limit = campaign.limits.disk_mb
    if limit is not None and (used := used_bytes(campaign.folder)) + needed > limit * MB:
        return (
            f"limits.disk_mb is {limit:g}, {used / MB:.1f} MB are used and {needed / MB:.1f} MB may be needed"
            ' to go on; raise it, or keep less with output.keep = "states" and output.most_states'
        )
    free = free_bytes(campaign.folder)
    if needed > free:
        return (
            f"the file system has {free / MB:.1f} MB, {needed / MB:.1f} MB may be needed to go on; free some"
        )
    return ""


def _needed(campaign: Campaign, numbers: Iterable[int]) -> int:
    jobs = (campaign.members[number].job for number in numbers)
    return sum(member_bytes(job) for job in jobs if job is not None)
