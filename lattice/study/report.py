"""The report of one study or several: one HTML page, and the same as Markdown, from raw rows alone."""

from __future__ import annotations

import time
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError
from lattice.report.document import Chapter, Commands, Document, Table, Text
from lattice.report.markdown import figure_file, to_markdown
from lattice.report.page import to_html
from lattice.store.replacement import write_text_whole
from lattice.study.chapters import caution_of, study_chapters
from lattice.study.metrics import LINE, Row, groups, seconds_of
from lattice.study.predictions import prediction_chapter, predictions_of
from lattice.study.rows import current_rows, read_rows

if TYPE_CHECKING:
    from lattice.study.reader import Study

SOURCES = (
    "Speed-up and efficiency as usual; serial fraction: Karp and Flatt, Comm. ACM 33 (1990) 539; Amdahl,"
    " AFIPS Conf. Proc. 30 (1967) 483; Gustafson, Comm. ACM 31 (1988) 532; hierarchy of efficiencies: POP"
    " Centre of Excellence, Standard Metrics for Parallel Performance Analysis (2016). Cited from memory."
)


def write_report(studies: Sequence[Study], folder: Path | None = None, site: Any = None) -> list[Path]:
    """Write report.html, report.md and its figures; return the two paths.

    Raises
    ------
    InputError
        Where nothing has been measured yet.
    """
    measured = [(study, current_rows(study, read_rows(study.folder))) for study in studies]
    measured = [(study, rows) for study, rows in measured if rows]
    if not measured:
        raise InputError("has no rows yet; run it without --report first", file=str(studies[0].file))
    document = make_document(measured, site)
    folder = folder or measured[0][0].folder
    page, text = folder / "report.html", folder / "report.md"
    (folder / "figures").mkdir(parents=True, exist_ok=True)
    write_text_whole(page, to_html(document))
    write_text_whole(text, to_markdown(document))
    for figure in document.figures:
        write_text_whole(folder / "figures" / figure_file(figure), figure.svg)
    return [page, text]


def make_document(measured: Sequence[tuple[Study, list[Row]]], site: Any = None) -> Document:
    """Return the report of studies with their rows."""
    every = [row for _, rows in measured for row in rows]
    predicted = {study.name: predictions_of(rows, every, site) for study, rows in measured}
    chapters = [Chapter("Summary", (caution_of(every), summary_table(measured)))]
    for study, rows in measured:
        outlook = predicted[study.name]
        chapters += study_chapters(study, rows, outlook.shown if outlook else [])
    chapters += prediction_chapter([(s, r, predicted[s.name]) for s, r in measured], every)
    chapters.append(machine_chapter(every))
    chapters.append(Chapter("How the numbers are defined", (Text(SOURCES), Text(DEFINITIONS))))
    title = measured[0][0].title if len(measured) == 1 else "Scaling of the space-time solver"
    lead = (
        measured[0][0].section.question if len(measured) == 1 else f"{len(measured)} studies on one machine."
    )
    return Document(
        title, lead, tuple(chapters), f"Rebuilt from {len(every)} raw rows, {time.strftime('%Y-%m-%d')}."
    )


DEFINITIONS = (
    "T(p) is the slowest rank's wall time, the shortest of the repeats. Strong: speed-up T(p0)/T(p),"
    " efficiency p0 T(p0)/(p T(p)). Weak: efficiency T(p0)/T(p); `per iteration` multiplies it by the"
    " ratio of linear iterations, which tells the machine's share of a loss from the method's. Load"
    " balance: mean over maximum of the time outside MPI; communication efficiency: that maximum over the"
    " run time."
)


def summary_table(measured: Sequence[tuple[Study, list[Row]]]) -> Table:
    """Return one line per study: the largest point that an efficiency can be claimed for."""
    from lattice.study.metrics import standings

    lines = []
    for study, rows in measured:
        sound = [p for p in standings(rows) if p.efficiency is not None and p.ranks > 1]
        if not sound:
            lines.append([study.title, study.section.kind, "", "", "", "", "no efficiency: counts only"])
            continue
        last = sound[-1]
        assert last.efficiency is not None
        verdict = f"at or above {LINE}" if last.efficiency >= LINE else f"below {LINE}"
        per = "" if last.per_iteration is None else f"{last.per_iteration:.2f}"
        lines.append(
            [study.title, study.section.kind, str(last.ranks), f"{last.best:.2f}",
             f"{last.efficiency:.2f}", per, verdict]
        )  # fmt: skip
    header = ["study", "kind", "ranks", "s", "efficiency", "per iteration", "against the usual line"]
    return Table("Measured efficiencies", header, lines)


def machine_chapter(rows: Sequence[Row]) -> Chapter:
    """Return what the rows were measured on."""
    row = rows[-1]
    machine = [r["machine"] for r in rows]
    facts = [
        ["processor", row["processor"]],
        ["cores", str(row["cores"])],
        ["memory", f"{row['memory_gb']} GB"],
        ["system", row["system"]],
        ["triad bandwidth per rank", _range([m["triad_gb_s"] for m in machine], "GB/s")],
        ["latency between two ranks", _range([m["latency_us"] for m in machine if "latency_us" in m], "us")],
        [
            "bandwidth between two ranks",
            _range([m["link_gb_s"] for m in machine if "link_gb_s" in m], "GB/s"),
        ],
        *[[name, version] for name, version in row["versions"].items()],
        ["commits", ", ".join(sorted({r["commit"] for r in rows}))],
        ["measured", f"{min(r['measured'] for r in rows)} to {max(r['measured'] for r in rows)}"],
    ]
    commands = tuple(dict.fromkeys(r["command"] for r in rows))
    return Chapter(
        "Machine and commands", (Table("Machine and versions", ["what", "value"], facts), Commands(commands))
    )


def _range(numbers: Sequence[float], unit: str) -> str:
    if not numbers:
        return "not measured"
    return f"{min(numbers):.3g} to {max(numbers):.3g} {unit}"


def best_rows(rows: Sequence[Row]) -> list[Row]:
    """Return one row per point, the repeat with the shortest time."""
    return [min(group, key=seconds_of) for group in groups(rows)]
