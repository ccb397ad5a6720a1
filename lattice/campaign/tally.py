"""The members of a campaign with their outcomes put together: duplicates, success rate, costs."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

from lattice.campaign.ending import CONVERGED
from lattice.campaign.folder import Record
from lattice.campaign.rate import CONFIDENCE, wilson_interval

STATE, CONSTANT, DUPLICATE, WAITING = "state", "constant", "duplicate", "waiting"
TRIVIAL = 1e-16
"""Mean square below which a state is nothing but the rounding of zero."""
ABOVE_RESIDUAL = 1e3
"""A field less than this many times its residual may be on its way to zero: a wave that decays with a rate of
1e-3 has that ratio."""


@dataclass(frozen=True)
class Row:
    """One member in the table of outcomes.

    Parameters
    ----------
    member : int
    values : dict
        What it differs by.
    outcome : str
        "state", "constant" (solves the law, but varies nowhere), "duplicate of member 3", "waiting", or
        the word of the run's summary.
    reason : str
        Why, in a sentence.
    original : int or None
        The lowest member that found the same state, of a duplicate.
    record : Record or None
        None where it has not run.
    """

    member: int
    values: dict[str, Any]
    outcome: str
    reason: str
    original: int | None
    record: Record | None

    def result(self) -> dict[str, Any]:
        """Return what the member found, without what it took: the same however often it was resumed."""
        record = self.record
        numbers = record.numbers if record else {}
        return {
            "member": self.member,
            "values": self.values,
            "outcome": self.outcome,
            "reason": self.reason,
            "duplicate_of": self.original,
            "kind": record.kind if record else "",
            "repeats": list(record.repeats) if record else [],
            **{
                name: numbers.get(name) for name in ("residual_rms", "residual_max", "scalars", "mean_square")
            },
            "lattice": numbers.get("lattice"),
        }

    def entry(self) -> dict[str, Any]:
        """Return the member's line of outcomes.jsonl."""
        record = self.record
        cost = {
            "seconds": record.seconds if record else 0.0,
            "ranks": record.ranks if record else 0,
            "attempts": record.attempts if record else 0,
            "exit_code": record.exit_code if record else None,
            "peak_memory_mb": record.numbers.get("peak_memory_mb") if record else None,
            "newton_steps": record.numbers.get("newton_steps") if record else None,
            "linear_iterations": record.numbers.get("linear_iterations") if record else None,
            "stages": record.numbers.get("stages") if record else None,
            "kept": record.kept if record else False,
        }
        return {**self.result(), "cost": cost}


@dataclass(frozen=True)
class Tally:
    """Counts over a campaign.

    Parameters
    ----------
    members, ended, successes, states : int
        All members; those that have ended for good; those whose start became a state that varies; distinct
        ones among these.
    outcomes : dict of str to int
        How many of each word.
    success_rate : float or None
        Successes over ended.
    interval : tuple of float
        Its confidence interval by Wilson's score.
    confidence : float
        Of the interval.
    core_seconds : float
        Wall time times ranks over all attempts.
    core_seconds_per_success, core_seconds_per_state : float or None
        The same over successes, and over distinct states.
    """

    members: int
    ended: int
    successes: int
    states: int
    outcomes: dict[str, int]
    success_rate: float | None
    interval: tuple[float, float]
    confidence: float
    core_seconds: float
    core_seconds_per_success: float | None
    core_seconds_per_state: float | None

    def plain(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return asdict(self)


def make_rows(members: Sequence[Mapping[str, Any]], records: Sequence[Record]) -> list[Row]:
    """Return a row for every member of a plan."""
    known = {record.member: record for record in records}
    originals = find_originals(records)
    return [
        _row(member["member"], dict(member["values"]), known.get(member["member"]), originals)
        for member in members
    ]


def _row(number: int, values: dict[str, Any], record: Record | None, originals: Mapping[int, int]) -> Row:
    if record is None:
        return Row(number, values, WAITING, "", None, None)
    original = originals.get(number, number)
    if not is_success(record):
        word = CONSTANT if record.outcome == CONVERGED else record.outcome
        return Row(number, values, word, record.reason, None, record)
    if original != number:
        return Row(number, values, f"{DUPLICATE} of member {original}", record.reason, original, record)
    return Row(number, values, STATE, record.reason, None, record)


def is_success(record: Record) -> bool:
    """Whether a start became a state that varies somewhere."""
    if record.outcome != CONVERGED or record.kind == CONSTANT:
        return False
    square, residual = record.numbers.get("mean_square"), record.numbers.get("residual_rms") or 0.0
    return square is None or square >= max(TRIVIAL, (ABOVE_RESIDUAL * residual) ** 2)


def find_originals(records: Sequence[Record]) -> dict[int, int]:
    """Return, for every success, the lowest member that found the same state.

    The order in which members were compared does not matter: whoever is linked is one class.

    Examples
    --------
    >>> late = Record(0, "converged", same_as=2)
    >>> find_originals([late, Record(1, "converged"), Record(2, "converged")])
    {0: 0, 1: 1, 2: 0}
    """
    successes = [record for record in records if is_success(record)]
    first = {record.member: record.member for record in successes}

    def root(member: int) -> int:
        while first[member] != member:
            member = first[member]
        return member

    for record in successes:
        if record.same_as in first:
            one, other = root(record.member), root(record.same_as)
            first[max(one, other)] = min(one, other)
    return {member: root(member) for member in first}


def make_tally(rows: Sequence[Row]) -> Tally:
    """Return the counts over all rows."""
    ended = [row for row in rows if row.record is not None and row.record.final]
    states = sum(row.outcome == STATE for row in ended)
    successes = states + sum(row.original is not None for row in ended)
    spent = sum(row.record.seconds * row.record.ranks for row in rows if row.record is not None)
    words = Counter(DUPLICATE if row.original is not None else row.outcome for row in rows)
    return Tally(
        members=len(rows),
        ended=len(ended),
        successes=successes,
        states=states,
        outcomes=dict(sorted(words.items())),
        success_rate=successes / len(ended) if ended else None,
        interval=wilson_interval(successes, len(ended)),
        confidence=CONFIDENCE,
        core_seconds=spent,
        core_seconds_per_success=spent / successes if successes else None,
        core_seconds_per_state=spent / states if states else None,
    )
