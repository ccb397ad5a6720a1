"""A mosaic's layout: which stored state stands where, and the box that makes.

A layout is rows of names, the earliest row first; in a row the names follow x. In two space dimensions a
row holds lines along y, parted by slashes, the one of smallest y first. Every member has its natural size
(stored, times its repeats, or the size given); a row lasts as long as its members do on average, a column
is as wide, and each member is stretched to its cell.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from lattice.errors import InputError
from lattice.laws.law import Law, Reflection
from lattice.laws.symmetry import symmetries_at
from lattice.starts.options import MemberOptions, MosaicOptions
from lattice.starts.sources import Source
from lattice.starts.stepper import Values

Sizes = tuple[float, ...]
REFLECTIONS = {"x": (True, False), "y": (False, True), "xy": (True, True), "sign": (False, False)}


@dataclass(frozen=True)
class Member:
    """A stored state as it is used in a mosaic.

    Parameters
    ----------
    name : str
    file : str
    source : Source
    repeats : tuple of int
        Along t, y, x.
    shifts : tuple of float
        Along t, y, x, in stored units: the member's field is taken that much later or further on.
    reflection : Reflection or None
    sizes : tuple of float
        Natural duration and lengths (t, y, x), repeats included; no number for a steady member's duration.
    turns_back : bool
        Whether the reflection makes the rotating pair turn the other way.
    """

    name: str
    file: str
    source: Source
    repeats: tuple[int, int, int]
    shifts: tuple[float, float, float]
    reflection: Reflection | None
    sizes: tuple[float, float, float]
    turns_back: bool = False


@dataclass(frozen=True)
class Cell:
    """A place of the layout: its row, line and column, and its member."""

    row: int
    line: int
    column: int
    member: Member

    @property
    def numbers(self) -> tuple[int, int, int]:
        """Row, line and column: places along t, y, x."""
        return (self.row, self.line, self.column)


@dataclass(frozen=True)
class Layout:
    """A layout with sizes: cells, and where rows, lines and columns begin and end.

    Parameters
    ----------
    cells : tuple of Cell
    ends : tuple of tuple of float
        For t, y, x: where the pieces begin, and the end of the last.
    values : dict of str to float
        Scalars of the box: period, lengths, mean drift and rotation of the members, parameters of the first.
    """

    cells: tuple[Cell, ...]
    ends: tuple[Sizes, Sizes, Sizes]
    values: Values

    def speed(self, cell: Cell, name: str) -> float:
        """Return a member's drift or rotation as it is in its cell, stretched and reflected."""
        return _stretched(cell, name, self.ends)

    def stretch(self, cell: Cell) -> tuple[float, float, float]:
        """Return how much longer the cell is than its member by nature, along t, y, x."""
        return _stretches(cell, self.ends)


def read_rows(rows: Sequence[str], law: Law) -> list[list[list[str]]]:
    """Return the names of a layout as rows of lines of names.

    Raises
    ------
    InputError
        For a layout that is not rectangular, or has lines along y for a law in one dimension.
    """
    read = [[line.split() for line in row.split("/")] for row in rows]
    if law.dimensions == 1 and any(len(lines) > 1 for lines in read):
        raise InputError(
            "start.rows must hold no '/': it parts lines along y, and the law has one space dimension; give "
            "each time its own row"
        )
    counts = {len(lines) for lines in read} | {0 for _ in range(not read)}
    widths = {len(names) for lines in read for names in lines}
    if len(counts) != 1 or len(widths) != 1 or not min(widths):
        found = "; ".join(" / ".join(str(len(names)) for names in lines) for lines in read)
        raise InputError(f"start.rows must all hold equally many names, got {found or 'none'} in its rows")
    return read


def make_layout(start: MosaicOptions, law: Law, sources: Mapping[str, Source], nt: int) -> Layout:
    """Return the layout of a mosaic whose members' files have been looked at.

    Raises
    ------
    InputError
        For a name without a member, a reflection the law does not allow, a member without a duration.
    """
    rows = read_rows(start.rows, law)
    members = {name: _member(name, start.members[name], sources[name], law) for name in start.members}
    cells = []
    for row, lines in enumerate(rows):
        for line, names in enumerate(lines):
            for column, name in enumerate(names):
                if name not in members:
                    raise InputError(
                        f"start.members must tell of every name in start.rows, and lacks '{name}'; add "
                        f"{name} = {{ file = ... }}"
                    )
                cells.append(Cell(row, line, column, members[name]))
    if nt == 1 and len(rows) > 1:
        raise InputError(f"start.rows must be one row for lattice.nt = 1, got {len(rows)}; raise lattice.nt")
    ends = (
        _ends([_row_size(cells, "row", n, 0) for n in range(len(rows))]) if nt > 1 else (0.0, 1.0),
        _ends([_row_size(cells, "line", n, 1) for n in range(len(rows[0]))]),
        _ends([_row_size(cells, "column", n, 2) for n in range(len(rows[0][0]))]),
    )
    _check_place(cells, ends, law)
    return Layout(tuple(cells), ends, _values(cells, ends, law, nt))


def _check_place(cells: Sequence[Cell], ends: tuple[Sizes, Sizes, Sizes], law: Law) -> None:
    """Refuse to shift or stretch members along an axis on which the law depends."""
    for axis, place in (("y", 1), ("x", 2)):
        if law.symmetries.homogeneous.get(axis, True):
            continue
        for cell in cells:
            shifted, stretch = cell.member.shifts[place], _stretches(cell, ends)[place]
            if shifted or abs(stretch - 1.0) > 1e-9:
                what = f"shifted by {shifted:g}" if shifted else f"stretched {stretch:.4g} times"
                raise InputError(
                    f"start.members.{cell.member.name} must keep its place and length in {axis}, on which "
                    f"law {law.name} depends, and is {what}; give members of one length_{axis}, without "
                    f"shift_{axis}"
                )


def _member(name: str, given: MemberOptions, source: Source, law: Law) -> Member:
    repeats = (given.repeat_t, given.repeat_y, given.repeat_x)
    sizes = []
    for axis, asked, times in zip(
        range(3), (given.period, given.length_y, given.length_x), repeats, strict=True
    ):
        timeless = axis == 0 and source.nodes[0] == 1
        natural = np.nan if timeless else source.covers[axis] * times
        sizes.append(float(natural if asked is None else asked))
    reflection = None if given.reflect is None else _reflection(name, given.reflect, source, law)
    shifts = (given.shift_t, given.shift_y, given.shift_x)
    natural_sizes = (sizes[0], sizes[1], sizes[2])
    turns_back = reflection is not None and _turns_back(reflection, law)
    return Member(name, given.file, source, repeats, shifts, reflection, natural_sizes, turns_back)


def _turns_back(reflection: Reflection, law: Law) -> bool:
    signs = [reflection.signs[law.components.index(name)] for name in law.rotating_pair or ()]
    return bool(signs) and signs[0] != signs[1]


def _reflection(name: str, asked: str, source: Source, law: Law) -> Reflection:
    """Return the law's reflection that is asked for, of several the one that changes fewest signs."""
    along_x, along_y = REFLECTIONS[asked]
    found = [
        r
        for r in symmetries_at(law, source.values).reflections
        if not r.time and (r.x, r.y) == (along_x, along_y)
    ]
    if not found:
        what = "a change of sign" if asked == "sign" else f"a reflection of {' and '.join(asked)}"
        raise InputError(
            f"start.members.{name}.reflect must be a symmetry of law {law.name} at the member's parameters; "
            f"{what} is none; remove it"
        )
    return max(found, key=lambda r: sum(r.signs))


def _row_size(cells: Sequence[Cell], kind: str, number: int, axis: int) -> float:
    """Return the mean size of the members of a row, line or column that have one."""
    sizes = [c.member.sizes[axis] for c in cells if getattr(c, kind) == number]
    known = [size for size in sizes if not np.isnan(size)]
    if not known:
        names = ", ".join(sorted({c.member.name for c in cells if getattr(c, kind) == number}))
        raise InputError(
            f"start.members: row {number + 1} has no duration, its members ({names}) being steady or "
            "travelling; give one of them a period"
        )
    return float(np.mean(known))


def _ends(sizes: Sequence[float]) -> Sizes:
    return (0.0, *np.cumsum(sizes).tolist())


def _values(cells: Sequence[Cell], ends: tuple[Sizes, Sizes, Sizes], law: Law, nt: int) -> Values:
    values = {k: v for k, v in cells[0].member.source.values.items() if k in law.defaults}
    values |= {"period": ends[0][-1] if nt > 1 else 1.0, "length_x": ends[2][-1]}
    if law.dimensions == 2:
        values["length_y"] = ends[1][-1]
    names = [f"drift_{axis}" for axis in "xy"[: law.dimensions]] + (["rotation"] if law.rotating_pair else [])
    areas = [_area(cell, ends) for cell in cells]
    for name in names:
        speeds = [_stretched(cell, name, ends) for cell in cells]
        values[name] = float(np.average(speeds, weights=areas))
    return values


def _area(cell: Cell, ends: tuple[Sizes, Sizes, Sizes]) -> float:
    return float(np.prod([e[n + 1] - e[n] for e, n in zip(ends, cell.numbers, strict=True)]))


def _numbers(cell: Cell) -> tuple[int, int, int]:
    return (cell.row, cell.line, cell.column)


def _stretches(cell: Cell, ends: tuple[Sizes, Sizes, Sizes]) -> tuple[float, float, float]:
    found = []
    for axis, number in enumerate(cell.numbers):
        size = ends[axis][number + 1] - ends[axis][number]
        natural = cell.member.source.covers[axis] * cell.member.repeats[axis]
        timeless = axis == 0 and cell.member.source.nodes[0] == 1
        found.append(1.0 if timeless else size / natural)
    return found[0], found[1], found[2]


def _stretched(cell: Cell, name: str, ends: tuple[Sizes, Sizes, Sizes]) -> float:
    value = cell.member.source.values.get(name, 0.0)
    stretch, reflection = _stretches(cell, ends), cell.member.reflection
    if name == "rotation":
        return float((-value if cell.member.turns_back else value) / stretch[0])
    axis = name[-1]
    if reflection is not None and getattr(reflection, axis):
        value = -value
    return float(value * stretch[2 if axis == "x" else 1] / stretch[0])
