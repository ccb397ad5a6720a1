"""Submits the points of a study as jobs of a site, one each, the largest last, each after the one before."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path

from lattice.batch.enrol import Entry, record_inputs, submit_run
from lattice.batch.prepare import Wishes, new_ticket
from lattice.batch.render import Script, render
from lattice.batch.site import Site
from lattice.errors import InputError
from lattice.store.versions import package_version
from lattice.study.points import Point
from lattice.study.reader import Study
from lattice.study.rows import is_measured, read_rows


def entries(
    study: Study, site_name: str, site: Site, wishes: Wishes, of: Sequence[int] | None
) -> list[Entry]:
    """Return the jobs of the points that have not been measured, smallest first, within the core hours.

    Raises
    ------
    InputError
        Where none is left, or the study's core hours do not cover the first.
    """
    rows = read_rows(study.folder)
    waiting = [point for point in study.points if not is_measured(study, point, rows)]
    if not waiting:
        raise InputError("has no point left to measure; make the report with --report", file=str(study.file))
    found: list[Entry] = []
    hours = 0.0
    for point in waiting:
        entry = _entry(study, point, site_name, site, wishes, of)
        hours += entry.ticket.most_core_hours() or 0.0
        if study.section.core_hours is not None and hours > study.section.core_hours:
            break
        found.append(entry)
    if not found:
        raise InputError(
            f"must cover the smallest point, which may use {hours:.3g}, got {study.section.core_hours:g};"
            " raise it, or give a shorter --time",
            file=str(study.file),
            key="study.core_hours",
        )
    return found


def _entry(
    study: Study, point: Point, site_name: str, site: Site, wishes: Wishes, of: Sequence[int] | None
) -> Entry:
    command = ["study", str(study.file.absolute()), "--point", str(point.number)]
    command += ["--out", str(study.folder.absolute())]
    command += ["--of", ",".join(map(str, of))] if of else []
    own = Wishes((point.ranks,), wishes.seconds, 1, wishes.queue)
    ticket = new_ticket(f"{study.name}-{point.ranks}", command, site_name, site, own, ())
    folder = study.folder.absolute() / "jobs" / f"point-{point.number}"
    return Entry(folder, record_inputs(ticket, study.file, (), package_version()))


def scripts(found: Sequence[Entry]) -> list[str]:
    """Return the batch scripts of jobs."""
    return [render(Script(entry.ticket, entry.folder)) for entry in found]


def cost(found: Sequence[Entry]) -> str:
    """Return what jobs may cost together, in a sentence."""
    each = [entry.ticket.most_core_hours() for entry in found]
    ranks = ", ".join(str(entry.ticket.ranks_of(1)) for entry in found)
    text = f"{len(found)} point(s) on {ranks} ranks, one after another"
    if any(hours is None for hours in each):
        return f"{text}; no limit on core hours"
    return f"{text}; at most {sum(hours or 0.0 for hours in each):.3g} core hours together"


def submit(found: Sequence[Entry], report: Callable[[str], None]) -> list[Path]:
    """Submit jobs, each to start when the one before has ended; return their folders.

    A job looks at the rows of the smaller points first, and measures nothing once their efficiency has
    fallen under the study's bound.
    """
    after: str | None = None
    for entry in found:
        after = submit_run(entry, after)
        report(f"{entry.ticket.name}: job {after}; files in {entry.folder}")
    return [entry.folder for entry in found]
