"""How many mosaics of small states settle, and how the settled state resembles its layout.

    python -m scaling.mosaics [--layouts 20] [--states 6] [--folder DIR] [--out FILE]

Small states of the film law first: windows of a march at L = 22, T = 20, solved one seed after the other
until there are enough that differ and are periodic in time. Then layouts of two side by side and of two by
two, members drawn and reflected at random, each composed as by `lattice mosaic` and solved by
`lattice solve` (damped stage, Newton's method, two refinements by 1.4). Started again with the same folder,
it goes on where it was.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

from lattice.environment import prepare

prepare()

SMALL = """
[law]
name = "kuramoto-sivashinsky"

[box]
period = 20.0
length_x = 22.0

[lattice]
nt = 40
nx = 28

[start]
kind = "window"
"""
SEEDS = 40
TIMED = ("periodic", "relative periodic")


def small_states(options: argparse.Namespace) -> list[Path]:
    """Solve windows until there are enough states that differ, and return their runs."""
    from scaling.solved import same_state, solve

    job, chosen = options.folder / "small.toml", []
    job.write_text(SMALL)
    for seed in range(SEEDS):
        folder = options.folder / f"small-{seed:02d}"
        row = solve(job, folder, options.limit, (f"start.seed={seed}",))
        run = folder / "run"
        new = row["settled"] and row["kind"] in TIMED and not any(same_state(run, other) for other in chosen)
        print(
            f"seed {seed:2d}: {row['outcome']:14s} {row['kind'] or '':18s} {row['seconds']:6.1f} s",
            "new" * new,
            flush=True,
        )
        chosen += [run] if new else []
        if len(chosen) == options.states:
            break
    return chosen


def layouts(count: int, states: int) -> list[dict[str, Any]]:
    """Return layouts drawn at random: the first half two side by side, the others two by two."""
    import numpy as np

    generator, found = np.random.default_rng(1), []
    for number in range(count):
        size = 2 if number < count // 2 else 4
        drawn = [int(n) for n in generator.choice(states, size=size, replace=size > states)]
        mirrored = [bool(n) for n in generator.integers(0, 2, size=size)]
        names = "abcd"[:size]
        rows = [" ".join(names)] if size == 2 else ["a b", "c d"]
        found.append({"rows": rows, "states": dict(zip(names, drawn, strict=True)), "reflected": mirrored})
    return found


def compose(layout: dict[str, Any], runs: list[Path], file: Path) -> float:
    """Write a mosaic and its job; return its residual_rms."""
    from lattice.cli.composing import job_text
    from lattice.starts.compose import mosaic_states, plan_composed_mosaic
    from lattice.starts.options import MemberOptions, MosaicOptions

    members = {
        name: {"file": str(runs[state] / "state.h5"), "reflect": "x" if mirrored else None}
        for (name, state), mirrored in zip(layout["states"].items(), layout["reflected"], strict=True)
    }
    coarse = {"nx": 56, "nt": 0}
    options = MosaicOptions(tuple(layout["rows"]), {n: MemberOptions(**m) for n, m in members.items()})
    planned = plan_composed_mosaic(options, {"nx": 56})
    coarse["nt"] = 2 * round(planned.values["period"] / 0.5 / 2)
    meta = mosaic_states(layout["rows"], members, file, nodes=coarse)
    planned = plan_composed_mosaic(options, coarse)
    file.with_suffix(".toml").write_text(job_text(planned, file, f"the mosaic {'; '.join(layout['rows'])}"))
    return meta.residual_rms


def resemblance(composed: Path, settled: Path) -> dict[str, float]:
    """Return how a settled state correlates with its layout: as it stands, and at the best shift.

    Both on the same nodes of their own boxes and frames, the settled one also seen in the layout's frame.
    """
    import numpy as np

    from lattice.starts.interpolation import interpolation_matrix
    from lattice.store.statefile import open_state

    one, other = open_state(composed), open_state(settled)
    a = one.field[:, 0, :, 0]
    b = interpolation_matrix(other.field.shape[0], a.shape[0]) @ other.field[:, 0, :, 0]
    b = b @ interpolation_matrix(other.field.shape[2], a.shape[1]).T
    found = {"as_it_stands": -1.0, "best_shift": -1.0}
    slip = other.meta.values["drift_x"] - one.meta.values["drift_x"]
    for share in (0.0, 1.0):
        # The settled state drifts faster by `slip`: in the layout's frame it is at x - slip*t.
        times = (np.arange(a.shape[0]) / a.shape[0] - 0.5) * other.meta.values["period"]
        k = 2.0 * np.pi / other.meta.values["length_x"] * np.arange(a.shape[1] // 2 + 1)
        moved = np.fft.irfft(np.fft.rfft(b) * np.exp(-1j * share * slip * times[:, None] * k), a.shape[1])
        product = np.fft.irfft2(np.fft.rfft2(a).conj() * np.fft.rfft2(moved), a.shape)
        product /= np.sqrt((a * a).sum() * (moved * moved).sum())
        found["as_it_stands"] = max(found["as_it_stands"], float(product[0, 0]))
        found["best_shift"] = max(found["best_shift"], float(product.max()))
    return found


def main() -> int:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--layouts", type=int, default=20)
    parser.add_argument("--states", type=int, default=6)
    parser.add_argument("--limit", type=float, default=240.0, help="seconds for each solve")
    parser.add_argument("--folder", type=Path, default=Path("runs/mosaics"))
    parser.add_argument("--out", type=Path, help="JSON; default: mosaics.json in the folder")
    options = parser.parse_args()
    options.folder.mkdir(parents=True, exist_ok=True)
    from lattice.solve.petsc import start_petsc

    start_petsc([])
    runs = small_states(options)
    rows = [_settle(n, layout, runs, options) for n, layout in enumerate(layouts(options.layouts, len(runs)))]
    for size in (2, 4):
        part = [row for row in rows if len(row["states"]) == size]
        print(f"{size} members: {sum(row['settled'] for row in part)} of {len(part)} settle")
    from scaling.record import describe

    out = options.out or options.folder / "mosaics.json"
    command = " ".join(["python -m scaling.mosaics", *sys.argv[1:]])
    record = {"machine": describe(), "command": command, "states": [str(run) for run in runs]}
    out.write_text(json.dumps({**record, "rows": rows}, indent=1))
    return 0


def _settle(
    number: int, layout: dict[str, Any], runs: list[Path], options: argparse.Namespace
) -> dict[str, Any]:
    """Compose and solve one layout, and return its row."""
    from lattice.store.statefile import read_meta
    from scaling.solved import solve

    name = f"layout-{number:02d}"
    file = options.folder / f"{name}.h5"
    start = (
        read_meta(file).residual_rms if file.with_suffix(".toml").is_file() else compose(layout, runs, file)
    )
    row = {**layout, "start_residual_rms": start}
    row |= solve(file.with_suffix(".toml"), options.folder / name, options.limit)
    likeness = {"as_it_stands": float("nan"), "best_shift": float("nan")}
    if row["settled"]:
        likeness = resemblance(file, options.folder / name / "run" / "state.h5")
    row |= likeness
    scalars = row.get("scalars") or {}
    print(
        f"{number:2d} {'; '.join(layout['rows']):12s} start {start:.2e} -> {row['outcome']:14s}"
        f" {row.get('residual_rms') or float('nan'):.1e} T {scalars.get('period', float('nan')):7.3f}"
        f" L {scalars.get('length_x', float('nan')):7.3f} {row.get('kind') or '':18s}"
        f" correlation {likeness['as_it_stands']:.2f} {likeness['best_shift']:.2f} {row['seconds']:6.1f} s",
        flush=True,
    )
    return row


if __name__ == "__main__":
    sys.exit(main())
