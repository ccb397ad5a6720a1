"""How runs stand, from their files and one question to each scheduler."""

from __future__ import annotations

import math
import os
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from lattice.batch import legs, ticket
from lattice.batch.legs import Event, LegLog
from lattice.batch.scheduler import QueuedJob, scheduler
from lattice.batch.ticket import Ticket, read_ticket
from lattice.errors import InputError, LatticeError
from lattice.store.lock import is_held
from lattice.store.runfolder import read_steps, read_summary

MARKS = ("submit.json", "summary.json", "steps.jsonl", "state.h5")
REPLACED = "replaced"
"""Where an earlier run's files are kept when a new one takes its folder."""
DEEPEST = 4
RECENT = 6
"""Steps from which rate and finish are judged."""
ACTIVE = ("running", "waiting", "unknown")
Jobs = Mapping[str, QueuedJob] | None


@dataclass(frozen=True)
class RunView:
    """How a run stands.

    Parameters
    ----------
    folder : Path
    outcome : str
        As in summary.json, or "running", "waiting" (for the scheduler), "lost" (ended without a word),
        "unknown" (no scheduler answers), "cancelled", "empty".
    reason : str
        Why, or what to do.
    step : int or None
        The last nonlinear step.
    residual_rms : float or None
    scalars : dict of str to float
        The free ones.
    elapsed : float or None
        Seconds of the solve so far.
    limit : int or None
        Wall clock of one leg, seconds.
    seconds_per_step : float or None
        Over the last steps.
    finish : float or None
        Seconds until the residual is reached if it goes on falling as it did, None where it does not fall.
    leg, legs : int
        The newest leg, and how many there may be; 0 for runs that were not submitted.
    site, job, queued : str
        Where it was submitted, the newest job's id, and what the scheduler says of it.
    begun : bool
        Whether the newest leg has begun.
    """

    folder: Path
    outcome: str
    reason: str = ""
    step: int | None = None
    residual_rms: float | None = None
    scalars: dict[str, float] = field(default_factory=dict)
    elapsed: float | None = None
    limit: int | None = None
    seconds_per_step: float | None = None
    finish: float | None = None
    leg: int = 0
    legs: int = 0
    site: str = ""
    job: str = ""
    queued: str = ""
    begun: bool = False

    @property
    def active(self) -> bool:
        """Whether the run is on, waits, or may do so."""
        return self.outcome in ACTIVE


@dataclass(frozen=True)
class _Files:
    """What a run's folder holds."""

    folder: Path
    ticket: Ticket | None
    events: list[Event]
    summary: dict[str, Any]
    steps: list[dict[str, Any]]
    held: bool

    @property
    def job(self) -> str:
        return legs.newest_job(self.events)

    @property
    def may_be_queued(self) -> bool:
        return legs.open_leg(self.events) is not None or legs.may_be_requeued(self.events)

    @property
    def system(self) -> str:
        return self.ticket.site.scheduler if self.ticket else ""


def find_runs(folder: Path) -> list[Path]:
    """Return the run folders in a folder, itself included, in order of their names."""
    return sorted(_find(folder, DEEPEST))


def _find(folder: Path, depth: int) -> Iterator[Path]:
    if any((folder / mark).exists() for mark in MARKS):
        yield folder
    if depth == 0:
        return
    with suppress(OSError):
        for entry in os.scandir(folder):
            if entry.is_dir(follow_symlinks=False) and entry.name != REPLACED:
                yield from _find(Path(entry.path), depth - 1)


def view_runs(folders: Sequence[Path]) -> list[RunView]:
    """Return how runs stand; each scheduler is asked once for all."""
    files = [_read(folder) for folder in folders]
    answers = {system: _ask(system, files) for system in {one.system for one in files} - {""}}
    return [_judge(one, answers.get(one.system)) for one in files]


def _judge(files: _Files, jobs: Jobs) -> RunView:
    """Return how a run stands; what seems lost may have ended between its files and the answer."""
    view = _view(files, jobs)
    return _view(_read(files.folder), jobs) if view.outcome == "lost" else view


def view_run(folder: Path) -> RunView:
    """Return how one run stands."""
    return view_runs([folder])[0]


def _ask(system: str, files: Sequence[_Files]) -> Jobs:
    wanted = [one.job for one in files if one.system == system and one.job and one.may_be_queued]
    return scheduler(system).jobs(sorted(set(wanted))) if wanted else {}


def _read(folder: Path) -> _Files:
    found, summary, steps = None, {}, []
    with suppress(InputError):
        found = read_ticket(folder) if (folder / ticket.NAME).exists() else None
    with suppress(LatticeError):
        summary = read_summary(folder / "summary.json")
    with suppress(OSError):
        steps = [entry for entry in read_steps(folder / "steps.jsonl") if isinstance(entry, dict)]
    return _Files(folder, found, LegLog(folder).events(), summary, steps, is_held(folder / "run.lock"))


def _view(files: _Files, jobs: Jobs) -> RunView:
    newest = legs.last(files.events, "submitted", "began")
    queued = jobs.get(files.job) if jobs else None
    outcome, reason = _standing(files, queued, answered=jobs is not None)
    entry = files.steps[-1] if files.steps else {}
    return RunView(
        folder=files.folder,
        outcome=outcome,
        reason=reason,
        step=entry.get("step"),
        residual_rms=entry.get("residual_rms"),
        scalars={name: value for name, value in (entry.get("scalars") or {}).items() if value is not None},
        elapsed=entry.get("seconds"),
        limit=files.ticket.seconds if files.ticket else None,
        seconds_per_step=_seconds_per_step(files.steps),
        finish=_finish(files) if outcome == "running" else None,
        leg=int(newest.get("leg") or 0) if newest else 0,
        legs=files.ticket.legs if files.ticket else 0,
        site=files.ticket.site_name if files.ticket else "",
        job=files.job,
        begun=newest is not None and newest["event"] == "began",
        queued=_queued_text(files, queued, jobs is not None),
    )


def _queued_text(files: _Files, queued: QueuedJob | None, answered: bool) -> str:
    if not files.may_be_queued:
        return ""
    if not answered:
        return "no answer"
    if queued is None:
        return ""
    return f"{queued.word}, starts {queued.starts}" if queued.starts else queued.word


def _standing(files: _Files, queued: QueuedJob | None, answered: bool) -> tuple[str, str]:
    """Return outcome and reason."""
    if files.held:
        return "running", ""
    open_leg = legs.open_leg(files.events)
    if files.may_be_queued and queued is not None and queued.state != "ended":
        if files.system == "local" and open_leg is not None and open_leg["event"] == "submitted":
            return "waiting", "for others of this machine"
        return queued.state, queued.word if queued.state == "waiting" else ""
    if open_leg is not None and not answered:
        return "unknown", f"the scheduler gives no answer; {open_leg['event']} {open_leg['time']}"
    if open_leg is not None and not (files.summary and open_leg["event"] == "began"):
        return "lost", _loss(open_leg)
    return _ended(files)


def _loss(open_leg: Event) -> str:
    remedy = "`lattice submit --resume` goes on"
    if open_leg["event"] == "submitted":
        return f"job {open_leg.get('job')} has left the queue and has never begun; {remedy}"
    return f"leg {open_leg.get('leg')} has ended without a word, as at a node's failure; {remedy}"


def _ended(files: _Files) -> tuple[str, str]:
    if files.summary:
        why, extra = str(files.summary.get("reason") or ""), legs.halt_reason(files.events)
        if extra and extra not in why:
            why = extra if why in extra else f"{why}; {extra}"
        return str(files.summary.get("outcome") or "unknown"), why
    if legs.is_cancelled(files.events):
        return "cancelled", "before it began"
    halted = legs.halt_reason(files.events)
    if halted:
        return "failed", halted
    if files.steps or (files.folder / "state.h5").exists():
        return "lost", "it has ended without a word; `lattice solve --resume` goes on"
    return "empty", "nothing has been computed"


def _seconds_per_step(steps: Sequence[Mapping[str, Any]]) -> float | None:
    recent = [entry for entry in steps[-RECENT:] if _number(entry.get("seconds")) is not None]
    if len(recent) < 2:
        return None
    spent: float = recent[-1]["seconds"] - recent[0]["seconds"]
    return spent / (len(recent) - 1) if spent >= 0 else None


def _finish(files: _Files) -> float | None:
    """Return the seconds until the wanted residual, by the trend of the last steps' logarithms."""
    wanted = _wanted_residual(files.folder)
    points = [
        (entry["seconds"], math.log(entry["residual_rms"]))
        for entry in files.steps[-RECENT:]
        if _number(entry.get("seconds")) is not None and (_number(entry.get("residual_rms")) or 0.0) > 0
    ]
    if wanted is None or len(points) < 2:
        return None
    (first, high), (last, low) = points[0], points[-1]
    if low >= high or last <= first:
        return None
    return max(0.0, float((low - math.log(wanted)) * (last - first) / (high - low)))


def _wanted_residual(folder: Path) -> float | None:
    with suppress(OSError, ValueError, KeyError, TypeError):
        tables = tomllib.loads((folder / "job.toml").read_text(encoding="utf-8"))
        return float(tables["solve"]["residual_rms"])
    return None


def _number(value: Any) -> float | None:
    return float(value) if isinstance(value, (int, float)) and math.isfinite(value) else None
