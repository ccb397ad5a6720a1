"""A classification in words, for a terminal."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from fractions import Fraction
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from lattice.classify.kind import Classification, StateReflection

LENGTHS = {"t": "T", "y": "Ly", "x": "Lx"}
SIMPLE = 12  # largest denominator written as a fraction
NEAR = 1e-5


def kind_line(found: Classification, values: Mapping[str, float]) -> str:
    """Return what kind of state it is, in one line."""
    moving = ", ".join(f"{name} = {v:.9g}" for name, v in found.velocity.items() if v)
    if found.kind == "travelling":
        return f"travelling: at rest in the frame of {moving}"
    if found.kind == "relative periodic":
        period = values.get("period", 1.0) / found.repeats[0]
        return f"relative periodic: repeats every {period:.9g} in the frame of {moving} only"
    if found.kind == "periodic" and found.repeats[0] > 1:
        return f"periodic: repeats every {values.get('period', 1.0) / found.repeats[0]:.9g}"
    return found.kind


def repeat_line(found: Classification) -> str:
    """Return how often it holds a smaller state, empty where it holds none."""
    counts = zip(("in time", "along y", "along x"), found.repeats, strict=True)
    parts = [f"{count} times {where}" for where, count in counts if count > 1]
    return f"holds a smaller state {' and '.join(parts)}" if parts else ""


def symmetry_lines(
    found: Classification, components: Sequence[str], values: Mapping[str, float], axes: Sequence[str]
) -> list[str]:
    """Return the symmetries the state has, one equation a line.

    Parameters
    ----------
    found : Classification
    components : sequence of str
    values : mapping of str to float
    axes : sequence of str
        "t", "x" or "t", "y", "x".
    """
    name = components[0] if len(components) == 1 else f"({', '.join(components)})"
    plain = f"{name}({', '.join(axes)})"
    lines = []
    for shift in found.combined:
        moved = [_moved(axis, float(Fraction(shift.get(axis, "0"))), False, values) for axis in axes]
        lines.append(f"{name}({', '.join(moved)}) = {plain}")
    return lines + [_reflected(r, components, axes, values, name) for r in found.reflections]


def _reflected(
    found: StateReflection,
    components: Sequence[str],
    axes: Sequence[str],
    values: Mapping[str, float],
    name: str,
) -> str:
    flips = {"t": found.reflection.time, "y": found.reflection.y, "x": found.reflection.x}
    moved = [_moved(axis, found.shift.get(axis, 0.0), flips[axis], values) for axis in axes]
    signs = ["-" if sign < 0 else "" for sign in found.reflection.signs]
    if len(components) == 1:
        image = f"{signs[0]}{name}"
    elif set(signs) == {"-"}:
        image = f"-{name}"
    else:
        image = f"({', '.join(s + c for s, c in zip(signs, components, strict=True))})"
    turn = f", turned by {found.angle:.6g}" if abs(found.angle) > NEAR else ""
    return f"{name}({', '.join(moved)}) = {image}({', '.join(axes)}){turn}"


def _moved(axis: str, shift: float, flip: bool, values: Mapping[str, float]) -> str:
    """Return a coordinate shifted by a fraction of its period, or reflected."""
    amount = _amount(axis, shift, flip, values)
    if flip:
        return f"{amount} - {axis}" if amount else f"-{axis}"
    return f"{axis} + {amount}" if amount else axis


def _amount(axis: str, shift: float, flip: bool, values: Mapping[str, float]) -> str:
    near = min(shift, 1.0 - shift)
    if near < NEAR:
        return ""
    fraction = Fraction(shift).limit_denominator(SIMPLE)
    if abs(fraction - shift) < NEAR:
        top = "" if fraction.numerator == 1 else f"{fraction.numerator}*"
        return f"{top}{LENGTHS[axis]}/{fraction.denominator}"
    length = values.get({"t": "period", "y": "length_y", "x": "length_x"}[axis], 1.0)
    return f"{shift * length:.6g}"


def lines(
    found: Classification, components: Sequence[str], values: Mapping[str, float], dimensions: int
) -> Iterator[tuple[str, str]]:
    """Yield labels and lines that tell all of it."""
    yield "kind", kind_line(found, values)
    if repeats := repeat_line(found):
        yield "repeats", repeats
    axes = ("t", "x") if dimensions == 1 else ("t", "y", "x")
    for i, line in enumerate(symmetry_lines(found, components, values, axes)):
        yield "" if i else "symmetries", line
