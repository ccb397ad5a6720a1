"""Linear iterations of the two-level preconditioner against area and refinement.

Counts, which do not depend on the machine's load. Run `python -m scaling.flatness [--quick] [--out FILE]`,
on several ranks under mpiexec.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

from lattice.environment import prepare

prepare()

CASES: tuple[dict[str, Any], ...] = (
    *(
        {
            "series": "film 1D, area",
            "law": "kuramoto-sivashinsky",
            "length": s,
            "period": s,
            "dx": 0.5,
            "dt": 0.35,
            "rtol": 1e-4,
        }
        for s in (50.0, 100.0, 200.0, 400.0)
    ),
    *(
        {
            "series": "film 1D, refinement",
            "law": "kuramoto-sivashinsky",
            "length": 50.0,
            "period": 50.0,
            "dx": 0.5 / r,
            "dt": 0.35 / r,
            "rtol": 1e-4,
            "coarse": {"nt": 72, "nx": 50},
        }
        for r in (1, 2, 4)
    ),
    *(
        {
            "series": "film 2D, area",
            "law": "film-2d",
            "length": s,
            "period": t,
            "dx": 0.5,
            "dt": 0.35,
            "rtol": 1e-4,
            "coarse": {"order": 4, "nt": round(t / 1.4) * 2, "nx": round(s / 2) * 2, "ny": round(s / 2) * 2},
        }
        for s, t in ((10.0, 15.0), (20.0, 15.0))
    ),
    *(
        {
            "series": "film 2D, refinement",
            "law": "film-2d",
            "length": 10.0,
            "period": 10.0,
            "dx": 0.5 / r,
            "dt": 0.35 / r,
            "rtol": 1e-4,
            "coarse": {"order": 4, "nt": 14, "nx": 10, "ny": 10},
        }
        for r in (1, 2)
    ),
    *(
        {
            "series": "Ginzburg-Landau 1D, area",
            "law": "ginzburg-landau",
            "length": s,
            "period": s / 2,
            "dx": 0.5,
            "dt": 0.15,
            "rtol": 1e-4,
            "parameters": {"b": 2.0, "c": -1.5},
        }
        for s in (40.0, 80.0, 160.0)
    ),
    *(
        {
            "series": "Kolmogorov flow, Re = 40, slabs",
            "law": "kolmogorov",
            "length": 6.283185307179586,
            "period": t,
            "dx": 0.19634954084936207,
            "dt": 0.125,
            "rtol": 1e-6,
            "parameters": {"Re": 40.0},
            "spin_up": 40.0,
            "coarse": {"nt": round(t / 0.25), "nx": 16, "ny": 16, "slabs": n},
        }
        for t, n in ((4.0, 4), (4.0, 8))
    ),
)


def run_case(case: dict[str, Any], comm: Any) -> dict[str, Any]:
    """Solve one case and return its row."""
    from lattice.solve.coarse import TwoLevel
    from scaling.linear import newton_step, solve_options
    from scaling.windows import window_system

    names = ("length", "period", "dx", "dt")
    system, x = window_system(
        str(case["law"]),
        *(float(case[n]) for n in names),
        comm,
        spin_up=float(case.get("spin_up", 100.0)),
        parameters=case.get("parameters"),
    )
    said: list[str] = []
    made = TwoLevel(system, solve_options(**case.get("coarse", {})), said.append)
    result = newton_step(system, x, made, float(case["rtol"]))
    row = {
        **case,
        "unknowns": x.getSize(),
        "nodes": list(system.lattice.shape),
        "chosen": said,
        "coarse_nodes": list(made.coarse.lattice.shape),
        "iterations": result.iterations,
        "converged": result.converged,
        "set_up_seconds": result.set_up,
        "solve_seconds": result.solve,
    }
    made.destroy()
    x.destroy()
    system.destroy()
    return row


def _print(row: dict[str, Any]) -> None:
    mark = "" if row["converged"] else "  NOT CONVERGED"
    fine, coarse = ("x".join(map(str, row[key])) for key in ("nodes", "coarse_nodes"))
    print(
        f"{row['series']:34} {row['unknowns']:>9} unknowns  {fine:>13} on {coarse:>12}:"
        f" {row['iterations']:>4} iterations{mark}",
        flush=True,
    )


def main() -> int:
    """Run all cases, print a table and write JSON."""
    from mpi4py import MPI

    from lattice.solve.petsc import start_petsc
    from scaling.record import describe

    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="only cases of up to 100 000 unknowns")
    parser.add_argument("--only", default="", help="only series whose name has this text")
    parser.add_argument("--out", default="scaling/results/flatness.json")
    options = parser.parse_args()
    start_petsc([])
    comm, rows = MPI.COMM_WORLD, []
    for case in CASES:
        size = float(case["length"]) * float(case["period"]) / float(case["dx"]) / float(case["dt"])
        if options.only not in str(case["series"]) or (options.quick and size > 60_000):
            continue
        row = run_case(case, comm)
        rows.append(row)
        if comm.rank == 0:
            _print(row)
    if comm.rank == 0:
        path = Path(options.out)
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(
            json.dumps({"machine": describe(), "ranks": comm.size, "rows": rows}, indent=1) + "\n"
        )
    return 0


if __name__ == "__main__":
    sys.exit(main())
