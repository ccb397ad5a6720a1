"""What the command line says about laws: a list of all, and a page about one."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

from lattice.laws.catalogue import Summary, law_summaries

if TYPE_CHECKING:
    from lattice.laws.law import Law, Reflection, Symmetries

WIDTH = 100
_INDENT = "  "


def list_laws() -> str:
    """Return a table of the shipped laws: name, space dimensions, components, title."""
    summaries = law_summaries()
    rows = [("name", "space", "fields", "law"), *map(_row, summaries)]
    return "\n".join(_align(rows))


def _row(summary: Summary) -> tuple[str, str, str, str]:
    space = "x" if summary.dimensions == 1 else "x, y"
    return summary.name, space, ", ".join(summary.components), summary.title


def _align(rows: Sequence[Sequence[str]]) -> list[str]:
    """Return rows with columns padded to equal width; the last column wraps below itself."""
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    start = sum(widths[:-1]) + 2 * (len(widths) - 1)
    lines = []
    for row in rows:
        head = "".join(cell.ljust(width + 2) for cell, width in zip(row[:-1], widths[:-1], strict=True))
        lines.append(_filled(row[-1], head, " " * start))
    return lines


def _filled(text: str, first: str, rest: str) -> str:
    wrapped = textwrap.fill(
        text,
        WIDTH,
        initial_indent=first,
        subsequent_indent=rest,
        break_long_words=False,
        break_on_hyphens=False,
    )
    return wrapped or first.rstrip()


def describe_law(law: Law) -> str:
    """Return a page about one law: formula, parameters, symmetries, scaling, source, notes."""
    sections = [
        ("formula", list(law.text)),
        ("on the lattice", _solved_equations(law)),
        ("parameters", _parameters(law)),
        ("symmetries", [_item(line) for line in symmetry_lines(law)]),
        ("scaling", paragraphs(law.scaling)),
        ("source", paragraphs(law.source)),
        ("notes", paragraphs(law.notes)),
    ]
    title = f"{law.name}: {law.title}" if law.title else law.name
    pages = [_filled(title, "", ""), *(_section(name, lines) for name, lines in sections if lines)]
    if law.best_for:
        pages.insert(1, _filled(f"for {law.best_for}", "", ""))
    return "\n".join(pages)


def _section(name: str, lines: Sequence[str]) -> str:
    return "\n".join([f"\n{name}", *(_INDENT + line if line else "" for line in lines)])


def _item(line: str) -> str:
    return textwrap.fill(line, WIDTH - len(_INDENT), subsequent_indent=_INDENT, break_on_hyphens=False)


def _solved_equations(law: Law) -> list[str]:
    from lattice.laws.writing import write_equation

    lines: list[str] = []
    for equation in law.equations:
        lines += textwrap.wrap(
            write_equation(equation), WIDTH - 4, subsequent_indent="    ", break_long_words=False
        )
    return lines


def _parameters(law: Law) -> list[str]:
    if not law.parameters:
        return ["none"]
    return _align([(p.name, f"{p.default:g}", p.unit, p.meaning) for p in law.parameters])


def paragraphs(text: str) -> list[str]:
    """Return lines of at most the page's width: lines that are indented stay as they are, others flow."""
    lines: list[str] = []
    flowing: list[str] = []
    for line in [*text.splitlines(), ""]:
        if line and not line.startswith(" "):
            flowing.append(line.strip())
            continue
        if flowing:
            lines += textwrap.wrap(" ".join(flowing), WIDTH - len(_INDENT), break_on_hyphens=False)
            flowing = []
        if line:
            lines.append(line)
    return lines


def symmetry_lines(law: Law) -> list[str]:
    """Return the symmetries of a law in words, one line each."""
    from lattice.laws.symmetry import symmetries_at

    found = law.symmetries
    lines = [*_continuous(found), *_turning(law)]
    lines += [f"unchanged by {_in_words(r, law.components)}" for r in found.reflections]
    special = symmetries_at(law, law.defaults)
    zeros = " and ".join(f"{p.name} = 0" for p in law.parameters if p.default == 0.0)
    more = [r for r in special.reflections if r not in found.reflections]
    return lines + [f"unchanged by {_in_words(r, law.components)}, with {zeros}" for r in more]


def _continuous(found: Symmetries) -> Iterator[str]:
    for axis, homogeneous in found.homogeneous.items():
        yield (
            f"homogeneous in {axis}: a state may be shifted along {axis}, and drift_{axis} may be free"
            if homogeneous
            else f"not homogeneous in {axis}: {axis} stands in the equations, and drift_{axis} must be 0"
        )
    for name in found.conserved:
        yield f"the mean of {name} is conserved"
    for name in found.shiftable:
        yield f"a constant may be added to {name}"
    for name in found.gauge:
        yield f"a constant may be added to {name} at each time"
    if found.galilean:
        yield "a constant added to a field only makes the state drift along x (Galilean invariance)"


def _turning(law: Law) -> Iterator[str]:
    for pair in law.symmetries.rotations:
        may = ": a state may turn, and rotation may be free" if pair == law.rotating_pair else ""
        yield f"({', '.join(pair)}) may be turned by any angle{may}"


def _in_words(reflection: Reflection, components: Sequence[str]) -> str:
    flips = {"t": reflection.time, "x": reflection.x, "y": reflection.y}
    signs = dict(zip(components, reflection.signs, strict=True))
    changed = [name for name, flipped in flips.items() if flipped]
    changed += [name for name, sign in signs.items() if sign < 0]
    return ", ".join(f"{name} -> -{name}" for name in changed)
