"""The report of one run: state, pictures, history, certificate, cost, job."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError, LatticeError
from lattice.report.document import Caution, Chapter, Commands, Document, Figure, Part, Table, Text
from lattice.report.drawing import COLOURS, MARKERS, draw_chart
from lattice.show.describe import caution_of
from lattice.store.certificates import StoredCertificate, read_certificate
from lattice.store.runfolder import read_steps, read_summary
from lattice.store.statefile import read_meta

if TYPE_CHECKING:
    from lattice.store.statemeta import StateMeta

STATE, STEPS, SUMMARY, PICTURE, JOB = "state.h5", "steps.jsonl", "summary.json", "field.png", "job.toml"


def run_document(folder: Path) -> Document:
    """Return the report of a run's folder.

    Raises
    ------
    InputError
        Where it holds neither a summary nor a state.
    """
    meta = read_meta(folder / STATE) if (folder / STATE).is_file() else None
    summary = read_summary(folder / SUMMARY) if (folder / SUMMARY).is_file() else {}
    if meta is None and not summary:
        raise InputError("holds neither summary.json nor state.h5 of a run; check the path", file=str(folder))
    steps = read_steps(folder / STEPS) if (folder / STEPS).is_file() else list(meta.history if meta else ())
    certificate = _certificate(folder / STATE) if meta else None
    chapters = [
        Chapter("Outcome", tuple(_outcome(folder, meta, summary, certificate))),
        *_pictures(folder, meta),
        *_history(steps),
        *_certified(certificate),
        *_cost(summary),
        *_job(folder, meta),
    ]
    law = meta.title if meta else str(summary.get("law", ""))
    lead = f"{law}: {summary.get('outcome') or (meta.outcome if meta else 'unknown')}"
    versions: Mapping[str, str] = summary.get("versions") or (meta.versions if meta else {})
    foot = ", ".join(f"{name} {version}" for name, version in versions.items())
    return Document(f"Run {folder.resolve().name}", lead, tuple(chapters), foot)


def _certificate(path: Path) -> StoredCertificate | None:
    try:
        return read_certificate(path)
    except LatticeError:
        return None


def _outcome(
    folder: Path, meta: StateMeta | None, summary: Mapping[str, Any], certificate: StoredCertificate | None
) -> list[Part]:
    parts: list[Part] = []
    if summary.get("reason"):
        parts.append(Text(f"{str(summary['outcome']).capitalize()}: {summary['reason']}."))
    if meta is not None and certificate is None:
        parts.append(Caution(caution_of(folder / STATE)))
    numbers = _numbers(meta, summary)
    return [*parts, Table("Numbers, dimensionless", ["what", "value"], numbers)]


def _numbers(meta: StateMeta | None, summary: Mapping[str, Any]) -> list[list[str]]:
    kind = summary.get("classification") or (meta.classification if meta else {}) or {}
    told: dict[str, Any] = {"kind of state": kind.get("kind")} if kind.get("kind") else {}
    if meta is not None:
        told |= {name: meta.values[name] for name in meta.values}
        lattice = meta.lattice
        told["nodes t, (y,) x"] = " x ".join(str(n) for n in lattice.shape if n > 1)
        told |= {"residual, root mean square": meta.residual_rms, "residual, largest": meta.residual_max}
        told["mean square"] = meta.mean_square
    else:
        told |= dict(summary.get("scalars") or {})
        told["residual, root mean square"] = summary.get("residual_rms")
    told["unknowns"] = summary.get("unknowns")
    return [[name, _shown(value)] for name, value in told.items() if value is not None]


def _shown(value: Any) -> str:
    return f"{value:.9g}" if isinstance(value, float) else str(value)


def _pictures(folder: Path, meta: StateMeta | None) -> list[Chapter]:
    path = folder / PICTURE
    if not path.is_file():
        return []
    what = f"of {', '.join(meta.components)} " if meta else ""
    caption = (
        "The state in its moving frame, and its spectra with the limit up to which the lattice resolves."
    )
    alternative = f"Map {what}over space and time, with its spectra, as `lattice plot` draws it."
    return [Chapter("Pictures", (Figure("field", caption, alternative, png=path.read_bytes()),))]


def _history(steps: Sequence[Mapping[str, Any]]) -> list[Chapter]:
    told = [s for s in steps if isinstance(s.get("residual_rms"), float)]
    if not told:
        return []
    names = list(told[-1].get("scalars") or {})
    header = ["step", "stage", "residual", *names, "linear iterations", "seconds"]
    shown = told if len(told) <= 40 else [*told[:20], *told[-20:]]
    rows = [
        [str(s["step"]), str(s.get("stage", "")), f"{s['residual_rms']:.3e}",
         *(f"{s['scalars'][n]:.9g}" if n in s.get("scalars", {}) else "" for n in names),
         str(s.get("linear_iterations", "")), f"{s.get('seconds', 0.0):.1f}"]
        for s in shown
    ]  # fmt: skip
    caption = "History of the nonlinear steps" + (", the middle left out" if len(told) > 40 else "")
    parts: list[Part] = [_residual_figure(told)]
    moving = [n for n in names if _moves([s["scalars"].get(n) for s in told if "scalars" in s])]
    parts += [_scalar_figure(told, moving)] if moving else []
    return [Chapter("History", (*parts, Table(caption, header, rows)))]


def _moves(series: Sequence[float | None]) -> bool:
    """Tell whether a scalar changed, and ended elsewhere than at rounding, as sources do."""
    return len(set(series)) > 1 and abs(series[-1] or 0.0) > 1e-12


def _residual_figure(steps: Sequence[Mapping[str, Any]]) -> Figure:
    numbers = [s["residual_rms"] for s in steps]

    def draw(axes: Any) -> None:
        axes.semilogy(range(len(numbers)), numbers, color=COLOURS[0], marker="o", markersize=3)
        axes.set_xlabel("step")
        axes.set_ylabel("residual, root mean square")
        axes.xaxis.get_major_locator().set_params(integer=True)

    told = f"from {numbers[0]:.2e} to {numbers[-1]:.2e} in {len(numbers) - 1} steps"
    return Figure(
        "residual", f"Residual {told}.", f"Line chart of the residual by step, {told}.",
        draw_chart("residual", draw),
    )  # fmt: skip


def _scalar_figure(steps: Sequence[Mapping[str, Any]], names: Sequence[str]) -> Figure:
    def draw(axes: Any) -> None:
        for k, name in enumerate(names):
            series = [s["scalars"].get(name, float("nan")) for s in steps]
            last = series[-1]
            axes.semilogy(
                range(len(series) - 1), [abs(v / last - 1.0) for v in series[:-1]], label=name,
                color=COLOURS[k % len(COLOURS)], marker=MARKERS[k % len(MARKERS)], markersize=3,
            )  # fmt: skip
        axes.set_xlabel("step")
        axes.set_ylabel("|value/last - 1|")
        axes.xaxis.get_major_locator().set_params(integer=True)
        axes.legend(fontsize=8)

    told = "; ".join(
        f"{n} from {steps[0]['scalars'].get(n, float('nan')):.6g} to {steps[-1]['scalars'][n]:.6g}"
        for n in names
    )
    return Figure(
        "scalars", f"Free scalars, their distance from where they ended: {told}.",
        f"Line chart of the free scalars by step: {told}.", draw_chart("scalars", draw),
    )  # fmt: skip


def _certified(certificate: StoredCertificate | None) -> list[Chapter]:
    if certificate is None:
        return []
    record = certificate.record
    parts: list[Part] = []
    if not certificate.valid:
        parts.append(
            Caution(f"This certificate no longer holds: changed since are {', '.join(certificate.changed)}.")
        )
    parts.append(
        Text(f"Verdict: {record.get('verdict', 'unreadable')}, written {record.get('written', '')}.")
    )
    rows = [
        [str(c.get("name", "")), str(c.get("result", "")), str(c.get("why", ""))]
        for c in record.get("criteria", [])
    ]
    if rows:
        parts.append(Table("What was checked", ["criterion", "result", "why"], rows))
    if record.get("caution"):
        parts.append(Caution(str(record["caution"])))
    return [Chapter("Certificate", tuple(parts))]


def _cost(summary: Mapping[str, Any]) -> list[Chapter]:
    if not summary:
        return []
    seconds = summary.get("seconds") or {}
    rows = [[f"seconds, {name}", f"{float(value):.2f}"] for name, value in seconds.items()]
    rows += [
        [label, str(summary[key])]
        for key, label in (
            ("ranks", "MPI ranks"), ("newton_steps", "nonlinear steps"),
            ("linear_iterations", "linear iterations"),
        )
        if key in summary
    ]  # fmt: skip
    if "total" in seconds and "ranks" in summary:
        rows.append(["core hours", f"{float(seconds['total']) * summary['ranks'] / 3600:.4g}"])
    if isinstance(summary.get("peak_memory_mb"), float):
        rows.append(["peak memory of all ranks, MB", f"{summary['peak_memory_mb']:.0f}"])
    return [Chapter("Cost", (Table("Time, iterations, memory", ["what", "value"], rows),))]


def _job(folder: Path, meta: StateMeta | None) -> list[Chapter]:
    path = folder / JOB
    text = path.read_text(encoding="utf-8") if path.is_file() else (meta.job_text if meta else "")
    return [Chapter("Job, as resolved", (Commands(tuple(text.strip().splitlines())),))] if text else []
