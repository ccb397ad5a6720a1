"""Are the bands of a certificate honest? Over many states, how often they hold what refinement brings.

    python -m scaling.bands [--quick] [--out FILE]

Every state is solved on a coarse lattice and on four refined ones (factor 1.4 each). Counted is, over all
observables of all states, how often the value on the twice-refined lattice (and on the finest) lies in the
band that the coarse lattice got from the correction to first order alone, from one refinement, and, the
finest only, from two. A value that does not change beyond rounding counts for none. States that a
certificate refuses on the coarse lattice are told apart: their bands are not to be used.
"""

from __future__ import annotations

import argparse
import json
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.environment import prepare

prepare()

if TYPE_CHECKING:
    from scaling.band_cases import Case

FACTOR, REFINEMENTS = 1.4, 4
WANTED = 0.9


def solve(case: Case, path: Path) -> bool:
    """Solve a case and write its state; tell whether that worked."""
    from mpi4py import MPI

    from lattice.geometry.block import Block
    from lattice.job.schema import SolveSection
    from lattice.laws.catalogue import load_law
    from lattice.solve.newton import Newton
    from lattice.solve.registry import make_preconditioner
    from lattice.solve.stop import StopFlag
    from lattice.store.statefile import write_state
    from lattice.store.statemeta import StateMeta
    from lattice.system.system import System

    law, comm = load_law(case.law), MPI.COMM_SELF
    values = {**law.defaults, "source_u": 0.0, **case.values}
    system = System(law, case.lattice, values, case.free, {}, comm)
    options = SolveSection(residual_rms=1e-11)
    newton = Newton(
        system, make_preconditioner("direct", system, options), options, StopFlag(comm), lambda step, x: None
    )
    x = system.vector()
    system.pack(case.start.copy(), {}, x)
    system.set_reference(x)
    result = newton.solve(x)
    meta = StateMeta.of_law(law, case.lattice, system.values_of(x), free=case.free, outcome="converged")
    if result.converged:
        write_state(path, system.field_of(x), Block.whole(case.lattice), meta, comm)
    newton.destroy()
    x.destroy()
    system.destroy()
    return bool(result.converged)


def measure(case: Case, folder: Path) -> dict[str, Any]:
    """Return how the bands of one state compare with what refinement brings."""
    from mpi4py import MPI

    from lattice.check.convergence import Series, band_of
    from lattice.check.run import CheckOptions, check_state
    from lattice.check.verdict import FAILED

    path = folder / "state.h5"
    row: dict[str, Any] = {"state": case.name, "nodes": list(case.lattice.shape)}
    if not solve(case, path):
        return row | {"failure": "no convergence on the coarse lattice"}
    options = CheckOptions(refinements=REFINEMENTS, factor=FACTOR, everything=True, store=False)
    quick = CheckOptions(refinements=0, store=False)
    full = check_state(path, MPI.COMM_SELF, options, _silent)
    first = check_state(path, MPI.COMM_SELF, quick, _silent)
    refused = sorted(c.name for c in first.criteria if c.result == FAILED)
    refinement = full.findings.refinement
    row["refused"] = refused
    if refinement is None or not refinement.bands:
        return row | {"failure": "lost in refinement"}
    ratios = tuple(level.ratio for level in refinement.levels)
    row["observables"] = {}
    for name, band in refinement.bands.items():
        values, noise = band.values, _noise(band.values, full.findings.scales[name])
        if max(values) - min(values) <= noise:
            continue
        one = band_of(Series(name, values[:2], ratios[:1], band.nominal, noise))
        two = band_of(Series(name, values[:3], ratios[:2], band.nominal, noise))
        correction = first.findings.bands.get(name)
        row["observables"][name] = {
            "values": list(values),
            "first order": _holds(correction, values) if correction else None,
            "one refinement": _holds(one, values),
            "two refinements": _holds(two, values),
            "extrapolated": bool(abs(two.best - values[-1]) <= two.best_half),
            "order": two.order,
        }
    return row


def _noise(values: tuple[float, ...], scale: float) -> float:
    return 1e-9 * max(scale, max(abs(v) for v in values))


def _holds(band: Any, values: tuple[float, ...]) -> dict[str, Any]:
    return {
        "half": band.half,
        "sharpness": band.half / max(abs(values[-1] - band.value), 1e-300),
        "twice refined": bool(abs(values[2] - band.value) <= band.half),
        "finest": bool(abs(values[-1] - band.value) <= band.half),
    }


def _silent(text: str) -> None:
    pass


def shares(rows: list[dict[str, Any]]) -> dict[str, dict[str, float]]:
    """Return the share of observables, and of states with all of them, that each kind of band holds."""
    found: dict[str, dict[str, float]] = {}
    for kind in ("first order", "one refinement", "two refinements"):
        for target in ("twice refined", "finest"):
            if kind == "two refinements" and target == "twice refined":
                continue  # the band was made from that very value
            states = [[o[kind][target] for o in r["observables"].values() if o[kind]] for r in rows]
            flat = [held for state in states for held in state]
            found[f"{kind}: {target}"] = {
                "observables": sum(flat) / len(flat),
                "states": sum(all(state) for state in states) / len(states),
                "count": len(flat),
                "sharpness": _median(
                    [o[kind]["sharpness"] for r in rows for o in r["observables"].values() if o[kind]]
                ),
            }
    flat = [o["extrapolated"] for r in rows for o in r["observables"].values()]
    found["extrapolated from two refinements: finest"] = {
        "observables": sum(flat) / len(flat),
        "count": len(flat),
    }
    return found


def _median(numbers: list[float]) -> float:
    import statistics

    return float(statistics.median(numbers))


def main() -> None:
    """Measure all states, print a table and write JSON."""
    from lattice.solve.petsc import start_petsc
    from scaling.band_cases import cases
    from scaling.record import describe

    parser = argparse.ArgumentParser(description=(__doc__ or "").partition("\n")[0])
    parser.add_argument("--quick", action="store_true", help="a quarter of the states")
    parser.add_argument("--out", type=Path, help="JSON file for the rows")
    options = parser.parse_args()
    start_petsc([])
    rows = []
    print(f"{'state':<38}{'nodes':>12}{'held by first order, one, two refinements':>46}")
    with tempfile.TemporaryDirectory() as folder:
        for case in cases(options.quick):
            row = measure(case, Path(folder))
            rows.append(row)
            print(_line(row), flush=True)
    solved = [row for row in rows if row.get("observables")]
    trusted = [row for row in solved if not row["refused"]]
    summary = {"all": shares(solved), "not refused": shares(trusted)} if trusted else {"all": shares(solved)}
    print(f"\n{len(rows)} states, {len(solved)} solved on all lattices, {len(trusted)} not refused")
    for name, share in (summary.get("not refused") or summary["all"]).items():
        sharp = f", median width {share['sharpness']:.1f} errors" if "sharpness" in share else ""
        mark = "" if share["observables"] >= WANTED else f"   below {WANTED:g}"
        whole = f", all of a state {share['states']:.0%}" if "states" in share else ""
        print(f"  {name:<48}{share['observables']:.1%} of {share['count']:.0f}{whole}{sharp}{mark}")
    if options.out:
        record = {"machine": describe(), "factor": FACTOR, "rows": rows, "summary": summary}
        options.out.write_text(json.dumps(record, indent=1))


def _line(row: dict[str, Any]) -> str:
    nodes = " x ".join(str(n) for n in row["nodes"] if n > 1)
    text = f"{row['state']:<38}{nodes:>12}"
    if "failure" in row:
        return f"{text}  {row['failure']}"
    counts = []
    for kind in ("first order", "one refinement", "two refinements"):
        held = [o[kind]["finest"] for o in row["observables"].values() if o[kind]]
        counts.append(f"{sum(held)}/{len(held)}")
    refused = f"   refused: {', '.join(row['refused'])}" if row["refused"] else ""
    return f"{text}{'   '.join(counts):>30}{refused}"


if __name__ == "__main__":
    main()
