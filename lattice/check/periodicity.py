"""Periodicity: which kind of state it is, and whether it is the smallest of its kind."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from lattice.classify.kind import classify
from lattice.classify.words import kind_line, repeat_line, symmetry_lines

if TYPE_CHECKING:
    from lattice.check.subject import Subject


@dataclass(frozen=True)
class Periodicity:
    """The kind of a state.

    Parameters
    ----------
    kind : str
        "constant", "steady", "travelling", "periodic" or "relative periodic".
    text : str
        In words.
    repeats : tuple of int
        (rt, ry, rx): how often it holds a smaller state.
    repeat_text : str
        In words; empty for the smallest.
    symmetries : tuple of str
        In words.
    time_change : float
        Root mean square of the time derivative in the state's frame, relative to what it could be.
    """

    kind: str
    text: str
    repeats: tuple[int, int, int]
    repeat_text: str
    symmetries: tuple[str, ...]
    time_change: float


def measure_periodicity(subject: Subject) -> Periodicity:
    """Return the kind of the state. Collective."""
    system = subject.system
    found = classify(subject.law, subject.lattice, subject.values, subject.owned, system.blocks, subject.comm)
    components, axes = subject.law.components, subject.meta.axes
    return Periodicity(
        found.kind,
        kind_line(found, subject.values),
        found.repeats,
        repeat_line(found),
        tuple(symmetry_lines(found, components, subject.values, axes)),
        float(found.time_change),
    )
