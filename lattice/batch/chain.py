"""Whether a run goes on with another leg, and if not, why."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from lattice.batch.codes import CONVERGED
from lattice.batch.legs import Event, is_cancelled, of_kind
from lattice.batch.ticket import Ticket

IDLE_LEGS = 2
"""Legs in a row without a new step after which a run is given up: another would do no better."""


@dataclass(frozen=True)
class Decision:
    """Whether another leg follows, and a sentence why not."""

    goes_on: bool
    reason: str = ""


@dataclass(frozen=True)
class LegEnd:
    """How a leg ended.

    Parameters
    ----------
    code : int
        Exit code of `lattice`.
    outcome, reason : str
        As in summary.json.
    at_limit : bool
        Whether it was the wall clock that ended it.
    lost : bool
        Whether ranks died without being asked: a node or the launcher failed.
    by_request : bool
        Whether somebody asked for the end.
    """

    code: int
    outcome: str
    reason: str
    at_limit: bool
    lost: bool = False
    by_request: bool = False


def decide(ticket: Ticket, events: Sequence[Event], end: LegEnd) -> Decision:
    """Return whether another leg follows the one that `end` tells of, which `events` hold already."""
    if end.code == CONVERGED:
        return Decision(False)
    if end.by_request or is_cancelled(events):
        return Decision(False, "stopped on request; `lattice submit --resume` goes on")
    if not end.at_limit and not end.lost:
        return Decision(False, f"{end.outcome}: {end.reason}")
    return _within_budget(ticket, events)


def _within_budget(ticket: Ticket, events: Sequence[Event]) -> Decision:
    ended = of_kind(events, "ended")
    idle = [event for event in ended[-IDLE_LEGS:] if not event.get("new_steps")]
    if len(idle) >= IDLE_LEGS:
        return Decision(
            False,
            f"{IDLE_LEGS} legs in a row made no step: the wall clock is too short for one;"
            " `lattice submit --resume` with more --time or other --ranks",
        )
    used = len(of_kind(events, "began"))
    if used >= ticket.legs:
        return Decision(False, f"all {ticket.legs} legs are used; `lattice submit --resume` adds some")
    if ticket.core_hours is not None:
        spent = sum(float(event.get("core_hours") or 0.0) for event in ended)
        coming = ticket.site.cores(ticket.ranks_of(used + 1)) * (ticket.seconds or 0) / 3600
        if spent + coming > ticket.core_hours:
            return Decision(
                False,
                f"{spent:.2f} of {ticket.core_hours:g} core hours are spent, and another leg may take"
                f" {coming:.2f}; `lattice submit --resume` with more --core-hours",
            )
    return Decision(True)
