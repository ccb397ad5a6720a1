"""The classical alternative on the same states: single and multiple shooting through the project's marcher.

    python -m scaling.shoot STATE.h5 [STATE.h5 ...] [--out FILE]

Each stored time-periodic state of one space dimension is disturbed by a relative 1e-3 of smooth noise; the
lattice solver and SciPy's Krylov-based Newton (GMRES) on the shooting equations both try to bring it
back. Shooting marches each segment with the pseudo-spectral stepper and asks that it ends where the next
begins; with one segment that is single shooting.
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

NOISE, WANTED, NEWTON_STEPS, INNER = 1e-3, 1e-8, 20, 60


def disturbed(path: str) -> tuple[Any, Any]:
    """Return a stored state and its field with noise on its first wavenumbers."""
    import numpy as np

    from lattice.store.statefile import open_state

    state = open_state(path)
    generator = np.random.default_rng(7)
    spectrum = np.fft.rfftn(state.field, axes=(0, 1, 2))
    noise = generator.standard_normal(spectrum.shape) + 1j * generator.standard_normal(spectrum.shape)
    noise[8:-8] = 0.0
    noise[:, :, 12:] = 0.0
    noise[0, :, 0] = 0.0
    change = np.fft.irfftn(noise, s=state.field.shape[:3], axes=(0, 1, 2))
    return state, state.field + change * (NOISE * np.std(state.field) / np.std(change))


def by_lattice(state: Any, field: Any) -> dict[str, Any]:
    """Solve the disturbed state with the lattice solver."""
    from types import SimpleNamespace

    from mpi4py import MPI

    from lattice.laws.catalogue import read_law
    from lattice.solve.newton import Newton
    from lattice.solve.petsc import start_petsc
    from lattice.solve.registry import make_preconditioner
    from lattice.solve.stop import StopFlag
    from lattice.system.system import System
    from scaling.linear import solve_options

    start_petsc([])
    meta = state.meta
    law = read_law(meta.law, meta.text, meta.components, meta.parameters, meta.dimensions)
    free = [name for name in meta.free if not name.startswith("source_")]
    system = System(law, meta.lattice, meta.values, free, {}, MPI.COMM_SELF)
    options = solve_options()
    options.__dict__.update(
        residual_rms=1e-10,
        newton_steps=NEWTON_STEPS,
        linear_rtol=None,
        linear_iterations=300,
        line_search=True,
    )
    x = system.vector()
    system.pack(field, meta.values, x)
    began = time.perf_counter()
    system.set_reference(x)
    made = make_preconditioner("auto", system, SimpleNamespace(**options.__dict__))
    with StopFlag(MPI.COMM_SELF) as stop:
        solver = Newton(system, made, options, stop, lambda step, at: None)
        result = solver.solve(x)
    return {
        "converged": result.converged,
        "newton_steps": result.steps[-1].number,
        "residual": result.steps[-1].residual_rms,
        "seconds": time.perf_counter() - began,
    }


def by_shooting(state: Any, field: Any, segments: int) -> dict[str, Any]:
    """Solve the disturbed state by shooting over a number of segments."""
    import numpy as np
    import scipy.optimize

    from lattice.laws.catalogue import read_law
    from lattice.starts.stepper import Stepper, suggest_dt

    meta = state.meta
    law = read_law(meta.law, meta.text, meta.components, meta.parameters, meta.dimensions)
    nx, length, period = meta.lattice.nx, meta.values["length_x"], meta.values["period"]
    stepper = Stepper(law, (1, nx), (1.0, length), meta.values, 0.1)
    stepper = stepper.with_step(suggest_dt(stepper, stepper.to_spectrum(field[0])))
    marks = np.linspace(0, meta.lattice.nt, segments, endpoint=False).round().astype(int)
    starts = field[marks, 0, :, 0]
    drift = meta.values.get("drift_x", 0.0)
    waves = 2j * np.pi * np.fft.rfftfreq(nx, 1.0 / nx) / length
    u_t = (field[1, 0, :, 0] - field[-1, 0, :, 0]) / 2.0
    u_x = np.fft.irfft(waves * np.fft.rfft(starts[0]), nx)
    templates = np.stack([u_t / np.linalg.norm(u_t), u_x / np.linalg.norm(u_x)])
    scale = np.sqrt(nx)
    calls = 0

    def mismatch(unknowns: Any) -> Any:
        nonlocal calls
        calls += 1
        u = unknowns[:-2].reshape(segments, nx)
        time_, speed = period * (1.0 + unknowns[-2] / scale), drift + unknowns[-1] / scale
        span = time_ / segments
        spectra = stepper.to_spectrum(u[:, None, :, None])
        ends = stepper.to_field(stepper.advance(spectra, span))[:, 0, :, 0]
        # In the moving frame: what ends at the lab position x + speed*span begins the next segment.
        back = np.fft.irfft(np.fft.rfft(ends) * np.exp(waves * speed * span), nx)
        phases = templates @ (u[0] - starts[0])
        mean = np.zeros_like(back)
        mean[0] = u[0].mean()
        return np.concatenate([(back - np.roll(u, -1, axis=0) + mean).reshape(-1), phases])

    first = np.concatenate([starts.reshape(-1), [0.0, 0.0]])
    began, why, found = time.perf_counter(), "", first
    try:
        found = scipy.optimize.newton_krylov(
            mismatch,
            first,
            method="gmres",
            inner_maxiter=INNER,
            maxiter=NEWTON_STEPS,
            f_tol=WANTED,
            line_search="armijo",
        )
    except scipy.optimize.NoConvergence as error:
        found, why = np.asarray(error.args[0]), f"not at {WANTED:g} after {NEWTON_STEPS} Newton steps"
    except Exception as error:  # noqa: BLE001 - a march that blows up is a failure of the method, and a row
        why = f"{type(error).__name__}: {error}"
    seconds = time.perf_counter() - began
    try:
        left = float(np.abs(mismatch(found)).max())
    except Exception:  # noqa: BLE001 - as above
        left = float("nan")
    return {
        "converged": bool(left <= WANTED),
        "why": why,
        "marches": calls,
        "residual": left,
        "seconds": seconds,
    }


def main() -> int:
    """Try all states; print a table and write JSON."""
    from scaling.record import describe

    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("states", nargs="+")
    parser.add_argument("--segments", default="1,4,16")
    parser.add_argument("--out", default="scaling/results/shoot.json")
    options = parser.parse_args()
    rows: list[dict[str, Any]] = []
    for path in options.states:
        state, field = disturbed(path)
        box = {"length_x": state.meta.values["length_x"], "period": state.meta.values["period"]}
        rows.append({"method": "lattice", **box, **by_lattice(state, field)})
        _print(rows[-1])
        for segments in (int(s) for s in options.segments.split(",")):
            rows.append(
                {"method": f"shooting, {segments} segment(s)", **box, **by_shooting(state, field, segments)}
            )
            _print(rows[-1])
    target = Path(options.out)
    target.parent.mkdir(parents=True, exist_ok=True)
    target.write_text(json.dumps({"machine": describe(), "noise": NOISE, "rows": rows}, indent=1) + "\n")
    return 0


def _print(row: dict[str, Any]) -> None:
    state = "converged" if row["converged"] else f"FAILED {row.get('why', '')}"
    print(
        f"L = {row['length_x']:7.2f}  T = {row['period']:7.2f}  {row['method']:24} {row['seconds']:8.1f} s  "
        f"residual {row['residual']:.1e}  {state}",
        flush=True,
    )


if __name__ == "__main__":
    sys.exit(main())
