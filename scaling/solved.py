"""Solve composed fields one by one with `lattice solve`, each in its own process; what is done stays done."""

from __future__ import annotations

import json
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

STAGES = 'solve.stages=["damped", "newton", "refine"]'


def solve(job: Path, folder: Path, limit: float, options: tuple[str, ...] = ()) -> dict[str, Any]:
    """Solve a job into a folder, unless it holds a finished run, and return how it ended."""
    done = folder / "outcome.json"
    if done.is_file():
        return dict(json.loads(done.read_text()))
    folder.mkdir(parents=True, exist_ok=True)
    settings = [word for text in (STAGES, "output.picture=true", *options) for word in ("--set", text)]
    command = [
        sys.executable,
        "-m",
        "lattice",
        "solve",
        str(job),
        "--out",
        str(folder / "run"),
        "--force",
        *settings,
    ]
    began = time.perf_counter()
    try:
        ran = subprocess.run(command, capture_output=True, text=True, timeout=limit, check=False)
        code, said = ran.returncode, ran.stdout + ran.stderr
    except subprocess.TimeoutExpired as ended:
        code, said = -1, str(ended.stdout or "")
    (folder / "said.txt").write_text(said)
    row = {"exit_code": code, "seconds": round(time.perf_counter() - began, 1), **summary_of(folder / "run")}
    done.write_text(json.dumps(row))
    return row


def summary_of(run: Path) -> dict[str, Any]:
    """Return what a run's summary tells."""
    path = run / "summary.json"
    if not path.is_file():
        return {"outcome": "stopped at the time limit", "settled": False}
    summary = json.loads(path.read_text())
    names = ("outcome", "reason", "residual_rms", "scalars", "lattice", "mean_square")
    row = {name: summary.get(name) for name in names}
    row["kind"] = (summary.get("classification") or {}).get("kind")
    row["settled"] = summary.get("outcome") == "converged" and (summary.get("mean_square") or 0.0) > 1e-12
    return row


def same_state(one: Path, other: Path) -> bool:
    """Tell whether two runs found the same state, up to the law's symmetries."""
    from mpi4py import MPI

    from lattice.classify.canonical import compare_files
    from lattice.errors import LatticeError

    try:
        return bool(compare_files(one / "state.h5", other / "state.h5", MPI.COMM_SELF).same(0.02))
    except LatticeError:
        return False
