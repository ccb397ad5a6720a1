"""A large state by the whole program: a small state repeated, refined and disturbed, then solved as a job.

    python -m scaling.large STATE.h5 --repeat 7,7 --nodes 168,128 [--ranks 2] [--out FOLDER] [--set KEY=VALUE]

`--repeat` and `--nodes` are t,x or t,y,x: how often the state is repeated, and the nodes of one repeat. The
start is disturbed on its long waves by a relative 1e-3, which no repeat of the small state has. What the
solver must find is the whole large box; the small state is where it starts.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import tomli_w
from numpy.typing import NDArray

from lattice.environment import prepare

prepare()

NOISE, WAVES = 1e-3, 24


def repeated(field: NDArray[np.float64], nodes: list[int], repeats: list[int]) -> NDArray[np.float64]:
    """Return a field on other nodes, repeated along its axes (t, y, x)."""
    from scipy.signal import resample

    for axis, (count, times) in enumerate(zip(nodes, repeats, strict=True)):
        fine = resample(field, count, axis=axis) if count != field.shape[axis] else field
        field = np.take(fine, np.arange(count * times) % count, axis=axis)
    return field


def long_waves(shape: tuple[int, ...], seed: int) -> NDArray[np.float64]:
    """Return noise of unit root mean square on the first wavenumbers of every axis, its means zero."""
    generator = np.random.default_rng(seed)
    noise = generator.standard_normal((2, *(min(2 * WAVES + 1, n) for n in shape[:3]), shape[3]))
    small = np.fft.fftn(noise[0], axes=(0, 1, 2))
    whole = np.zeros(shape, dtype=complex)
    picks = [np.fft.fftfreq(n, 1.0 / n).astype(int) for n in small.shape[:3]]
    whole[np.ix_(*picks)] = small
    whole[:, 0, 0] = 0.0
    wave = np.fft.ifftn(whole, axes=(0, 1, 2)).real
    return np.asarray(wave / wave.std())


def write_job(path: Path, options: Any) -> Path:
    """Write the start and the job into a folder; return the job's path."""
    from lattice.store.statefile import open_state

    state = open_state(options.state)
    meta = state.meta
    repeats, nodes = (_three(text) for text in (options.repeat, options.nodes))
    field = repeated(state.field, nodes, repeats)
    field += NOISE * field.std() * long_waves(field.shape, 5)
    path.mkdir(parents=True, exist_ok=True)
    np.save(path / "start.npy", field)
    scale = {"period": repeats[0], "length_y": repeats[1], "length_x": repeats[2]}
    box = {
        key: meta.values[key] * scale.get(key, 1.0)
        for key in ("period", "length_x", "length_y", "drift_x", "drift_y")
        if key in meta.values
    }
    flat = meta.lattice.dimensions == 1
    lattice: dict[str, Any] = {"nt": field.shape[0], "nx": field.shape[2]}
    if not flat:
        lattice |= {"ny": field.shape[1], "order_y": meta.lattice.order_y}
    lattice |= {"order_t": meta.lattice.order_t, "order_x": meta.lattice.order_x}
    job = {
        "law": {"name": meta.law},
        "box": box,
        "lattice": lattice,
        "start": {"kind": "array", "file": "start.npy"},
        "solve": {"residual_rms": 1e-10, "preconditioner": "coarse"},
        "output": {"picture": False},
    }
    (path / "job.toml").write_text(tomli_w.dumps(job))
    return path / "job.toml"


def _three(text: str) -> list[int]:
    numbers = [int(n) for n in text.split(",")]
    return numbers if len(numbers) == 3 else [numbers[0], 1, numbers[1]]


def main() -> int:
    """Write the job, solve it, keep what it took."""
    from scaling.record import describe

    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("state")
    parser.add_argument("--repeat", required=True)
    parser.add_argument("--nodes", required=True)
    parser.add_argument("--ranks", type=int, default=2)
    parser.add_argument("--out", default="runs/large")
    parser.add_argument("--set", action="append", default=[], metavar="KEY=VALUE")
    parser.add_argument("--json", default="scaling/results/large.json")
    options = parser.parse_args()
    folder = Path(options.out)
    job = write_job(folder, options)
    command = [sys.executable, "-m", "lattice", "solve", str(job), "--ranks", str(options.ranks)]
    command += ["--out", str(folder / "run"), "--force"]
    for pair in options.set:
        command += ["--set", pair]
    code = subprocess.run(command, check=False).returncode
    summary = json.loads((folder / "run" / "summary.json").read_text())
    path = Path(options.json)
    path.parent.mkdir(parents=True, exist_ok=True)
    record = {"machine": describe(), "state": options.state, "repeat": options.repeat, "summary": summary}
    path.write_text(json.dumps(record, indent=1) + "\n")
    return code


if __name__ == "__main__":
    sys.exit(main())
