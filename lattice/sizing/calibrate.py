"""The calibration of a machine: a small job solved as users do, and the pieces of work on small lattices."""

from __future__ import annotations

import json
import os
import platform
import re
import resource
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from lattice.errors import LatticeError
from lattice.sizing.asking import Launch, alone, ask
from lattice.sizing.calibration import Calibration, Speeds
from lattice.sizing.fit import fit_line, fit_speeds
from lattice.sizing.measure import Sample

LIMIT = 240.0
"""Seconds that one part may take."""
SMALL_JOB = """
[law]
name = "kuramoto-sivashinsky"

[box]
period = 10.0
length_x = 22.0

[lattice]
nt = 24
nx = 32

[start]
kind = "waves"
modes = [{ amplitude = 1.0, kx = 2, kt = 1 }, { amplitude = 0.5, kx = 3, kt = -1 }]

[solve]
stages = ["newton"]
newton_steps = 1
residual_rms = 1e-14
"""
"""One step: what it takes is the program's own start, its loops, the picture."""


@dataclass(frozen=True)
class _Run:
    """A small job as it ran: seconds of the whole command, and memory of a rank, MB."""

    seconds: float
    rank_mb: float
    with_picture_mb: float


def calibrate(ranks: Sequence[int], launch: Launch, report: Callable[[str], None]) -> Calibration:
    """Return what this machine does on each of some rank counts.

    Parameters
    ----------
    ranks : sequence of int
        1 is always measured first.
    launch : callable
        Makes the command line that runs a program on several ranks.
    report : callable
        Takes lines of progress.

    Raises
    ------
    LatticeError
        If one rank cannot be measured. Further counts that fail are noted and left out.
    """
    began = time.perf_counter()
    report("a small job, as `lattice solve` runs it")
    _small_job("coarse", 1, alone)  # compiles its loops
    run = _small_job("direct", 1, alone)
    speeds: list[Speeds] = []
    notes: list[str] = []
    march: list[Sample] = []
    worst = 0.0
    for count in dict.fromkeys((1, *ranks)):
        report(f"products, transforms, factorisations on {count} rank(s)")
        try:
            answer = ask("measure", {}, count, launch, LIMIT)
            direct = run if count == 1 else _small_job("direct", count, launch)
            coarse = _small_job("coarse", count, launch)
        except LatticeError as error:
            if count == 1:
                raise
            notes.append(f"{count} ranks not measured: {error}")
            continue
        starts = (direct.seconds, max(direct.seconds, coarse.seconds))
        found, error_here = fit_speeds(count, starts, _samples(answer["samples"]))
        worst = max(worst, error_here)
        speeds.append(found)
        march += _samples(answer["march"])
    line, _ = fit_line(march)
    return Calibration(
        host=socket.gethostname(),
        processor=_processor(),
        cores=os.cpu_count() or 1,
        date=datetime.now(UTC).isoformat(timespec="seconds"),
        versions=_versions(),
        speeds=tuple(speeds),
        march=line,
        program_mb=run.rank_mb,
        picture_mb=max(0.0, run.with_picture_mb - run.rank_mb),
        error=worst,
        seconds=time.perf_counter() - began,
        notes=tuple(notes),
    )


def _samples(records: Sequence[dict[str, Any]]) -> list[Sample]:
    return [Sample(**record) for record in records]


def _small_job(preconditioner: str, ranks: int, launch: Launch) -> _Run:
    """Run the small job and tell what it took."""
    coarse = '{ nt = 12, nx = 16, order = 8, smoother = "spectral" }'
    with tempfile.TemporaryDirectory(prefix="lattice-size-") as folder:
        job, out = Path(folder) / "small.toml", Path(folder) / "run"
        job.write_text(SMALL_JOB, encoding="utf-8")
        program = [sys.executable, "-m", "lattice", "solve", str(job), "--out", str(out)]
        program += ["--set", f"solve.preconditioner={preconditioner}"]
        program += ["--set", f"solve.coarse={coarse}"] if preconditioner == "coarse" else []
        command = (launch if ranks > 1 else alone)(ranks, program)
        began = time.perf_counter()
        try:
            done = subprocess.run(command, capture_output=True, text=True, timeout=LIMIT, check=False)
        except (OSError, subprocess.TimeoutExpired) as error:
            raise LatticeError(f"the small job did not run on {ranks} rank(s): {error}") from None
        took = time.perf_counter() - began
        try:
            summary = json.loads((out / "summary.json").read_text(encoding="utf-8"))
        except (OSError, ValueError):
            said = (done.stderr or done.stdout).strip().splitlines()[-1:]
            raise LatticeError(f"the small job failed on {ranks} rank(s): {' '.join(said)}") from None
    largest = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss
    unit = 1 if sys.platform == "darwin" else 1024
    rank_mb = float(summary["peak_memory_mb"]) / ranks
    return _Run(took, rank_mb, max(rank_mb, largest * unit / 1e6))


def _processor() -> str:
    try:
        text = Path("/proc/cpuinfo").read_text(encoding="utf-8", errors="replace")
    except OSError:
        return platform.processor()
    named = re.search(r"^model name\s*:\s*(.+)$", text, re.MULTILINE)
    return named[1].strip() if named else platform.machine()


def _versions() -> dict[str, str]:
    """Return the versions of what was measured, from a process of its own: MPI is not started here."""
    code = (
        "import json; from lattice import environment; environment.prepare();"
        " from lattice.store.versions import versions; print(json.dumps(versions()))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    try:
        found: dict[str, str] = json.loads(done.stdout.strip().splitlines()[-1])
    except (ValueError, IndexError):
        return {}
    return found
