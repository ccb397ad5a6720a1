"""How many of the closest recurrences of a march become states.

    python -m scaling.recurrent [--count 10] [--time 3000] [--seed 0] [--folder DIR] [--out FILE]

The film law at L = 22: the march is scanned once, the closest recurrences are written as composed fields,
and `lattice solve` takes each through its damped stage, Newton's method and two refinements by 1.4. A
recurrence counts where that ends converged on the finest lattice. Started again with the same folder, it
goes on where it was.
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from pathlib import Path
from typing import Any

from lattice.environment import prepare

prepare()

LENGTH, DX, DT = 22.0, 0.8, 0.5


def write_recurrences(options: argparse.Namespace) -> list[dict[str, Any]]:
    """Scan the march, write the closest recurrences and their jobs, and return a row for each."""
    from dataclasses import replace

    import numpy as np
    from mpi4py import MPI

    from lattice.cli.composing import job_text
    from lattice.geometry.lattice import Lattice
    from lattice.laws.catalogue import load_law
    from lattice.starts.compose import Composition
    from lattice.starts.folding import shares
    from lattice.starts.options import ExcerptOptions, RecurrenceOptions
    from lattice.starts.recurrence import Returner
    from lattice.store.statefile import write_state
    from lattice.store.statemeta import COMPOSED, StateMeta

    law, nx = load_law("kuramoto-sivashinsky"), 2 * round(0.5 * LENGTH / DX)
    values = {**law.defaults, "period": 40.0, "length_x": LENGTH, "drift_x": 0.0, "source_u": 0.0}
    start = RecurrenceOptions(
        seed=options.seed,
        march_time=options.time,
        shape=(48,),
        shortest=10.0,
        longest=80.0,
        every=0.5,
        match_drift=("x",),
    )
    began = time.perf_counter()
    returner = Returner(start, Lattice(16, 1, nx), values, law, print)
    found = returner.scan()
    seconds = time.perf_counter() - began
    print(f"{len(found.recurrences)} recurrences in {seconds:.0f} s")
    rows = []
    for number in range(1, min(options.count, len(found.recurrences)) + 1):
        plan, each = returner.plan_of(found, number), found.recurrences[number - 1]
        lattice = Lattice(2 * round(0.5 * plan.found["period"] / DT), 1, nx)
        returner.lattice = lattice
        field = np.zeros((*lattice.shape, 1))
        parts = shares(plan.lag, plan.folded, lattice.nt, start.blend)
        for share, whole in zip(parts, returner.shares_of_slices(), strict=True):
            field[share.level] += share.weight * whole
        file = options.folder / f"recurrence-{number:02d}.h5"
        meta = StateMeta.of_law(law, lattice, {**values, **plan.found}, outcome=COMPOSED)
        from lattice.geometry.block import Block

        write_state(file, field, Block.whole(lattice), replace(meta), MPI.COMM_SELF)
        composed = Composition("excerpt", ExcerptOptions(str(file)), law, lattice, dict(meta.values))
        file.with_suffix(".toml").write_text(
            job_text(composed, file, f"recurrence {number} of seed {options.seed}")
        )
        rows.append(
            {
                "number": number,
                "time": each.time,
                "distance": each.distance,
                "reflected": bool(each.image),
                "start_period": plan.found["period"],
                "start_drift": plan.found["drift_x"],
                "scan_seconds": round(seconds, 1),
            }
        )
    return rows


def main() -> int:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--count", type=int, default=10)
    parser.add_argument("--time", type=float, default=3000.0)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--limit", type=float, default=300.0, help="seconds for each solve")
    parser.add_argument("--folder", type=Path, default=Path("runs/recurrent"))
    parser.add_argument("--out", type=Path, help="JSON; default: recurrent.json in the folder")
    options = parser.parse_args()
    options.folder.mkdir(parents=True, exist_ok=True)
    kept = options.folder / "recurrences.json"
    if not kept.is_file():
        kept.write_text(json.dumps(write_recurrences(options), indent=1))
    from scaling.record import describe
    from scaling.solved import same_state, solve

    rows = json.loads(kept.read_text())[: options.count]
    runs: list[Path] = []
    for row in rows:
        name = f"recurrence-{row['number']:02d}"
        folder = options.folder / name
        row |= solve(options.folder / f"{name}.toml", folder, options.limit)
        run = folder / "run"
        row["same_as"] = next(
            (n for n, other in enumerate(runs, 1) if row["settled"] and same_state(run, other)), None
        )
        runs.append(run)
        scalars = row.get("scalars") or {}
        print(
            f"{row['number']:3d} t {row['time']:7.1f} distance {row['distance']:.3f}"
            f" period {row['start_period']:7.3f}"
            f" -> {row['outcome']:14s} {row.get('residual_rms') or float('nan'):.1e} period"
            f" {scalars.get('period', float('nan')):8.4f} length {scalars.get('length_x', float('nan')):8.4f}"
            f" {row.get('kind') or '':18s} {row['seconds']:6.1f} s"
            + (f"  same as {row['same_as']}" if row["same_as"] else ""),
            flush=True,
        )
    settled = sum(row["settled"] for row in rows)
    different = sum(bool(row["settled"] and not row["same_as"]) for row in rows)
    print(f"{settled} of {len(rows)} become states, {different} different ones")
    out = options.out or options.folder / "recurrent.json"
    out.write_text(
        json.dumps(
            {
                "machine": describe(),
                "command": " ".join(["python -m scaling.recurrent", *sys.argv[1:]]),
                "rows": rows,
            },
            indent=1,
        )
    )
    return 0


if __name__ == "__main__":
    sys.exit(main())
