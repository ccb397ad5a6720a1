"""The table of outcomes as text."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from lattice.campaign.ending import INTERRUPTED
from lattice.campaign.tally import CONSTANT, Row, Tally
from lattice.job.wording import value_text

SCALARS = ("period", "length_x", "length_y", "drift_x", "drift_y", "rotation")
LONGEST_CELL = 40
ROUNDING = 1e-11


def outcome_table(rows: Sequence[Row], tally: Tally) -> str:
    """Return a line for every member, the reasons of those that failed, and the counts."""
    shown = [name for name in SCALARS if any(_scalar(row, name) for row in rows)]
    varied = list(rows[0].values) if rows else []
    scalars = [name for name in shown if f"box.{name}" not in varied or _moves(rows, name)]
    head = [
        "member",
        *varied,
        "outcome",
        "residual_rms",
        *scalars,
        "kind",
        "repeats",
        "steps",
        "seconds",
        "MB",
    ]
    lines = [head, *(_cells(row, varied, scalars) for row in rows)]
    return "\n".join([*_aligned(lines), "", *_failures(rows), *tally_lines(tally)]) + "\n"


def _moves(rows: Sequence[Row], name: str) -> bool:
    """Whether a varied key's scalar has become another one anywhere."""
    return any(_scalar(row, name) not in (None, row.values.get(f"box.{name}")) for row in rows)


def _scalar(row: Row, name: str) -> float | None:
    numbers = row.record.numbers if row.record else {}
    value: float | None = (numbers.get("scalars") or {}).get(name)
    if name == "period" and (numbers.get("lattice") or {}).get("nt") == 1:
        return None
    # What rounding leaves of zero would fill the column with digits.
    return 0.0 if value is not None and abs(value) < ROUNDING else value


def _cells(row: Row, varied: Sequence[str], scalars: Sequence[str]) -> list[str]:
    record, numbers = row.record, row.record.numbers if row.record else {}
    ran = record is not None
    return [
        str(row.member),
        *(_short(value_text(row.values.get(key, ""))) for key in varied),
        row.outcome,
        _number(numbers.get("residual_rms"), ".1e"),
        *(_number(_scalar(row, name), ".6g") for name in scalars),
        CONSTANT if row.outcome == CONSTANT else record.kind if record else "",
        " x ".join(map(str, record.repeats)) if record else "",
        _number(numbers.get("newton_steps"), "d"),
        _number(record.seconds if record else None, ".1f") if ran else "",
        _number(numbers.get("peak_memory_mb"), ".0f"),
    ]


def _short(text: str) -> str:
    return text if len(text) <= LONGEST_CELL else text[: LONGEST_CELL - 3] + "..."


def _number(value: Any, form: str) -> str:
    return "" if value is None else format(value, form)


def _aligned(lines: Sequence[Sequence[str]]) -> list[str]:
    """Return the lines with columns aligned: words to the left, numbers to the right."""
    widths = [max(map(len, column)) for column in zip(*lines, strict=True)]
    words = {"outcome", "kind"}
    return [
        "  ".join(
            cell.ljust(width) if name in words else cell.rjust(width)
            for name, cell, width in zip(lines[0], line, widths, strict=True)
        ).rstrip()
        for line in lines
    ]


def _failures(rows: Sequence[Row]) -> list[str]:
    told = [row for row in rows if row.record is not None and row.record.numbers.get("residual_rms") is None]
    told += [row for row in rows if row not in told and row.outcome in ("failed", INTERRUPTED)]
    lines = [f"member {row.member} {row.outcome}: {row.reason}" for row in told if row.reason]
    return [*lines, ""] if lines else []


def tally_lines(tally: Tally) -> list[str]:
    """Return counts, success rate and cost in words."""
    words = ", ".join(f"{count} {word}" for word, count in tally.outcomes.items())
    lines = [f"{tally.ended} of {tally.members} members ended: {words}"]
    if tally.success_rate is not None:
        low, high = (100.0 * end for end in tally.interval)
        lines.append(
            f"{tally.successes} of {tally.ended} starts became states: {100.0 * tally.success_rate:.0f} %"
            f" ({100.0 * tally.confidence:.0f} % interval {low:.0f} to {high:.0f} %), {tally.states} distinct"
        )
    cost = f"{tally.core_seconds:.1f} core seconds in all"
    if tally.core_seconds_per_success is not None and tally.core_seconds_per_state is not None:
        cost += (
            f", {tally.core_seconds_per_success:.1f} per success,"
            f" {tally.core_seconds_per_state:.1f} per distinct state"
        )
    return [*lines, cost]
