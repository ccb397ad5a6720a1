"""The legs of a run: one line of JSON for everything that happens to it, in `legs.jsonl` of its folder."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from lattice.batch.ticket import now
from lattice.store.runfolder import append_line, read_steps

NAME = "legs.jsonl"
Event = dict[str, Any]


@dataclass(frozen=True)
class LegLog:
    """What has happened to a run.

    The events are `submitted` (leg, ranks, job), `began` (leg, job, host, process), `ended` (leg, code,
    outcome, reason, seconds, new_steps, goes_on, halt: why no leg follows), `cancelled`, and `halted`
    (reason) where the next leg could not be submitted.

    Parameters
    ----------
    folder : Path
        The run's folder.
    """

    folder: Path

    def append(self, event: str, **facts: Any) -> None:
        """Add an event with the time of now."""
        append_line(self.folder / NAME, {"event": event, "time": now(), **facts})

    def events(self) -> list[Event]:
        """Return all events, oldest first; none where there is no log."""
        try:
            return [event for event in read_steps(self.folder / NAME) if isinstance(event, dict)]
        except OSError:
            return []


def last(events: Sequence[Event], *names: str) -> Event | None:
    """Return the newest event with one of some names."""
    return next((event for event in reversed(events) if event.get("event") in names), None)


def of_kind(events: Sequence[Event], name: str) -> list[Event]:
    """Return the events with a name."""
    return [event for event in events if event.get("event") == name]


def newest_job(events: Sequence[Event]) -> str:
    """Return the scheduler's id of the newest leg, empty where none was submitted."""
    known = last(events, "submitted", "began")
    return str(known.get("job") or "") if known else ""


def open_leg(events: Sequence[Event]) -> Event | None:
    """Return the newest event of a leg that was submitted or began and has not ended, as far as is known."""
    newest = last(events, "submitted", "began", "ended", "halted")
    if is_cancelled(events) and (newest is None or newest["event"] == "submitted"):
        return None
    if newest is None or newest["event"] == "halted":
        return None
    return None if newest["event"] == "ended" and not newest.get("goes_on") else newest


def may_be_requeued(events: Sequence[Event]) -> bool:
    """Whether the newest leg was ended from outside, as by a scheduler that puts its job back."""
    newest = last(events, "submitted", "began", "ended", "halted")
    return newest is not None and newest.get("by_request") is True and not is_cancelled(events)


def halt_reason(events: Sequence[Event]) -> str:
    """Return why no leg follows the newest, empty where one does or may."""
    newest = last(events, "submitted", "began", "ended", "halted")
    if newest is None or newest["event"] in ("submitted", "began"):
        return ""
    return str(newest.get("reason" if newest["event"] == "halted" else "halt") or "")


def is_cancelled(events: Sequence[Event]) -> bool:
    """Whether somebody has cancelled the run since it was last submitted."""
    newest = last(events, "submitted", "cancelled")
    return newest is not None and newest["event"] == "cancelled"
