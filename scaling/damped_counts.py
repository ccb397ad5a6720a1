"""Conjugate gradient iterations of one damped step against area, for both preconditioners.

The law is linearised about a window of its own marched turbulence. Counts do not depend on the machine's
load. Run `python -m scaling.damped_counts [--sizes 50,100,200]`, on several ranks under mpiexec.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

from lattice.environment import prepare

prepare()

RTOL = 1e-2
SPECTRAL = (1.0, 0.1, 0.01, 1e-3)
INVERSE = (0.01, 1e-3, 1e-4, 1e-5, 1e-6)
"""Damping as a share of the size of J^T J."""
MOST = 600


def run_size(size: float, options: argparse.Namespace, comm: Any) -> list[dict[str, Any]]:
    """Return a row for every preconditioner and damping on a box of a size."""
    from lattice.job.schema import SolveSection
    from lattice.solve.normal import NormalEquations
    from lattice.solve.normal_inverse import InverseNormal
    from lattice.solve.normal_spectral import SpectralNormal
    from lattice.solve.registry import make_preconditioner
    from scaling.windows import window_system

    system, x = window_system(options.law, size, size, options.dx, options.dt, comm, spin_up=100.0)
    residual, right, step = system.vector(), system.vector(), system.vector()
    system.residual(x, residual)
    equations = NormalEquations(system, lambda: False)
    equations.gradient(residual, right)
    spectral = SpectralNormal(system)
    spectral.update(1.0)
    made = make_preconditioner("coarse", system, SolveSection(), lambda text: None)
    inverse = InverseNormal(system, made)
    rows = []
    for name, helping, shares in (("spectral", spectral, SPECTRAL), ("inverse", inverse, INVERSE)):
        helping.update(shares[-1] * spectral.scale)
        for share in shares:
            helping.damp(share * spectral.scale)
            solved = equations.solve(right, share * spectral.scale, helping, RTOL, MOST, step)
            rows.append(
                {
                    "size": size,
                    "nodes": list(system.lattice.shape),
                    "unknowns": x.getSize(),
                    "preconditioner": name,
                    "damping_share": share,
                    "damping": share * spectral.scale,
                    "iterations": solved.iterations,
                    "reduction": solved.reduction,
                }
            )
    for item in (equations, spectral, inverse, residual, right, step, x, system):
        item.destroy()
    return rows


def main() -> int:
    """Run all sizes, print a table and write JSON."""
    from mpi4py import MPI

    from lattice.solve.petsc import start_petsc
    from scaling.record import describe

    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--law", default="kuramoto-sivashinsky")
    parser.add_argument("--sizes", default="50,100,200", help="length and period of the boxes")
    parser.add_argument("--dx", type=float, default=0.5)
    parser.add_argument("--dt", type=float, default=0.35)
    parser.add_argument("--out", default="scaling/results/damped_counts.json")
    options = parser.parse_args()
    start_petsc([])
    comm, rows = MPI.COMM_WORLD, []
    for size in map(float, options.sizes.split(",")):
        rows += run_size(size, options, comm)
        if comm.rank == 0:
            print(_line([row for row in rows if row["size"] == size]), flush=True)
    if comm.rank == 0:
        print(f"largest quotient over the sizes at one damping: {_spread(rows):.2f}")
        path = Path(options.out)
        path.parent.mkdir(parents=True, exist_ok=True)
        content = {"machine": describe(), "ranks": comm.size, "rtol": RTOL, "rows": rows}
        path.write_text(json.dumps(content, indent=1) + "\n", encoding="utf-8")
    return 0


def _line(rows: list[dict[str, Any]]) -> str:
    parts = []
    for name in ("spectral", "inverse"):
        counts = [f"{r['damping_share']:g}: {r['iterations']}" for r in rows if r["preconditioner"] == name]
        parts.append(f"{name} {', '.join(counts)}")
    return f"{rows[0]['size']:g} x {rows[0]['size']:g}, {rows[0]['unknowns']} unknowns: {'; '.join(parts)}"


def _spread(rows: list[dict[str, Any]]) -> float:
    """Return the largest quotient of counts at one damping and preconditioner, over the sizes."""
    quotients = []
    for key in {(r["preconditioner"], r["damping_share"]) for r in rows}:
        counts = [r["iterations"] for r in rows if (r["preconditioner"], r["damping_share"]) == key]
        quotients.append(max(counts) / min(counts))
    return float(max(quotients))


if __name__ == "__main__":
    sys.exit(main())
