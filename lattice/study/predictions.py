"""The chapter of predictions: calibration, back-test, what becomes the bottleneck where."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median
from typing import TYPE_CHECKING, Any

from lattice.report.document import Caution, Chapter, Part, Table, Text
from lattice.study.extrapolate import Prediction, predict, site_machine, turning_points
from lattice.study.metrics import Row, groups, is_sound, seconds_of
from lattice.study.model import MAIN, Machine, Model, Trial, back_test, calibrate, machine_of

if TYPE_CHECKING:
    from lattice.study.reader import Study


@dataclass(frozen=True)
class Outlook:
    """The predictions of one study."""

    model: Model
    machine: Machine
    shown: list[Prediction]


def best_of_points(rows: Sequence[Row]) -> list[Row]:
    """Return one row per point, the repeat with the shortest time."""
    return [min(group, key=seconds_of) for group in groups(rows)]


def alike(row: Row, other: Row) -> bool:
    """Tell whether two rows may share a calibration: one law, one way of solving."""
    names = ("law", "dimensions", "preconditioner", "measure")
    return all(row[name] == other[name] for name in names)


def calibration_rows(rows: Sequence[Row], every: Sequence[Row]) -> list[Row]:
    """Return the points, one row each, that a study's model is calibrated on."""
    found = [r for r in best_of_points(every) if alike(r, rows[0]) and not r["oversubscribed"]]
    return [r for r in found if is_sound(r)] or found


def predictions_of(rows: Sequence[Row], every: Sequence[Row], site: Any) -> Outlook | None:
    """Return the outlook of a study of Newton steps over several rank counts, None of others."""
    if len({row["ranks"] for row in rows}) < 2 or rows[0]["kind"] == "refinement":
        return None
    calibrated = calibration_rows(rows, every)
    if not calibrated:
        return None
    model = calibrate(calibrated)
    pairs = [row for row in calibrated if row["ranks"] > 1] or calibrated
    machine = site_machine(getattr(site, "machine", None), machine_of(pairs[-1]))
    return Outlook(model, machine, predict(model, best_of_points(rows), machine))


def prediction_chapter(
    studies: Sequence[tuple[Study, list[Row], Outlook | None]], every: Sequence[Row]
) -> list[Chapter]:
    """Return the chapter of predictions; none where nothing can be predicted."""
    told = [(study, rows, outlook) for study, rows, outlook in studies if outlook is not None]
    if not told:
        return []
    parts: list[Part] = [Caution(WARNING), Text(METHOD)]
    if not all(is_sound(row) for _, rows, _ in told for row in calibration_rows(rows, every)):
        parts.append(Caution(DISTURBED))
    parts += _back_test_parts([rows for _, rows, _ in told], every)
    for study, _, outlook in told:
        parts += [_table(study, outlook), Text(_turns(study, outlook))]
    return [Chapter("Prediction beyond the measured points", tuple(parts))]


WARNING = (
    "Everything in this chapter is a prediction, not a measurement. Before you ask for core hours on its"
    " strength, measure a few points on the machine you ask for: `lattice study FILE --site SITE`."
)
DISTURBED = (
    "No undisturbed point was there to calibrate on: the coefficients come from times that other work on the"
    " same cores lengthened. What follows shows the method; its seconds are no estimate."
)
METHOD = (
    "Per phase: coefficient x work of the busiest rank / share of the memory bandwidth + latency x"
    " (messages + rounds of collectives) + bytes / bandwidth. Work, messages and bytes are counted (LU"
    " operations and entries of the fullest rank as MUMPS counts them) at every measured rank count,"
    " oversubscribed ones too, and continued beyond as powers of the rank count; coefficients come from"
    " the points that are not oversubscribed. Bands: two standard errors of every phase's calibration, all"
    " in the same direction."
)


def _back_test_parts(series: Sequence[Sequence[Row]], every: Sequence[Row]) -> list[Part]:
    trials: list[Trial] = []
    seen: list[Row] = []
    for rows in series:
        if any(alike(rows[0], other) for other in seen):
            continue
        seen.append(rows[0])
        trials += back_test(calibration_rows(rows, every))
    if not trials:
        return [Text("Back-test: not possible with fewer than three points that are not oversubscribed.")]
    errors = [trial.error for trial in trials]
    table = Table(
        "Back-test (prediction against measurement): fitted on the smaller points, the larger predicted;"
        f" phases with more than {100 * MAIN:.0f} % of the time. Median error {100 * median(errors):.0f} %",
        ["law", "ranks", "unknowns", "phase", "predicted s", "measured s", "error"],
        [
            [t.row["law"], str(t.row["ranks"]), str(t.row["unknowns"]), t.phase, f"{t.predicted:.3f}",
             f"{t.measured:.3f}", f"{100 * t.error:.0f} %"]
            for t in trials
        ],
    )  # fmt: skip
    return [table]


def _table(study: Study, outlook: Outlook) -> Table:
    weak = study.section.kind.startswith("weak")
    first = outlook.shown[0]
    lines = []
    for p in outlook.shown:
        scale = 1.0 if weak else p.ranks / first.ranks
        lines.append(
            [str(p.ranks), f"{p.whole:.3g}", f"{p.low:.3g} to {p.high:.3g}",
             f"{first.whole / p.whole / scale:.2f}", p.bottleneck,
             f"{100 * p.phases[p.bottleneck] / p.whole:.0f} %"]
        )  # fmt: skip
    m = outlook.machine
    caption = (
        f"PREDICTION for {study.title}: latency {1e6 * m.latency:.2g} us, {m.link / 1e9:.3g} GB/s between"
        f" ranks, {m.triad / 1e9:.3g} GB/s of memory bandwidth a rank ({m.source})"
    )
    header = ["ranks", "s, predicted", "band", "efficiency, predicted", "largest phase", "its share"]
    return Table(caption, header, lines, frozenset(range(len(lines))))


def _turns(study: Study, outlook: Outlook) -> str:
    dimensions = "1D" if study.points[0].job.lattice.ny is None else "2D"
    told = "; ".join(
        f"from {ranks} rank(s) on {phase} ({100 * share:.0f} %)"
        for ranks, phase, share in turning_points(outlook.shown)
    )
    return f"Predicted bottleneck, {dimensions} + time, {study.section.kind}: {told}."
