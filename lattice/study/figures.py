"""The charts of a study's report."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from lattice.report.document import Figure
from lattice.report.drawing import COLOURS, MARKERS, draw_chart, ranks_axis
from lattice.study.extrapolate import Prediction
from lattice.study.metrics import LINE, Row, Standing
from lattice.study.model import phase_seconds

PHASES = (
    "loops",
    "halo",
    "FFT",
    "coarse set-up",
    "transfer",
    "coarse solve",
    "orthogonalisation",
    "smoother",
)


def colour_of(phase: str) -> str:
    """Return a phase's colour, the same in every chart."""
    return COLOURS[PHASES.index(phase) % len(COLOURS)] if phase in PHASES else COLOURS[-1]


def efficiency_figure(
    name: str, points: Sequence[Standing], predicted: Sequence[Prediction]
) -> Figure | None:
    """Return efficiency against ranks with the ideal, the 0.8 line and the prediction's band."""
    sound = [p for p in points if p.efficiency is not None]
    if len(sound) < 2:
        return None
    weak = sound[0].row["kind"].startswith("weak")

    def draw(axes: Any) -> None:
        counts = sorted({p.ranks for p in sound} | {p.ranks for p in predicted})
        axes.axhline(1.0, color="#808080", linewidth=1.0)
        axes.axhline(LINE, color=COLOURS[6], linewidth=1.0, linestyle="--")
        axes.text(counts[-1], LINE, "0.8 ", ha="right", va="bottom")
        if predicted:
            ranks = [p.ranks for p in predicted]
            ends = [[_efficiency(predicted, p.ranks, t, weak) for p, t in zip(predicted, times, strict=True)]
                    for times in ([p.high for p in predicted], [p.low for p in predicted])]  # fmt: skip
            middle = [_efficiency(predicted, p.ranks, p.whole, weak) for p in predicted]
            axes.fill_between(ranks, ends[0], ends[1], color=COLOURS[1], alpha=0.2, linewidth=0)
            axes.plot(ranks, middle, color=COLOURS[1], linestyle=":", label="prediction, with band")
        axes.plot([p.ranks for p in sound], [p.efficiency for p in sound], color=COLOURS[0], marker="o",
                  label="measured")  # fmt: skip
        ranks_axis(axes, counts)
        axes.set_ylabel("weak efficiency" if weak else "strong efficiency")
        axes.set_ylim(0.0, 1.35)
        axes.legend(loc="lower left")

    told = ", ".join(f"{p.efficiency:.2f} on {p.ranks}" for p in sound)
    note = " The dotted line and its band are a prediction." if predicted else ""
    return Figure(
        f"{name}-efficiency",
        f"Efficiency of points with no more ranks than cores: {told}. Grey: ideal; dashed: 0.8.{note}",
        f"Line chart of efficiency against MPI ranks: {told}; ideal line at 1, dashed line at 0.8.{note}",
        draw_chart(f"{name}-efficiency", draw),
    )


def _efficiency(predicted: Sequence[Prediction], ranks: int, seconds: float, weak: bool) -> float:
    first = predicted[0]
    return first.whole / seconds if weak else first.whole * first.ranks / (ranks * seconds)


def phases_figure(name: str, points: Sequence[Standing]) -> Figure:
    """Return stacked bars of the shares of the phases; oversubscribed points hatched."""
    rows = [p.row for p in points]
    tables = [phase_seconds(row) for row in rows]
    names = [n for n in tables[0] if any(t.get(n, 0.0) > 0.005 * sum(t.values()) for t in tables)]
    labels = [_label(p) for p in points]

    def draw(axes: Any) -> None:
        bottom = [0.0] * len(rows)
        for phase in names:
            shares = [t.get(phase, 0.0) / sum(t.values()) for t in tables]
            axes.bar(labels, shares, bottom=bottom, label=phase, color=colour_of(phase), width=0.7,
                     hatch=["//" if p.oversubscribed else "" for p in points])  # fmt: skip
            bottom = [b + s for b, s in zip(bottom, shares, strict=True)]
        axes.set_ylabel("share of the time")
        axes.set_ylim(0.0, 1.0)
        axes.legend(loc="center left", bbox_to_anchor=(1.0, 0.5))
        axes.tick_params(axis="x", labelsize=8)

    told = "; ".join(
        f"{label}: " + ", ".join(f"{n} {100 * t.get(n, 0.0) / sum(t.values()):.0f} %" for n in names)
        for label, t in zip([x.replace("\n", " ") for x in labels], tables, strict=True)
    )
    return Figure(
        f"{name}-phases",
        "Shares of the phases, each of its slowest rank. Hatched: cores were shared; those times say nothing"
        " of a machine with a free core for every rank.",
        f"Stacked bars of the shares of the phases. {told}.",
        draw_chart(f"{name}-phases", draw),
    )


def _label(point: Standing) -> str:
    row = point.row
    if row["kind"] == "refinement":
        return f"x{row['factor']:g}\n{point.ranks} rank(s)"
    return f"{point.ranks}" + ("*" if point.oversubscribed else "")


def counts_figure(name: str, points: Sequence[Standing]) -> Figure | None:
    """Return messages of the busiest rank per linear iteration, by phase."""
    shared = [p for p in points if p.ranks > 1 and p.row.get("messages") and p.row.get("iterations")]
    if not shared:
        return None
    phases = ("halo", "FFT", "transfer", "coarse set-up", "coarse solve")
    series = {
        phase: [p.row["messages"].get(phase, {"max": 0.0})["max"] / p.row["iterations"] for p in shared]
        for phase in phases
    }
    series = {phase: numbers for phase, numbers in series.items() if max(numbers) > 0.0}
    if not series:
        return None

    def draw(axes: Any) -> None:
        for k, (phase, numbers) in enumerate(series.items()):
            axes.plot(
                [p.ranks for p in shared], numbers, color=colour_of(phase), marker=MARKERS[k], label=phase
            )
        ranks_axis(axes, [p.ranks for p in shared])
        axes.set_yscale("log", base=10)
        axes.set_ylabel("messages per iteration")
        axes.legend(loc="center left", bbox_to_anchor=(1.0, 0.5))

    told = "; ".join(f"{phase} {', '.join(f'{n:.0f}' for n in numbers)}" for phase, numbers in series.items())
    ranks = ", ".join(str(p.ranks) for p in shared)
    return Figure(
        f"{name}-messages",
        "Messages that the busiest rank sends per linear iteration, set-up included, by phase. Counts are"
        " exact on any machine, also where ranks share cores.",
        f"Line chart of messages per iteration on {ranks} ranks: {told}.",
        draw_chart(f"{name}-messages", draw),
    )


def own_memory(row: Row) -> float:
    """Return the peak memory of the fullest rank beyond the program, in MB."""
    memory = row["memory_mb"]
    return float(memory["peak"]["max"] - memory["left"]["max"])


def memory_figure(name: str, points: Sequence[Standing]) -> Figure | None:
    """Return peak memory per rank against ranks, without the program itself."""
    if len({p.ranks for p in points}) < 2:
        return None
    own = [own_memory(p.row) for p in points]
    ranks = [p.ranks for p in points]
    weak = points[0].row["kind"].startswith("weak")

    def draw(axes: Any) -> None:
        axes.plot(ranks, own, color=COLOURS[0], marker="o", label="largest rank")
        ideal = [own[0] if weak else own[0] * ranks[0] / p for p in ranks]
        axes.plot(ranks, ideal, color="#808080", linewidth=1.0, label="ideal")
        ranks_axis(axes, ranks)
        axes.set_yscale("log", base=2)
        axes.set_yticks(own, [f"{m:.0f}" for m in own])
        axes.minorticks_off()
        axes.set_ylabel("MB per rank")
        axes.legend()

    told = ", ".join(f"{m:.0f} MB on {p}" for m, p in zip(own, ranks, strict=True))
    return Figure(
        f"{name}-memory",
        f"Peak memory of the fullest rank beyond the program itself (libraries and compiled loops): {told}."
        " Exact also where ranks share cores.",
        f"Line chart of peak memory per rank: {told}.",
        draw_chart(f"{name}-memory", draw),
    )


def iterations_figure(name: str, points: Sequence[Standing]) -> Figure | None:
    """Return linear iterations per Newton step against unknowns or ranks."""
    told = [p for p in points if p.row.get("iterations") and p.row.get("newton_steps")]
    if len(told) < 2:
        return None
    strong = told[0].row["kind"] == "strong"
    across = [float(p.ranks) if strong else p.row["unknowns"] / told[0].row["unknowns"] for p in told]
    numbers = [p.row["iterations"] / p.row["newton_steps"] for p in told]

    def draw(axes: Any) -> None:
        axes.plot(across, numbers, color=COLOURS[2], marker="o")
        axes.set_xscale("log", base=2)
        axes.set_xticks(across, [f"{n:.3g}" for n in across])
        axes.minorticks_off()
        axes.set_xlabel("MPI ranks" if strong else "unknowns, over those of the first point")
        axes.set_ylabel("iterations per Newton step")
        axes.set_ylim(0.0, 1.25 * max(numbers))

    text = ", ".join(f"{n:.3g} at {x:.3g}" for n, x in zip(numbers, across, strict=True))
    growth = numbers[-1] / numbers[0]
    return Figure(
        f"{name}-iterations",
        f"Linear iterations per Newton step: {text}; they grow by a factor of {growth:.2f} over the series."
        " Counts, exact also where ranks share cores.",
        f"Line chart of linear iterations per Newton step: {text}.",
        draw_chart(f"{name}-iterations", draw),
    )
