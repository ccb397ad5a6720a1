"""One Newton step to the same linear tolerance by different linear solvers, each in its own process.

    python -m scaling.compare [--sizes 1d-230k,2d-70k,...] [--methods coarse,direct,...] [--out FILE]

Every process marches the same window first (not counted), then measures the set-up and the solve of
J d = R to relative 1e-4, and its peak memory. Failures are rows like the others.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

from lattice.environment import prepare

prepare()

SIZES: dict[str, dict[str, Any]] = {
    "1d-14k": {"law": "kuramoto-sivashinsky", "length": 50.0, "period": 50.0, "dx": 0.5, "dt": 0.35},
    "1d-230k": {"law": "kuramoto-sivashinsky", "length": 200.0, "period": 200.0, "dx": 0.5, "dt": 0.35},
    "1d-520k": {"law": "kuramoto-sivashinsky", "length": 300.0, "period": 300.0, "dx": 0.5, "dt": 0.35},
    "2d-70k": {"law": "film-2d", "length": 20.0, "period": 15.0, "dx": 0.5, "dt": 0.35},
    "2d-400k": {"law": "film-2d", "length": 40.0, "period": 20.0, "dx": 0.5, "dt": 0.35},
}
COARSE: dict[str, dict[str, Any]] = {
    "2d-70k": {"order": 4, "nt": 22, "nx": 20, "ny": 20},
    "2d-400k": {"order": 4, "nt": 28, "nx": 40, "ny": 40},
}
METHODS = ("coarse", "direct", "asm", "bjacobi", "newton_krylov")
RTOL, MOST = 1e-4, 300


def measure(size: str, method: str) -> dict[str, Any]:
    """Measure one method in this process."""
    from mpi4py import MPI

    from lattice.solve.petsc import start_petsc
    from scaling.windows import window_system

    start_petsc([])
    case = SIZES[size]
    names = ("length", "period", "dx", "dt")
    system, x = window_system(case["law"], *(case[n] for n in names), MPI.COMM_WORLD)
    before = _peak_mb()
    scipy = method == "newton_krylov"
    row = _scipy_step(system, x) if scipy else _petsc_step(size, method, system, x)
    return {
        "size": size,
        "method": method,
        "unknowns": x.getSize(),
        "nodes": list(system.lattice.shape),
        **row,
        "memory_before_mb": before,
        "peak_memory_mb": _peak_mb(),
    }


def _petsc_step(size: str, method: str, system: Any, x: Any) -> dict[str, Any]:
    from lattice.errors import LatticeError
    from lattice.solve.bordering import Bordering
    from lattice.solve.registry import make_preconditioner
    from scaling.linear import Stock, newton_step, solve_options

    options = solve_options(**COARSE.get(size, {}))
    if method in ("asm", "bjacobi"):
        made: Any = Bordering(system, Stock(system, method))
    else:
        made = make_preconditioner(method, system, options)
    newton_step_result = None
    try:
        for _ in range(2):  # the first pays for compiling; the second is counted
            newton_step_result = newton_step(system, x, made, RTOL, MOST)
    except LatticeError as error:
        return {"converged": False, "why": str(error)}
    result = newton_step_result
    assert result is not None
    why = "" if result.converged else f"not at {RTOL:g} after {result.iterations} iterations"
    return {
        "converged": result.converged,
        "why": why,
        "iterations": result.iterations,
        "set_up_seconds": result.set_up,
        "solve_seconds": result.solve,
        "seconds": result.set_up + result.solve,
    }


def _scipy_step(system: Any, x: Any) -> dict[str, Any]:
    """One outer step of SciPy's newton_krylov (LGMRES, no preconditioner) on the same residual."""
    import numpy as np
    import scipy.optimize

    f, work = system.vector(), system.vector()
    calls = 0

    def residual(array: Any) -> Any:
        nonlocal calls
        calls += 1
        work.getArray()[:] = array
        system.residual(work, f)
        return f.getArray(readonly=1).copy()

    start = x.getArray(readonly=1).copy()
    began = time.perf_counter()
    found = start
    try:
        scipy.optimize.newton_krylov(
            residual,
            start,
            iter=1,
            inner_rtol=RTOL,
            inner_maxiter=MOST,
            line_search=None,
            f_tol=1e-12,
            callback=lambda u, r: None,
        )
    except scipy.optimize.NoConvergence as error:
        found = np.asarray(error.args[0])
    except ValueError as error:
        return {"converged": False, "why": f"SciPy: {error}", "residual_calls": calls}
    seconds = time.perf_counter() - began
    left = _linear_residual(system, x, found - start)
    reached = left <= RTOL
    return {
        "converged": reached,
        "why": "" if reached else f"the step's linear residual is {left:.1g} after {calls} residual calls",
        "residual_calls": calls,
        "linear_residual": left,
        "seconds": seconds,
    }


def _linear_residual(system: Any, x: Any, step: Any) -> float:
    """Return |R + J step| / |R| at `x`, whatever a method says of itself."""
    residual, product, vector = system.vector(), system.vector(), system.vector()
    vector.getArray()[:] = step
    system.residual(x, residual)
    system.linearise(x)
    system.tangent(vector, product)
    size = residual.norm()
    product.axpy(1.0, residual)
    return float(product.norm() / size)


def _peak_mb() -> float:
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0


def main() -> int:
    """Run every method on every size in a process of its own; print a table and write JSON."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--sizes", default="1d-230k,2d-70k")
    parser.add_argument("--methods", default=",".join(METHODS))
    parser.add_argument("--limit", type=float, default=900.0, help="seconds for one process")
    parser.add_argument("--out", default="scaling/results/compare.json")
    parser.add_argument("--one", nargs=2, metavar=("SIZE", "METHOD"), help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.one:
        print(json.dumps(measure(*options.one)))
        return 0
    from scaling.record import describe

    rows = []
    for size in options.sizes.split(","):
        for method in options.methods.split(","):
            rows.append(_child(size, method, options.limit))
            _print(rows[-1])
    path = Path(options.out)
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps({"machine": describe(), "rows": rows}, indent=1) + "\n")
    return 0


def _child(size: str, method: str, limit: float) -> dict[str, Any]:
    command = [sys.executable, "-m", "scaling.compare", "--one", size, method]
    failed = {"size": size, "method": method, "converged": False}
    try:
        done = subprocess.run(command, capture_output=True, text=True, timeout=limit, env=dict(os.environ))
    except subprocess.TimeoutExpired:
        return {**failed, "why": f"not done after {limit:g} s"}
    if done.returncode:
        return {**failed, "why": f"exit code {done.returncode}: {done.stderr.strip().splitlines()[-1:]}"}
    row: dict[str, Any] = json.loads(done.stdout.strip().splitlines()[-1])
    return row


def _print(row: dict[str, Any]) -> None:
    seconds = f"{row['seconds']:8.1f} s" if "seconds" in row else "       - s"
    memory = f"{row['peak_memory_mb']:8.0f} MB" if "peak_memory_mb" in row else "       - MB"
    counts = row.get("iterations", row.get("residual_calls", "-"))
    state = "reached" if row["converged"] else f"FAILED: {row['why']}"
    print(f"{row['size']:8} {row['method']:14} {seconds} {memory}  {counts!s:>5}  {state}", flush=True)


if __name__ == "__main__":
    sys.exit(main())
