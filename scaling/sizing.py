"""Predicted against measured: memory and time of whole jobs, by `lattice.sizing` and as they ran.

    python -m scaling.sizing [--cases NAME,...] [--calibration FILE] [--out FILE]

Every job is sized first, then solved as a user would, by `lattice solve` in processes of its own. Its loops
are compiled beforehand. Time is the whole command's, from start to end, start of the state included. Two
predictions of it are told: with the counts of Newton steps and linear iterations that the run turned out to
take, which tests the cost model, and with the counts assumed beforehand. Rows of earlier calls are kept.
"""

from __future__ import annotations

import argparse
import json
import os
import subprocess
import sys
import tempfile
import time
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from lattice.environment import prepare, without_launcher

prepare()

STEPS = 3
MEMORY, LEAST, TIME = 0.20, 0.9, 0.35
"""Largest relative errors of memory and time, and the least estimate over the measured memory."""


@dataclass(frozen=True)
class Case:
    """One job: law, box, lattice (nt, ny, nx), preconditioner, ranks, the one stage."""

    law: str
    box: dict[str, float]
    shape: tuple[int, int, int]
    preconditioner: str
    ranks: int
    stage: str = "newton"


def _film(
    length: float, period: float, nt: int, nx: int
) -> tuple[str, dict[str, float], tuple[int, int, int]]:
    return "kuramoto-sivashinsky", {"period": period, "length_x": length}, (nt, 1, nx)


def _sheet(
    length: float, period: float, nt: int, n: int
) -> tuple[str, dict[str, float], tuple[int, int, int]]:
    return "film-2d", {"period": period, "length_x": length, "length_y": length}, (nt, n, n)


BOXES = {
    "1d-5k-direct": (*_film(22.0, 32.5, 84, 64), "direct"),
    "1d-15k-direct": (*_film(44.0, 40.0, 144, 104), "direct"),
    "1d-14k-coarse": (*_film(50.0, 50.0, 144, 100), "coarse"),
    "1d-58k-coarse": (*_film(100.0, 100.0, 288, 200), "coarse"),
    "2d-3k-direct": (*_sheet(9.0, 6.0, 16, 14), "direct"),
    "2d-8k-direct": (*_sheet(12.0, 9.0, 24, 18), "direct"),
    "2d-28k-coarse": (*_sheet(14.0, 12.0, 36, 28), "coarse"),
    "2d-67k-coarse": (*_sheet(20.0, 15.0, 42, 40), "coarse"),
}
CASES = {f"{name}-{ranks}": Case(*box, ranks) for name, box in BOXES.items() for ranks in (1, 2)}
CASES["1d-15k-damped-1"] = Case(*_film(44.0, 40.0, 144, 104), "direct", 1, "damped")


def job_tables(case: Case) -> dict[str, Any]:
    """Return the job file's tables."""
    nt, ny, nx = case.shape
    lattice = {"nt": nt, "nx": nx} | ({"ny": ny} if ny > 1 else {})
    return {
        "law": {"name": case.law},
        "box": case.box,
        "lattice": lattice,
        "start": {"kind": "march", "seed": 1, "spin_up": 60.0, "dt": 0.1, "amplitude": 0.5},
        "solve": {
            "stages": [case.stage],
            "newton_steps": STEPS,
            "damped": {"steps": STEPS},
            "residual_rms": 1e-14,
            "preconditioner": case.preconditioner,
        },
        "output": {"picture": True},
    }


def compile_loops(folder: Path) -> None:
    """Run a small job of each law with two levels, so that nothing is left to compile."""
    for law, box, shape in (_film(40.0, 30.0, 80, 80), _sheet(10.0, 8.0, 22, 20)):
        case = Case(law, box, shape, "coarse", 1)
        _solve(case, folder / f"first-{law}", 1)


def _solve(case: Case, folder: Path, steps: int = STEPS) -> dict[str, Any]:
    """Solve a job as a user does; return its summary, with the seconds of the whole command."""
    path = _write(case, folder)
    command = [sys.executable, "-m", "lattice", "solve", str(path), "--out", str(folder / "run"), "--force"]
    command += ["--ranks", str(case.ranks), "--set", f"solve.newton_steps={steps}"]
    began = time.perf_counter()
    alone = without_launcher(os.environ)  # this process may have started MPI
    done = subprocess.run(command, capture_output=True, text=True, check=False, env=alone)
    seconds = time.perf_counter() - began
    try:
        summary: dict[str, Any] = json.loads((folder / "run" / "summary.json").read_text())
    except OSError:
        raise SystemExit(f"{' '.join(command)}\n{done.stdout}\n{done.stderr}") from None
    return {**summary, "command_seconds": seconds}


def _write(case: Case, folder: Path) -> Path:
    import tomli_w

    folder.mkdir(parents=True, exist_ok=True)
    path = folder / "job.toml"
    path.write_text(tomli_w.dumps(job_tables(case)))
    return path


def find_out(name: str, case: Case, folder: Path) -> dict[str, Any]:
    """Return what probes tell about a job."""
    from lattice.job.reader import load_job
    from lattice.sizing.gather import gather

    job = load_job(_write(case, folder))
    began = time.perf_counter()
    knowledge = gather(job, case.ranks)
    return {"case": name, "knowledge": knowledge.record(), "sizing_seconds": time.perf_counter() - began}


def predict(name: str, case: Case, row: dict[str, Any], calibration: Any, folder: Path) -> dict[str, Any]:
    """Return what is predicted for a run, from what was found out about it, beside what was measured."""
    from lattice.job.reader import load_job
    from lattice.sizing.estimate import estimate
    from lattice.sizing.figures import Assumptions
    from lattice.sizing.knowledge import Knowledge

    job, summary = load_job(_write(case, folder)), row["summary"]
    knowledge = Knowledge.of_record(row["knowledge"])
    before = estimate(job, case.ranks, calibration, knowledge)
    steps = max(1, int(summary["newton_steps"]))
    iterations = max(1, round(summary["linear_iterations"] / steps))
    counts = Assumptions(steps, iterations, steps, iterations)
    after = estimate(job, case.ranks, calibration, knowledge, counts)
    measured = {key: summary[key] for key in ("command_seconds", "peak_memory_mb", "seconds")}
    found: dict[str, Any] = {
        "case": name,
        "ranks": case.ranks,
        "nodes": list(case.shape),
        "preconditioner": case.preconditioner,
        "coarse": before.legs[0].coarse,
        "steps": steps,
        "iterations": iterations,
        "measured": measured,
        "predicted": after.record(),
        "memory_ratio": before.all_ranks_mb / summary["peak_memory_mb"],
        "time_ratio": None,
        "time_ratio_beforehand": None,
        "problems": list(knowledge.problems),
    }
    if after.seconds is not None and before.seconds is not None:
        found["time_ratio"] = after.seconds / summary["command_seconds"]
        found["time_ratio_beforehand"] = before.seconds / summary["command_seconds"]
    return found


def passes(row: dict[str, Any]) -> bool:
    """Tell whether a row is within the stated errors."""
    memory, seconds = row["memory_ratio"], row["time_ratio"]
    return bool(
        abs(memory - 1.0) <= MEMORY and memory >= LEAST and seconds is not None and abs(seconds - 1.0) <= TIME
    )


def _keep(path: Path, rows: dict[str, Any], calibration: Any) -> None:
    """Write all rows, with the machine and its calibration."""
    from scaling.record import describe

    path.parent.mkdir(parents=True, exist_ok=True)
    content = {"machine": describe(), "calibration": None, "rows": list(rows.values())}
    if calibration is not None:
        content["calibration"] = asdict(calibration)
    path.write_text(json.dumps(content, indent=1) + "\n")


HEADER = (
    f"{'case':18} {'ranks':>5} {'coarse':>12} {'steps':>5} {'its':>4}  {'MB':>6} {'pred.':>6} {'ratio':>6}"
    f"  {'s':>6} {'pred.':>6} {'ratio':>6} {'beforehand':>10}"
)


def line(row: dict[str, Any]) -> str:
    """Return a row as it is printed."""
    measured, predicted = row["measured"], row["predicted"]
    memory, seconds = measured["peak_memory_mb"], measured["command_seconds"]
    coarse = "x".join(str(n) for n in row["coarse"] or () if n > 1) or "-"
    text = f"{row['case']:18} {row['ranks']:>5} {coarse:>12} {row['steps']:>5} {row['iterations']:>4}"
    text += f"  {memory:>6.0f} {row['memory_ratio'] * memory:>6.0f} {row['memory_ratio']:>6.2f}"
    if row["time_ratio"] is None:
        return f"{text}  {seconds:>6.1f}      -      -"
    text += f"  {seconds:>6.1f} {predicted['seconds']:>6.1f} {row['time_ratio']:>6.2f}"
    return f"{text} {row['time_ratio_beforehand']:>10.2f}{'' if passes(row) else '  OUTSIDE'}"


def main() -> int:
    """Size and run the cases; print a table and write JSON."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--cases", default=",".join(CASES))
    modes = parser.add_mutually_exclusive_group()
    modes.add_argument(
        "--find-out", action="store_true", help="only compile and probe, for a call with --kept"
    )
    modes.add_argument("--kept", action="store_true", help="run with what an earlier call has found out")
    modes.add_argument("--again", action="store_true", help="predict kept runs anew, run nothing")
    parser.add_argument("--calibration", help="a calibration's file; default: this machine's")
    parser.add_argument("--out", default="scaling/results/sizing.json")
    options = parser.parse_args()
    from lattice.sizing.calibration import calibration_path, load_calibration

    calibration = load_calibration(Path(options.calibration) if options.calibration else calibration_path())
    path = Path(options.out)
    rows = {r["case"]: r for r in json.loads(path.read_text())["rows"]} if path.exists() else {}
    print(HEADER)
    with tempfile.TemporaryDirectory(prefix="lattice-sizing-") as folder:
        names = list(rows) if options.again else options.cases.split(",")
        if not options.again and not options.kept:
            compile_loops(Path(folder))
        for name in names:
            place, case = Path(folder) / name, CASES[name]
            if not options.again and not options.kept:
                rows[name] = find_out(name, case, place)
            if not options.again and not options.find_out:
                rows[name]["summary"] = _solve(case, place)
            if not options.find_out:
                rows[name] |= predict(name, case, rows[name], calibration, place)
                print(line(rows[name]), flush=True)
            _keep(path, rows, calibration)
    if options.find_out:
        return 0
    inside = sum(passes(row) for row in rows.values())
    print(
        f"{inside} of {len(rows)} within {MEMORY:.0%} of memory and {TIME:.0%} of time,"
        f" no memory below {LEAST}"
    )
    return 0 if inside == len(rows) else 1


if __name__ == "__main__":
    sys.exit(main())
