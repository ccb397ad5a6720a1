"""One Newton step, the loops and the smoother of one box on one rank and on more: strong efficiency.

    python -m scaling.efficiency [--cases 1d,2d] [--ranks 1,2] [--rounds 3] [--out FILE]

The rank counts take turns, round after round, so that a machine's other work falls on all of them. A Newton
step here is the linearisation, the set-up of the two-level preconditioner and J d = R to relative 1e-8; the
first of a process, which compiles, is not counted. Efficiency = seconds on the fewest ranks / (ratio of ranks
x seconds), of the shortest times.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

from lattice.environment import prepare

prepare()

CASES: dict[str, dict[str, Any]] = {
    "1d": {"law": "kuramoto-sivashinsky", "length": 400.0, "period": 200.0, "dx": 0.5, "dt": 0.35},
    "2d": {"law": "film-2d", "length": 30.0, "period": 17.0, "dx": 0.5, "dt": 0.35, "coarse": {"order": 4}},
    "1d-small": {"law": "kuramoto-sivashinsky", "length": 50.0, "period": 50.0, "dx": 0.5, "dt": 0.35},
}
RTOL, TURNS = 1e-8, 20
PHASES = ("step", "set_up", "solve", "residual", "tangent", "smoother")


def measure(case: dict[str, Any], comm: Any) -> dict[str, Any]:
    """Measure one case on the ranks of a communicator; times are those of the slowest rank."""
    from mpi4py import MPI

    from lattice.solve.coarse import TwoLevel
    from lattice.solve.smoothers import SpectralSmoother
    from scaling.linear import newton_step, solve_options
    from scaling.windows import window_system

    names = ("length", "period", "dx", "dt")
    system, x = window_system(case["law"], *(case[n] for n in names), comm)
    made = TwoLevel(system, solve_options(**case.get("coarse", {})), lambda line: None)
    newton_step(system, x, made, 1e-1)
    comm.Barrier()
    result = newton_step(system, x, made, RTOL)
    r, y = system.vector(), system.vector()
    field, out = system.blocks.vector(), system.blocks.vector()
    field.setRandom()
    smoother = SpectralSmoother(made.transform, made.constant, 1.0)
    smoother.update()
    seconds = {
        "set_up": result.set_up,
        "solve": result.solve,
        "residual": _best(lambda: system.residual(x, r), comm),
        "tangent": _best(lambda: system.tangent(r, y), comm),
        "smoother": _best(lambda: smoother.apply(field, out), comm),
    }
    seconds["step"] = seconds["set_up"] + seconds["solve"]
    return {
        "ranks": comm.size,
        "unknowns": x.getSize(),
        "iterations": result.iterations,
        "converged": result.converged,
        "seconds": {name: float(comm.allreduce(s, op=MPI.MAX)) for name, s in seconds.items()},
    }


def _best(action: Any, comm: Any) -> float:
    """Return this rank's shortest time of an action that all ranks begin together, its first call dropped."""
    action()
    times = []
    for _ in range(TURNS):
        comm.Barrier()
        began = time.perf_counter()
        action()
        times.append(time.perf_counter() - began)
    return min(times)


def main() -> int:
    """Run the rounds, print efficiencies and write JSON."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--cases", default="1d,2d")
    parser.add_argument("--ranks", default="1,2")
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--out", default="scaling/results/efficiency.json")
    parser.add_argument("--one", help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.one:
        return _child(options.one)
    from scaling.record import describe

    counts = [int(n) for n in options.ranks.split(",")]
    rows = []
    for name in options.cases.split(","):
        for _ in range(options.rounds):
            rows.extend(_launch(name, ranks) for ranks in counts)
        _print(name, [row for row in rows if row["case"] == name], counts)
    path = Path(options.out)
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps({"machine": describe(), "rtol": RTOL, "rows": rows}, indent=1) + "\n")
    return 0


def _child(name: str) -> int:
    from mpi4py import MPI

    from lattice.solve.petsc import start_petsc

    start_petsc([])
    row = measure(CASES[name], MPI.COMM_WORLD)
    if MPI.COMM_WORLD.rank == 0:
        print(json.dumps(row))
    return 0


def _launch(name: str, ranks: int) -> dict[str, Any]:
    from lattice.cli.launch import find_launcher, launch_command

    program = [sys.executable, "-m", "scaling.efficiency", "--one", name]
    done = subprocess.run(
        launch_command(find_launcher(), ranks, program), capture_output=True, text=True, check=True
    )
    return {"case": name, **json.loads(done.stdout.strip().splitlines()[-1])}


def _print(name: str, rows: list[dict[str, Any]], counts: list[int]) -> None:
    least = {
        n: {phase: min(r["seconds"][phase] for r in rows if r["ranks"] == n) for phase in PHASES}
        for n in counts
    }
    iterations = {n: next(r["iterations"] for r in rows if r["ranks"] == n) for n in counts}
    print(f"{name}: {rows[0]['unknowns']} unknowns, linear iterations {iterations}")
    for phase in PHASES:
        work = least[counts[0]][phase] * counts[0]
        parts = [f"{n} rank(s) {least[n][phase]:9.4f} s ({work / (n * least[n][phase]):.2f})" for n in counts]
        print(f"  {phase:9} {'   '.join(parts)}", flush=True)


if __name__ == "__main__":
    sys.exit(main())
