"""Measures the points of a study one after another on this machine, and knows when to stop."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from lattice.environment import without_launcher
from lattice.study.metrics import efficiency_of
from lattice.study.points import Point
from lattice.study.reader import Study
from lattice.study.rows import is_measured, read_rows, rows_of

GRACE = 40.0
"""Seconds a point that is given up has to end by itself."""


@dataclass(frozen=True)
class StudyResult:
    """How one call of the command ended.

    Parameters
    ----------
    measured, waiting : int
        Points with all their repeats, and those without.
    stopped : str
        Why points are left; empty where none is.
    """

    measured: int
    waiting: int
    stopped: str


def run_study(
    study: Study, report: Callable[[str], None], launcher: str | None = None, options: Sequence[str] = ()
) -> StudyResult:
    """Measure every point that has not been, smallest first.

    Parameters
    ----------
    study : Study
    report : callable
        Takes lines for the user.
    launcher : str, optional
        What starts the ranks.
    options : sequence of str
        Of the command line, passed on to the command that measures a point.
    """
    began, stopped = time.monotonic(), ""
    took = 0.0
    for point in study.points:
        if is_measured(study, point, read_rows(study.folder)):
            report(f"{point.label}: measured before")
            continue
        stopped = reason_to_stop(study, point) or _out_of_budget(study, began, took)
        if stopped:
            break
        at = time.monotonic()
        failure = _measure(study, point, launcher, options)
        took = time.monotonic() - at
        report(f"{point.label}: {failure or _told(study, point)} ({took:.0f} s in all)")
        stopped = failure
    left = [p for p in study.points if not is_measured(study, p, read_rows(study.folder))]
    return StudyResult(len(study.points) - len(left), len(left), stopped if left else "")


def reason_to_stop(study: Study, point: Point) -> str:
    """Return why a point is not to be measured: a smaller one's efficiency; empty where there is none."""
    bound = study.section.stop_below
    rows = read_rows(study.folder)
    for smaller in study.points[: point.number]:
        found = efficiency_of(study, smaller, rows)
        if found is not None and found < bound:
            return f"efficiency {found:.2f} at {smaller.ranks} ranks is under stop_below = {bound:g}"
    return ""


def _out_of_budget(study: Study, began: float, last: float) -> str:
    """Return why there is no time for another point: one takes at least as long as the one before."""
    budget = study.section.budget
    if budget is None or time.monotonic() - began + last <= budget:
        return ""
    return f"the budget of {budget:g} s is used"


def _measure(study: Study, point: Point, launcher: str | None, options: Sequence[str]) -> str:
    """Measure a point in processes of its own; return why it failed, or an empty text."""
    command = [sys.executable, "-m", "lattice", "study", str(study.file), "--point", str(point.number)]
    command += ["--out", str(study.folder), *options]
    if launcher is not None:
        command += ["--launcher", launcher]
    process = subprocess.Popen(
        command,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.PIPE,
        text=True,
        env=without_launcher(os.environ),
    )
    try:
        _, said = process.communicate(timeout=study.section.point_seconds)
    except subprocess.TimeoutExpired:
        process.terminate()
        try:
            process.communicate(timeout=GRACE)
        except subprocess.TimeoutExpired:
            process.kill()
        return f"given up after {study.section.point_seconds:g} s (study.point_seconds)"
    if process.returncode != 0:
        lines = said.strip().splitlines() or [f"exit code {process.returncode}"]
        return f"failed: {lines[-1]}"
    if not rows_of(point, read_rows(study.folder)):
        return "failed: it left no rows; was the study's file changed meanwhile?"
    return ""


def _told(study: Study, point: Point) -> str:
    rows = rows_of(point, read_rows(study.folder))
    best = min(row["seconds"]["whole"]["max"] for row in rows)
    iterations = rows[0].get("iterations")
    text = f"{best:.3f} s" + ("" if iterations is None else f", {iterations} linear iterations")
    found = efficiency_of(study, point, read_rows(study.folder))
    return text + ("" if found is None else f", efficiency {found:.2f}")
