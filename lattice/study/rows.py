"""The raw rows of a study: one line of JSON per point and repeat, appended as they are measured."""

from __future__ import annotations

import os
import platform
import socket
import subprocess
import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from lattice.store.runfolder import append_line, read_steps
from lattice.study.points import Point
from lattice.study.reader import Study

NAME = "rows.jsonl"


def read_rows(folder: Path) -> list[dict[str, Any]]:
    """Return all rows of a study's folder; none where there are none yet."""
    path = folder / NAME
    return read_steps(path) if path.exists() else []


def append_rows(folder: Path, rows: Sequence[dict[str, Any]]) -> None:
    """Append rows to those of a folder."""
    folder.mkdir(parents=True, exist_ok=True)
    for row in rows:
        append_line(folder / NAME, row)


def rows_of(point: Point, rows: Sequence[dict[str, Any]]) -> list[dict[str, Any]]:
    """Return the rows that a point has, of its present job only."""
    return [row for row in rows if row.get("digest") == point.digest and "seconds" in row]


def is_measured(study: Study, point: Point, rows: Sequence[dict[str, Any]]) -> bool:
    """Tell whether a point has all its repeats; where ranks share cores one tells all the counts."""
    found = rows_of(point, rows)
    wanted = 1 if any(row["oversubscribed"] for row in found) else study.section.repeats
    return len(found) >= wanted


def current_rows(study: Study, rows: Sequence[dict[str, Any]]) -> list[dict[str, Any]]:
    """Return the rows of the study's points as they are now, in the order of the points."""
    return [row for point in study.points for row in rows_of(point, rows)]


def describe_point(study: Study, point: Point, cores: int, oversubscribed: bool) -> dict[str, Any]:
    """Return what every row of a point says besides what is measured."""
    job = point.job
    lattice = {name: n for name, n in job.lattice.model_dump().items() if n is not None}
    box = {name: n for name, n in job.box.model_dump().items() if n is not None}
    return {
        "study": study.name,
        "kind": study.section.kind,
        "measure": study.section.measure,
        "digest": point.digest,
        "ranks": point.ranks,
        "growth": point.growth,
        "factor": point.factor,
        "cores": cores,
        "oversubscribed": oversubscribed,
        "law": job.law.name or "own formula",
        "dimensions": 2 if job.lattice.ny else 1,
        "lattice": lattice,
        "box": box,
        "preconditioner": job.solve.preconditioner,
        "linear_rtol": job.solve.linear_rtol,
    }


def describe_host() -> dict[str, Any]:
    """Return host, processor, load, binding, versions and commit."""
    from lattice.store.versions import versions

    return {
        "host": socket.gethostname(),
        "processor": _processor(),
        "memory_gb": round(os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e9, 1),
        "load_average": os.getloadavg()[0],
        "binding": sorted(os.sched_getaffinity(0)),
        "system": platform.platform(),
        "versions": versions(),
        "commit": _commit(),
        "measured": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime()),
    }


def _processor() -> str:
    for line in Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines():
        if line.startswith("model name"):
            return line.partition(":")[2].strip()
    return platform.processor()


def _commit() -> str:
    command = ["git", "describe", "--always", "--dirty"]
    done = subprocess.run(command, capture_output=True, text=True, check=False, cwd=Path(__file__).parent)
    return done.stdout.strip() or "unknown"
