"""How an attempt has ended, from its exit code and the files it left."""

from __future__ import annotations

import signal
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from lattice.campaign.attempt import LOST
from lattice.campaign.folder import MemberFiles
from lattice.errors import InputError
from lattice.store.runfolder import read_summary

RUNNING, FAILED, INTERRUPTED, CONVERGED = "running", "failed", "interrupted", "converged"
_INTERRUPTED_CODES = (4, 130)
_SUMMARY_CODES = (0, 3, 4)
"""Exit codes with which `lattice solve` leaves a summary that tells how it ended."""
LOG_TAIL = 4096
NUMBERS = (
    "residual_rms",
    "residual_max",
    "scalars",
    "mean_square",
    "newton_steps",
    "linear_iterations",
    "peak_memory_mb",
    "lattice",
    "unknowns",
    "law",
    "classification",
    "stage",
    "stages",
)
"""Of a run's summary, what a record keeps."""


@dataclass(frozen=True)
class Ending:
    """How an attempt ended.

    Parameters
    ----------
    outcome, reason : str
        As in a record.
    final : bool
        Whether the member has ended for good.
    numbers : dict
        Of the summary, empty where there is none.
    seconds : float or None
        Wall time, as the summary has it.
    """

    outcome: str
    reason: str
    final: bool
    numbers: dict[str, Any]
    seconds: float | None = None


def ending(files: MemberFiles, code: int | str, stopping: bool, limit: float | None) -> Ending | None:
    """Return how an attempt ended, None where it left nothing to tell it by and must be started again.

    Parameters
    ----------
    files : MemberFiles
    code : int or LOST
        Its exit code, minus n where signal n ended it.
    stopping : bool
        Whether the campaign has asked it to stop.
    limit : float or None
        The time limit that it was stopped at.
    """
    summary = _summary(files)
    found = _ending(files, summary, code, stopping, limit)
    if found is None:
        return None
    numbers = {name: summary[name] for name in NUMBERS if name in summary}
    outcome, reason, final = found
    return Ending(outcome, reason, final, numbers, (summary.get("seconds") or {}).get("total"))


def _ending(
    files: MemberFiles, summary: dict[str, Any], code: int | str, stopping: bool, limit: float | None
) -> tuple[str, str, bool] | None:
    """Return outcome, reason and whether that is final."""
    word, reason = str(summary.get("outcome", "")), str(summary.get("reason") or "")
    told = word not in ("", RUNNING) and (code == LOST or code in _SUMMARY_CODES)
    if told and word not in (INTERRUPTED, FAILED):
        return word, reason, True
    if limit is not None:
        return INTERRUPTED, f"stopped at its limit of {limit:g} s", True
    if stopping or code in _INTERRUPTED_CODES or (told and word == INTERRUPTED):
        return INTERRUPTED, reason or "stopped before its end", False
    if word == FAILED:
        return FAILED, reason, True
    if code == LOST:
        return None
    return FAILED, _failure(files.log, code), True


def _summary(files: MemberFiles) -> dict[str, Any]:
    with suppress(InputError):
        return read_summary(files.summary)
    return {}


def _failure(log: Path, code: int | str) -> str:
    """Return why a run failed: the signal that ended it, or the last thing it said."""
    number = -int(code) if int(code) < 0 else int(code) - 128
    with suppress(ValueError):
        return f"killed by {signal.Signals(number).name}"
    said = last_line(log)
    return f"exit code {code}" + (f": {said}" if said else ", without a word")


def last_line(log: Path) -> str:
    """Return the last line of a log, shortened; empty where there is none."""
    try:
        with log.open("rb") as file:
            file.seek(max(0, file.seek(0, 2) - LOG_TAIL))
            lines = file.read().decode("utf-8", errors="replace").split("\n")
    except OSError:
        return ""
    lines = [line.strip() for line in lines if line.strip()]
    text = lines[-1] if lines else ""
    return text if len(text) <= 300 else text[:297] + "..."
