"""What a state file holds, in words for a terminal and as JSON."""

from __future__ import annotations

import json
import math
import os
import textwrap
from collections.abc import Mapping, Sequence
from dataclasses import asdict, replace
from typing import Any

from lattice.show.planes import extent
from lattice.show.verdict import residual_text
from lattice.store.certificates import read_certificate
from lattice.store.layout import SCHEMA, SCHEMA_VERSION
from lattice.store.runfolder import lattice_numbers
from lattice.store.statefile import read_meta
from lattice.store.statemeta import StateMeta, plain

COLUMNS = 100
LABEL = 14
CAUTION = (
    "This state carries no certificate. A small residual shows that it solves the equations of its "
    "lattice, not that the lattice resolves the law or that the law describes the plant. Do not base a "
    "design decision on it: run `lattice check` on it first, and follow the site's rules and licensed "
    "practice."
)
MEANINGS = {
    "period": "period in the moving frame",
    "length_x": "length of the box in x",
    "length_y": "length of the box in y",
    "drift_x": "velocity of the frame in x",
    "drift_y": "velocity of the frame in y",
    "rotation": "radians per unit of time by which the frame turns",
}


def describe_state(path: str | os.PathLike[str], more: Sequence[tuple[str, str]] = ()) -> str:
    """Return a description of a state file, at most 100 columns wide; `more` are further labelled lines.

    Raises
    ------
    StateFileError
        If the file cannot be used.
    """
    meta = read_meta(path)
    sections = [_law(meta), _scalars(meta), _lattice(meta), _outcome(meta)]
    sections += [[line for label, text in more for line in _row(label, text)], _origin(meta)]
    text = "\n\n".join("\n".join(section) for section in sections if section)
    caution = textwrap.fill(
        caution_of(path), COLUMNS, initial_indent="Caution: ", subsequent_indent="         "
    )
    return f"{os.fspath(path)}\n\n{text}\n\n{caution}\n"


def state_json(path: str | os.PathLike[str], classification: Mapping[str, Any] | None = None) -> str:
    """Return the record of a state file as JSON, with the caution of `describe_state`."""
    meta = read_meta(path)
    if classification is not None:
        meta = replace(meta, classification=dict(classification))
    content = {"schema": SCHEMA, "schema_version": SCHEMA_VERSION, **asdict(meta)}
    content["lattice"] = lattice_numbers(meta.lattice)
    content["scalars"] = content.pop("values")
    stored = read_certificate(path)
    content["certificate"] = stored and {"verdict": stored.record.get("verdict"), "holds": stored.valid}
    content["caution"] = caution_of(path)
    return json.dumps(plain(content), indent=2, allow_nan=False, ensure_ascii=False) + "\n"


def caution_of(path: str | os.PathLike[str]) -> str:
    """Return what is to be said of a state's certificate: its verdict, that it no longer holds, or none."""
    stored = read_certificate(path)
    if stored is None:
        return CAUTION
    if not stored.valid:
        changed = " and ".join(stored.changed)
        return f"This state's certificate no longer holds: {changed} changed. Run `lattice check` again."
    record = stored.record
    return f"This state is {record['verdict']} ({record['written']}). {record['caution']}"


def _row(label: str, text: str) -> list[str]:
    """Return a labelled line, wrapped below its own start."""
    lines = textwrap.wrap(text, COLUMNS - LABEL, break_on_hyphens=False) or [""]
    return [f"{label if i == 0 else '':<{LABEL}}{line}".rstrip() for i, line in enumerate(lines)]


def _law(meta: StateMeta) -> list[str]:
    lines = _row("law", meta.law + (f": {meta.title}" if meta.title else ""))
    for i, equation in enumerate(meta.text):
        lines += _row("equations" if i == 0 else "", equation)
    return lines + _row("components", ", ".join(meta.components))


def _scalars(meta: StateMeta) -> list[str]:
    """Return a table of the scalars, all dimensionless, with those that were solved for marked."""
    names = [name for name in meta.values if name != "period" or meta.lattice.nt > 1]
    width = max((len(name) for name in names), default=0)
    lines = ["scalars       (dimensionless; * = was an unknown of the solve)"]
    for name in names:
        mark = "*" if name in meta.free else " "
        meaning = MEANINGS.get(name, "parameter of the law" if name in meta.parameters else "uniform source")
        lines.append(
            f"  {mark} {name:<{width}}  {_number(meta.values[name]):<24}{meaning}"[:COLUMNS].rstrip()
        )
    return lines


def _lattice(meta: StateMeta) -> list[str]:
    lattice = meta.lattice
    lines = ["lattice       axis   nodes  spacing      order"]
    for axis, nodes in zip(meta.axes, meta.shape, strict=True):
        order = {"t": lattice.order_t, "y": lattice.order_y, "x": lattice.order_x}[axis]
        lines.append(
            f"{'':<{LABEL}}{axis:<5}{nodes:>7}  {extent(meta, axis) / nodes:<11.5g}  {order}"
            if nodes > 1
            else f"{'':<{LABEL}}{axis:<5}{nodes:>7}  (no change along {axis})"
        )
    unknowns = lattice.nodes * len(meta.components) + len(meta.free)
    return [*lines, f"{'unknowns':<{LABEL}}{unknowns:,}".replace(",", " ")]


def _outcome(meta: StateMeta) -> list[str]:
    lines = _row("outcome", meta.outcome or "unknown") + _row("residual", residual_text(meta))
    mean = "not computed" if not math.isfinite(meta.mean_square) else _number(meta.mean_square)
    lines += _row("mean square", mean)
    steps = sum(entry.get("step", 0) > 0 for entry in meta.history)
    return lines + _row("steps", f"{steps} nonlinear" if steps else "none")


def _origin(meta: StateMeta) -> list[str]:
    versions = ", ".join(f"{name} {version}" for name, version in meta.versions.items())
    return _row("written", meta.written) + (_row("versions", versions) if versions else [])


def _number(value: Any) -> str:
    return f"{value:.12g}"
