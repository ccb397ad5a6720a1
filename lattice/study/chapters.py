"""The chapters of one study: question, set-up, results, counts, memory."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from lattice.report.document import Caution, Chapter, Commands, Part, Table, Text
from lattice.study import figures
from lattice.study.extrapolate import Prediction
from lattice.study.fits import Fit, fit_amdahl, fit_gustafson
from lattice.study.metrics import LINE, Row, Standing, groups, is_sound, seconds_of, standings
from lattice.study.model import phase_seconds
from lattice.study.schema import KINDS

if TYPE_CHECKING:
    from lattice.study.reader import Study

NONE = ""


def study_chapters(study: Study, rows: Sequence[Row], predicted: Sequence[Prediction]) -> list[Chapter]:
    """Return the chapters of one study from its rows."""
    points = standings(rows)
    charts = [
        figures.efficiency_figure(study.name, points, predicted),
        figures.phases_figure(study.name, points),
        figures.iterations_figure(study.name, points),
        figures.counts_figure(study.name, points),
        figures.memory_figure(study.name, points),
    ]
    found: list[Part] = [Text(study.section.question), Text(set_up(study, rows)), results_table(points)]
    if any(p.oversubscribed for p in points):
        found.append(Text(OVERSUBSCRIBED))
    found += [part for part in (charts[0], *fit_parts(rows, points)) if part is not None]
    parts: list[Part] = [phases_table(points)]
    parts += [chart for chart in charts[1:2] if chart is not None]
    pops = pop_table(points)
    parts += [pops] if pops else []
    counts: list[Part] = [chart for chart in charts[2:4] if chart is not None]
    table = counts_table(points)
    counts += [table] if table else []
    memory: list[Part] = [memory_table(points), *([charts[4]] if charts[4] is not None else [])]
    return [
        Chapter(study.title, tuple(found)),
        Chapter("Where the time goes", tuple(parts), 3),
        *([Chapter("Iterations and messages", tuple(counts), 3)] if counts else []),
        Chapter("Memory", tuple(memory), 3),
        Chapter("Commands", (Commands((str(rows[-1]["command"]),)),), 3),
    ]


OVERSUBSCRIBED = (
    "Rows in italics shared cores: more ranks than cores, or other work at the same time (load). Their counts"
    " (iterations, messages, bytes, operations, memory) are exact and used; their times are shown for"
    " completeness and enter no efficiency."
)


def set_up(study: Study, rows: Sequence[Row]) -> str:
    """Return what was measured, in sentences."""
    row, section = rows[0], study.section
    what = {
        "steps": f"{section.newton_steps} Newton step(s) from the job's start",
        "solve": "a whole solve by Newton's method from the job's start",
        "kernels": "residual, tangent, halo and transforms alone",
        "files": "writing a state and reading it back",
    }[section.measure]
    lattice = " x ".join(str(row["lattice"][n]) for n in ("nt", "ny", "nx") if n in row["lattice"])
    rtol = row.get("linear_rtol")
    return (
        f"Kind: {section.kind}, {KINDS[section.kind]}. Law `{row['law']}`, smallest lattice {lattice} nodes,"
        f" {row['unknowns']} unknowns, preconditioner `{row['preconditioner']}`"
        + (f", linear solves to a relative {rtol:g}" if rtol else "")
        + f". Measured: {what}; {len(groups(rows)[0])} repeats after {section.warm_ups} warm-up(s), of which"
        " the shortest and the median of the slowest rank's wall time are shown."
    )


def number(value: float | None, digits: int = 3) -> str:
    """Return a number as it stands in tables, empty for None."""
    return NONE if value is None else f"{value:.{digits}g}"


def results_table(points: Sequence[Standing]) -> Table:
    """Return times, speed-up, efficiency, serial fraction."""
    weak = points[0].row["kind"].startswith("weak")
    header = ["ranks", "nodes t, (y,) x", "unknowns", "s, shortest", "s, median", "iterations", "speed-up",
              "efficiency", "per iteration", "Karp-Flatt", "load"]  # fmt: skip
    rows = []
    for p in points:
        lattice = p.row["lattice"]
        shape = " x ".join(str(lattice[n]) for n in ("nt", "ny", "nx") if n in lattice)
        rows.append(
            [str(p.ranks), shape, str(p.row["unknowns"]), f"{p.best:.3f}", f"{p.middle:.3f}",
             str(p.row.get("iterations", NONE)), number(p.speed_up), number(p.efficiency),
             number(p.per_iteration), number(p.karp_flatt, 2),
             f"{p.row['load_average']:.1f}"]
        )  # fmt: skip
    kind = "Weak scaling" if weak else "Scaling"
    caption = f"{kind}: times and metrics; `load` is the machine's one-minute average when the point ended"
    return Table(caption, header, rows, _crowded(points))


def _crowded(points: Sequence[Standing]) -> frozenset[int]:
    return frozenset(k for k, p in enumerate(points) if p.oversubscribed)


def fit_parts(rows: Sequence[Row], points: Sequence[Standing]) -> list[Part]:
    """Return what Amdahl's or Gustafson's law says of the points that are not oversubscribed."""
    sound = [row for row in rows if is_sound(row)]
    if len({row["ranks"] for row in sound}) < 2 or sound[0]["kind"] == "refinement":
        return []
    counts = sorted({row["ranks"] for row in sound})
    if sound[0]["kind"] == "strong":
        fit = fit_amdahl([row["ranks"] for row in sound], [seconds_of(row) for row in sound])
        name = "Amdahl's law, T(p) = T(1) (f + (1 - f)/p)"
    else:
        best = min(seconds_of(row) for row in sound if row["ranks"] == counts[0])
        scaled = [row["growth"] * best / seconds_of(row) for row in sound]
        fit = fit_gustafson([row["ranks"] for row in sound], scaled)
        name = "Gustafson's law, S(p) = p + (1 - p) f"
    if fit is None:
        return []
    return [Text(_fit_text(name, fit, counts))]


def _fit_text(name: str, fit: Fit, counts: Sequence[int]) -> str:
    band = ", no band: too few repeats"
    if math.isfinite(fit.low):
        band = f", 95 % band {fit.low:.3f} to {fit.high:.3f}"
    where = ", ".join(str(n) for n in counts)
    text = f"{name}: serial fraction f = {fit.serial:.3f}{band}, from {fit.samples} repeats on {where} ranks."
    if len(counts) == 2:
        text += " Two rank counts fix the curve whatever the law: this is no test of it."
    return text


def phases_table(points: Sequence[Standing]) -> Table:
    """Return the seconds of every phase, and the bandwidth and rate that the loops achieve."""
    tables = [phase_seconds(p.row) for p in points]
    names = list(dict.fromkeys(name for table in tables for name in table))
    header = ["ranks", *names, "loops GB/s", "LU Gflop/s"]
    rows = [
        [
            str(p.ranks),
            *(f"{t.get(n, 0.0):.3f}" for n in names),
            number(loop_bandwidth(p.row)),
            number(lu_rate(p.row)),
        ]
        for p, t in zip(points, tables, strict=True)
    ]
    caption = (
        "Seconds by phase, of its slowest rank; phases are disjoint. Bandwidth of the loops: one read of each"
        " field taken, one write of the result, all ranks together; LU rate: operations by MUMPS's count over"
        " the seconds of its factorisation"
    )
    return Table(caption, header, rows, _crowded(points))


def loop_bandwidth(row: Row) -> float | None:
    """Return the bytes per second that residual and tangent move on all ranks together, in GB/s."""
    moved = seconds = 0.0
    for name, passes in (("residual", 2), ("tangent", 3), ("adjoint", 3)):
        if name in row["seconds"]:
            moved += row["calls"].get(name, 0) * passes * 8.0 * row["unknowns"]
            seconds += row["seconds"][name]["max"]
    return moved / seconds / 1e9 if seconds > 0.0 else None


def lu_rate(row: Row) -> float | None:
    """Return the operations per second of the LU factorisation, in Gflop/s."""
    lu, event = row.get("lu"), row["petsc"].get("MatLUFactorNum")
    if not lu or not event or event["time"]["max"] <= 0.0:
        return None
    return float(lu["flops"] * max(1.0, event["count"]["max"]) / event["time"]["max"] / 1e9)


def pop_table(points: Sequence[Standing]) -> Table | None:
    """Return the POP hierarchy of the points that are not oversubscribed."""
    told = [p for p in points if p.pop is not None]
    if not told:
        return None
    header = ["ranks", "global efficiency", "parallel efficiency", "load balance", "communication efficiency",
              "computation scaling"]  # fmt: skip
    rows = []
    for p in told:
        assert p.pop is not None
        numbers = (
            p.pop.whole,
            p.pop.parallel,
            p.pop.load_balance,
            p.pop.communication,
            p.pop.computation_scaling,
        )
        rows.append([str(p.ranks), *(f"{n:.2f}" for n in numbers)])
    caption = (
        "POP efficiencies: global = parallel x computation scaling; parallel = load balance x communication"
        f" efficiency. From {LINE} on a value is usually held to be good (common practice)"
    )
    return Table(caption, header, rows)


def counts_table(points: Sequence[Standing]) -> Table | None:
    """Return what the busiest rank says to others."""
    if not any("messages" in p.row for p in points):
        return None
    header = ["ranks", "messages halo", "each exchange", "FFT", "each transform", "coarse", "all", "MB sent",
              "reductions", "LU entries", "share of the fullest rank"]  # fmt: skip
    rows = []
    for p in points:
        row = p.row
        if "messages" not in row:
            continue
        each = {name: s["max"] for name, s in row["messages"].items()}
        coarse = each.get("coarse set-up", 0.0) + each.get("coarse solve", 0.0)
        lu: dict[str, Any] = row.get("lu") or {}
        share = lu["own_entries"]["max"] / lu["entries"] if lu else None
        rows.append(
            [str(p.ranks), f"{each.get('halo', 0.0):.0f}", _per_call(row, "halo"),
             f"{each.get('FFT', 0.0):.0f}", _per_call(row, "FFT"), f"{coarse:.0f}", f"{each['whole']:.0f}",
             f"{row['bytes']['whole']['max'] / 1e6:.1f}",
             f"{row['reductions']['whole']['max']:.0f}", number(lu.get("entries")), number(share)]
        )  # fmt: skip
    caption = (
        "Counts of the busiest rank in one repeat, those of the LU package included. Messages of halo are"
        " constant in the rank count once every axis is shared; those of transforms and LU are not"
    )
    return Table(caption, header, rows, _crowded(points))


def _per_call(row: Row, phase: str) -> str:
    """Return the messages of one call of a phase on the busiest rank."""
    sent = row["messages"].get(phase, {"max": 0.0})["max"]
    return f"{sent / max(1, row['calls'].get(phase, 0)):.1f}"


def memory_table(points: Sequence[Standing]) -> Table:
    """Return memory per rank against an even share of the first point's."""
    header = [
        "ranks",
        "program MB",
        "peak MB, fullest rank",
        "beyond program",
        "even share of the first",
        "ratio",
    ]
    first = points[0]
    base = figures.own_memory(first.row)
    rows = []
    for p in points:
        memory = p.row["memory_mb"]
        own = figures.own_memory(p.row)
        share = base * (p.row["unknowns"] / first.row["unknowns"]) * first.ranks / p.ranks
        numbers = (memory["left"]["max"], memory["peak"]["max"], own, share)
        rows.append([str(p.ranks), *(f"{n:.0f}" for n in numbers), f"{own / share:.2f}"])
    caption = (
        "Largest resident memory per rank; `program` is what a rank still holds once every field and factor"
        " is freed: libraries and compiled loops"
    )
    return Table(caption, header, rows, _crowded(points))


def caution_of(rows: Sequence[Row]) -> Caution:
    """Return what machine the times are from, and what they cannot say."""
    cores = max(row["cores"] for row in rows)
    busiest = max(float(row["load_average"]) for row in rows)
    return Caution(
        f"{cores} cores were available. Times on more ranks than that are of ranks that share cores; no"
        f" efficiency is claimed from them. Its load was up to {busiest:.1f} when points ended,"
        " these ranks included: where it is above the ranks of a point, other work shared its cores, and its"
        " times are too long."
    )
