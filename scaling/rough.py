"""Windows of marched turbulence as starts: how many become states, and at what cost.

Every start is a run of its own, `lattice solve` with the stages damped, newton, refine, in a folder of its
own below `--folder`; finished ones are not run again, so that a series can be stopped and goes on. A start
counts as a state when Newton's method has brought its residual to the tolerance on the lattice refined twice
and the state varies in time in every frame.

Run `python -m scaling.rough --length 44 --period 20 --seeds 0-19`. Boxes may be given as ranges, too
(`--length 64-100 --period 30-40`): each seed draws its own.
"""

from __future__ import annotations

import argparse
import json
import statistics
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

from lattice.environment import prepare

prepare()

TOLERANCE = 1e-10
UNSTEADY = ("periodic", "relative periodic")


def main() -> int:
    """Run all starts that have no summary yet, print a table and write JSON."""
    options = _arguments()
    rows = []
    for seed in _seeds(options.seeds):
        row = _run(seed, options)
        rows.append(row)
        print(_line(row), flush=True)
    _conclude(rows, options)
    return 0


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--law", default="kuramoto-sivashinsky")
    parser.add_argument(
        "--length", default="44", help="of the box, in every direction; LOW-HIGH draws one a seed"
    )
    parser.add_argument("--period", default="20", help="of the window; LOW-HIGH draws one a seed")
    parser.add_argument("--dx", type=float, default=0.8, help="spacing in space of the damped stage")
    parser.add_argument("--dt", type=float, default=0.5, help="spacing in time of the damped stage")
    parser.add_argument("--orders", default="6,8", help="orders of the differences in time and space")
    parser.add_argument("--seeds", default="0-19", help="FIRST-LAST")
    parser.add_argument("--ranks", type=int, default=1)
    parser.add_argument("--limit", type=float, default=600.0, help="seconds after which a start is stopped")
    parser.add_argument("--set", action="append", default=[], dest="overrides", help="as of lattice solve")
    parser.add_argument("--folder", default="scaling/runs/rough", help="where the runs are kept")
    parser.add_argument("--out", default="", help="JSON; default: in scaling/results, named by the box")
    return parser.parse_args()


def _seeds(text: str) -> range:
    first, _, last = text.partition("-")
    return range(int(first), int(last or first) + 1)


def _drawn(text: str, seed: int, stream: int) -> float:
    """Return a number, drawn from LOW-HIGH for a seed where a range is given."""
    import numpy as np

    low, _, high = text.partition("-")
    share = float(np.random.default_rng([seed, stream]).random())
    return round(float(low) + share * (float(high) - float(low)), 2) if high else float(low)


def _job(seed: int, options: argparse.Namespace) -> str:
    """Return the job of one start."""
    from lattice.laws.catalogue import load_law
    from scaling.windows import even

    law = load_law(options.law)
    length, period = _drawn(options.length, seed, 1), _drawn(options.period, seed, 2)
    order_t, order_x = options.orders.split(",")
    nodes = even(length / options.dx)
    plane = law.dimensions == 2
    lines = ["[law]", f'name = "{options.law}"', "[box]", f"period = {period}", f"length_x = {length}"]
    lines += [f"length_y = {length}"] if plane else []
    lines += ["[lattice]", f"nt = {even(period / options.dt)}", f"nx = {nodes}"]
    lines += [f"ny = {nodes}"] if plane else []
    lines += [f"order_t = {order_t}", f"order_x = {order_x}"]
    shape = [nodes, nodes] if plane else [2 * nodes]
    lines += ["[start]", 'kind = "march"', f"seed = {seed}", "amplitude = 0.5", f"shape = {shape}"]
    lines += ["[solve]", 'stages = ["damped", "newton", "refine"]', f"residual_rms = {TOLERANCE}"]
    return "\n".join([*lines, "[output]", "picture = false", ""])


def _run(seed: int, options: argparse.Namespace) -> dict[str, Any]:
    """Run one start unless it has ended before; return its row."""
    place = Path(options.folder) / f"{options.law}-{options.length}x{options.period}-{seed}"
    place.mkdir(parents=True, exist_ok=True)
    ended = place / "run" / "summary.json"
    if not ended.exists():
        job = place / "job.toml"
        job.write_text(_job(seed, options), encoding="utf-8")
        command = [
            sys.executable,
            "-m",
            "lattice",
            "solve",
            str(job),
            "--out",
            str(place / "run"),
            "--resume",
        ]
        command += ["--ranks", str(options.ranks)] if options.ranks > 1 else []
        command += [word for text in options.overrides for word in ("--set", text)]
        with (place / "log.txt").open("a", encoding="utf-8") as log:
            _within(command, log, options.limit)
    summary = json.loads(ended.read_text(encoding="utf-8")) if ended.exists() else {"outcome": "no summary"}
    return _row(seed, summary)


def _within(command: list[str], log: Any, limit: float) -> None:
    """Run a command; after the limit ask it to stop, as a user would."""
    process = subprocess.Popen(command, stdout=log, stderr=log)
    try:
        process.wait(limit)
    except subprocess.TimeoutExpired:
        process.terminate()
        process.wait(60)


def _row(seed: int, summary: dict[str, Any]) -> dict[str, Any]:
    keys = (
        "outcome",
        "reason",
        "lattice",
        "residual_rms",
        "scalars",
        "linear_iterations",
        "seconds",
        "stages",
    )
    row = {"seed": seed, **{key: summary.get(key) for key in keys}}
    row["kind"] = (summary.get("classification") or {}).get("kind", "")
    row["repeats"] = (summary.get("classification") or {}).get("repeats", [])
    row["state"] = row["outcome"] == "converged" and row["kind"] in UNSTEADY
    return row


def _area(row: dict[str, Any]) -> float:
    scalars = row["scalars"] or {}
    return float(scalars.get("period", 0.0) * scalars.get("length_x", 0.0) * scalars.get("length_y", 1.0))


def _line(row: dict[str, Any]) -> str:
    if not row["scalars"]:
        return f"seed {row['seed']:>3}: {row['outcome']}"
    steps = sum(stage["steps"] for stage in row["stages"])
    return (
        f"seed {row['seed']:>3}: {row['outcome']:<24} {row['kind']:<18} residual {row['residual_rms']:.1e}"
        f"  T {row['scalars']['period']:8.3f}  L {row['scalars']['length_x']:8.3f}  area {_area(row):8.0f}"
        f"  {steps:>4} steps {row['linear_iterations']:>6} iterations {row['seconds']['total']:7.1f} s"
    )


def _conclude(rows: list[dict[str, Any]], options: argparse.Namespace) -> None:
    """Print what the series came to and write JSON."""
    from scaling.record import describe

    states = [row for row in rows if row["state"]]
    seconds = [row["seconds"]["total"] for row in rows if row["seconds"]]
    median = statistics.median(seconds) if seconds else float("nan")
    per_state = sum(seconds) / len(states) if states else float("inf")
    print(
        f"{len(states)} of {len(rows)} starts became states; median {median:.1f} s a start,"
        f" {per_state:.1f} s a state"
    )
    name = f"rough-{options.law}-{options.length}x{options.period}.json"
    path = Path(options.out or f"scaling/results/{name}")
    path.parent.mkdir(parents=True, exist_ok=True)
    content = {
        "machine": describe(),
        "command": sys.argv,
        "written": time.strftime("%Y-%m-%d"),
        "states": len(states),
        "starts": len(rows),
        "median_seconds": median,
        "seconds_per_state": per_state,
        "rows": rows,
    }
    path.write_text(json.dumps(content, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    sys.exit(main())
