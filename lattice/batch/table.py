"""Runs as a table, as JSON, and one of them as it goes."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

from lattice.batch.duration import format_duration
from lattice.batch.watch import RunView, view_run
from lattice.job.problems import printable
from lattice.store.runfolder import read_steps
from lattice.store.statemeta import plain

COLUMNS = (
    "run",
    "outcome",
    "leg",
    "step",
    "residual",
    "elapsed/limit",
    "s/step",
    "finish",
    "scheduler",
    "scalars",
)
FOLLOW_POLL = 1.0
MOST_SCALARS = 3


def table(views: Sequence[RunView], base: Path) -> str:
    """Return runs as a table, with the reasons below it."""
    rows = [COLUMNS, *(_row(view, base) for view in views)]
    widths = [max(len(row[column]) for row in rows) for column in range(len(COLUMNS))]
    lines = [
        "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
    ]
    reasons = [f"{_name(view, base)}: {printable(view.reason)}" for view in views if view.reason]
    return "\n".join([*lines, *([""] if reasons else []), *reasons])


def _row(view: RunView, base: Path) -> tuple[str, ...]:
    return (
        _name(view, base),
        view.outcome,
        f"{view.leg} of {view.legs}" if view.leg else "-",
        "-" if view.step is None else str(view.step),
        "-" if view.residual_rms is None else f"{view.residual_rms:.2e}",
        _elapsed(view),
        "-" if view.seconds_per_step is None else f"{view.seconds_per_step:.1f}",
        "-" if view.finish is None else f"in about {format_duration(view.finish)}",
        " ".join(part for part in (view.site, view.job, printable(view.queued)) if part) or "-",
        _scalars(view),
    )


def _name(view: RunView, base: Path) -> str:
    try:
        return printable(str(view.folder.relative_to(base)))
    except ValueError:
        return printable(str(view.folder))


def _elapsed(view: RunView) -> str:
    if view.elapsed is None:
        return "-"
    limit = f" / {format_duration(view.limit)}" if view.limit else ""
    return f"{format_duration(view.elapsed)}{limit}"


def _scalars(view: RunView) -> str:
    shown = [f"{name}={value:.6g}" for name, value in view.scalars.items() if not name.startswith("source_")]
    return " ".join(shown[:MOST_SCALARS]) + (" ..." if len(shown) > MOST_SCALARS else "")


def as_json(view: RunView) -> dict[str, Any]:
    """Return a run as what JSON knows."""
    content: dict[str, Any] = plain(asdict(view) | {"folder": str(view.folder), "active": view.active})
    return content


def follow(folder: Path, say: Callable[[str], None]) -> RunView:
    """Say each step of a run, and each change of how it stands, until it has ended; return its end."""
    told, standing = 0, ""
    while True:
        view = view_run(folder)
        steps = _steps(folder)
        told = 0 if len(steps) < told else told
        for entry in steps[told:]:
            say(_step(entry))
        told = len(steps)
        known = view.queued.lower()
        now = view.outcome if known in ("", view.outcome) else f"{view.outcome} ({view.queued})"
        if now != standing:
            say(f"-- {now}" + (f": {view.reason}" if view.reason else ""))
            standing = now
        if not view.active:
            return view
        time.sleep(FOLLOW_POLL if view.site in ("", "local") else 10 * FOLLOW_POLL)


def _steps(folder: Path) -> list[dict[str, Any]]:
    try:
        return read_steps(folder / "steps.jsonl")
    except OSError:
        return []


def _step(entry: dict[str, Any]) -> str:
    residual, seconds = entry.get("residual_rms"), entry.get("seconds")
    scalars = " ".join(
        f"{name}={value:.8g}" for name, value in (entry.get("scalars") or {}).items() if value is not None
    )
    words = [
        f"{entry.get('stage', 'step')} {entry.get('step')}",
        "residual_rms -" if residual is None else f"residual_rms {residual:.3e}",
        scalars,
        "" if seconds is None else f"{seconds:.1f} s",
    ]
    return "  ".join(word for word in words if word)
