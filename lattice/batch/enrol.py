"""Puts runs into their folders and hands them to a scheduler: one, a further leg of one, or a study."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from lattice.batch.legs import LegLog
from lattice.batch.prepare import set_aside
from lattice.batch.render import Script
from lattice.batch.scheduler import scheduler
from lattice.batch.study import NAME as STUDY
from lattice.batch.study import Study, write_study
from lattice.batch.submission import hand_over, write_script
from lattice.batch.ticket import INPUT, Ticket, stamp, write_ticket
from lattice.errors import InputError
from lattice.store.replacement import write_text_whole


@dataclass(frozen=True)
class Entry:
    """A run to be submitted.

    Parameters
    ----------
    folder : Path
        Its run folder, absolute.
    ticket : Ticket
    job_text : str
        The resolved job; empty where the command needs none.
    """

    folder: Path
    ticket: Ticket
    job_text: str = ""


def record_inputs(ticket: Ticket, file: Path, overrides: Sequence[str], version: str) -> Ticket:
    """Return a ticket that tells where its job came from."""
    content = file.read_bytes()
    inputs: Mapping[str, Any] = {
        "file": str(file.absolute()),
        "sha256": hashlib.sha256(content).hexdigest(),
        "text": content.decode("utf-8"),
        "overrides": list(overrides),
        "folder": str(Path.cwd()),
    }
    return replace(ticket, inputs=dict(inputs), made=stamp(version))


def place(entry: Entry) -> None:
    """Make a run's folder with its ticket and job; an earlier run's files are moved aside.

    A command without a job text, such as a campaign's member, looks after its own earlier files.
    """
    try:
        entry.folder.mkdir(parents=True, exist_ok=True)
        if entry.job_text:
            set_aside(entry.folder)
            write_text_whole(entry.folder / INPUT, entry.job_text)
        write_ticket(entry.folder, entry.ticket)
    except OSError as error:
        raise InputError(
            f"cannot be written: {error.strerror}; choose another --out", file=str(entry.folder)
        ) from None


def submit_run(entry: Entry, after: str | None) -> str:
    """Submit a new run; return the job's id."""
    place(entry)
    system = scheduler(entry.ticket.site.scheduler)
    return hand_over(Script(entry.ticket, entry.folder), system, LegLog(entry.folder), after)


def submit_further(folder: Path, ticket: Ticket, number: int, after: str | None) -> str:
    """Submit a further leg of a run that has ended; return the job's id."""
    write_ticket(folder, ticket)
    system = scheduler(ticket.site.scheduler)
    return hand_over(Script(ticket, folder, number), system, LegLog(folder), after)


def submit_study(folder: Path, name: str, entries: Sequence[Entry], after: str | None) -> str:
    """Submit runs as one job array, which is kept in a folder; return the array's id."""
    for entry in entries:
        place(entry)
    ticket = entries[0].ticket
    system = scheduler(ticket.site.scheduler)
    folder.mkdir(parents=True, exist_ok=True)
    write_study(folder, Study(tuple(entry.folder for entry in entries), ticket.site.concurrent))
    array = system.submit(write_script(study_script(folder, name, entries)), after)
    for number, entry in enumerate(entries):
        ranks = entry.ticket.ranks_of(1)
        job = system.member(array, number)
        LegLog(entry.folder).append("submitted", leg=1, ranks=ranks, job=job, after=after or "")
    return array


def study_script(folder: Path, name: str, entries: Sequence[Entry]) -> Script:
    """Return the script of a job array."""
    ticket = replace(entries[0].ticket, name=name)
    return Script(ticket, folder, members=len(entries))


def study_folder(entries: Sequence[Entry]) -> Path:
    """Return a new folder for a study's script: in the deepest folder that holds all its runs."""
    common = Path(os.path.commonpath([str(entry.folder.parent) for entry in entries]))
    number = 1
    while (common / f"array-{number}" / STUDY).exists():
        number += 1
    return common / f"array-{number}"
