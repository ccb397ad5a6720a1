"""The translations that leave a field unchanged, from the lattice its mode numbers span.

A translation by fractions s of the periods leaves the modes m alone for which the product m.s is whole. So
the translations of a field are the dual of the integer lattice its modes span: a finite group where the
modes span a lattice of full rank, found here exactly, in integers.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from fractions import Fraction
from math import gcd, lcm

import numpy as np
from numpy.typing import NDArray

from lattice.classify.spectra import Real, Spectra

Integers = NDArray[np.int64]
Basis = list[list[int]]
MOST_TRANSLATIONS = 4096  # more are not listed: a field has them only by a mistake
BINS = 400  # per 40 decades of energy, when the weakest modes are left out


@dataclass(frozen=True)
class Translations:
    """The finite translations of a field.

    Parameters
    ----------
    repeats : tuple of int
        For every axis of the spectra how often the field repeats along it; 1 where it does not vary.
    combined : tuple of tuple of Fraction
        Generators of those that are no repeats along the axes: fractions of the whole periods.
    group : tuple of tuple of Fraction
        All of them, the identity first.
    """

    repeats: tuple[int, ...]
    combined: tuple[tuple[Fraction, ...], ...]
    group: tuple[tuple[Fraction, ...], ...]


def find_translations(
    spectra: Spectra, energies: Real, tolerance: float, skip: tuple[str, ...] = ()
) -> Translations:
    """Return the translations that change a field by no more than a tolerance.

    Collective.

    Parameters
    ----------
    spectra : Spectra
    energies : ndarray
        Of every mode, as `Spectra.energies` returns them; the mean does not matter.
    tolerance : float
        The weakest modes are left out while their root mean square is at most this.
    skip : tuple of str
        Axes along which no translation is looked for.
    """
    threshold = weakest(spectra, energies, tolerance)
    active = energies > threshold
    numbers = [np.broadcast_to(m, active.shape)[active] for m in spectra.modes]
    for axis, name in enumerate(spectra.axes):
        if name in skip:
            numbers[axis] = np.zeros_like(numbers[axis])
    own = extended([], np.stack(numbers, axis=-1))
    rows = list(itertools.chain.from_iterable(spectra.blocks.comm.allgather(own)))
    return dual(extended([], np.array(rows, dtype=np.int64).reshape(-1, len(numbers))), len(numbers))


def weakest(spectra: Spectra, energies: Real, tolerance: float) -> float:
    """Return the energy up to which modes together have a root mean square of at most `tolerance`."""
    scale = np.logspace(-36.0, 4.0, BINS) * max(tolerance**2, 1e-300)
    places = np.searchsorted(scale, energies.reshape(-1))
    sums = spectra.total(np.bincount(places, weights=energies.reshape(-1), minlength=BINS + 1))
    kept = int(np.searchsorted(np.cumsum(sums), tolerance**2, side="right"))
    return float(scale[kept - 1]) if kept > 0 else 0.0


def extended(basis: Basis, modes: Integers) -> Basis:
    """Return a basis in echelon form of the lattice spanned by `basis` and rows of mode numbers.

    Examples
    --------
    >>> extended([], np.array([[2, 0], [1, 1], [4, 2]]))
    [[1, 1], [0, 2]]
    """
    rest = _remainders(basis, modes)
    while rest.any():
        row = rest[np.flatnonzero(rest.any(axis=1))[0]]
        basis = _echelon([*basis, [int(n) for n in row]])
        rest = _remainders(basis, rest)
    return basis


def _remainders(basis: Basis, modes: Integers) -> Integers:
    """Return the mode numbers reduced by the basis: zero for those in its lattice."""
    rest = modes.copy()
    for row in basis:
        pivot = next(k for k, n in enumerate(row) if n)
        rest -= (rest[:, pivot] // row[pivot])[:, None] * np.array(row)
    return rest


def _echelon(rows: Basis) -> Basis:
    """Return rows of the same lattice in echelon form with positive pivots, by Euclid's algorithm."""
    found: Basis = []
    rows = [row for row in rows if any(row)]
    for column in range(len(rows[0])):
        while sum(row[column] != 0 for row in rows) > 1:
            rows.sort(key=lambda row: (row[column] == 0, abs(row[column])))
            first = rows[0]
            rows = [first, *(_minus(row, first, row[column] // first[column]) for row in rows[1:])]
        rows.sort(key=lambda row: row[column] == 0)
        if rows and rows[0][column]:
            first = rows.pop(0)
            found.append([-n for n in first] if first[column] < 0 else first)
    return found


def _minus(row: list[int], other: list[int], factor: int) -> list[int]:
    return [a - factor * b for a, b in zip(row, other, strict=True)]


def dual(basis: Basis, axes: int) -> Translations:
    """Return the translations that leave the modes of a lattice alone."""
    repeats = [max(1, gcd(*(row[axis] for row in basis))) if basis else 1 for axis in range(axes)]
    varied = [axis for axis in range(axes) if any(row[axis] for row in basis)]
    group = _group([[row[axis] for axis in varied] for row in basis]) if len(varied) == len(basis) else []
    whole = [_spread(s, varied, axes) for s in group] or [(Fraction(0),) * axes]
    return Translations(tuple(repeats), _combined(whole, repeats), tuple(sorted(whole)))


def _spread(part: tuple[Fraction, ...], varied: list[int], axes: int) -> tuple[Fraction, ...]:
    numbers = dict(zip(varied, part, strict=True))
    return tuple(numbers.get(axis, Fraction(0)) for axis in range(axes))


def _group(basis: Basis) -> list[tuple[Fraction, ...]]:
    """Return the group generated modulo 1 by the columns of the inverse of a square basis."""
    count = len(basis)
    if not count:
        return []
    inverse = _inverse(basis)
    generators = [tuple(inverse[i][j] % 1 for i in range(count)) for j in range(count)]
    found = {(Fraction(0),) * count}
    fresh = set(found)
    while fresh and len(found) <= MOST_TRANSLATIONS:
        fresh = {_sum(s, g) for s in fresh for g in generators} - found
        found |= fresh
    return sorted(found) if len(found) <= MOST_TRANSLATIONS else []


def _sum(s: tuple[Fraction, ...], g: tuple[Fraction, ...]) -> tuple[Fraction, ...]:
    return tuple((a + b) % 1 for a, b in zip(s, g, strict=True))


def _inverse(upper: Basis) -> list[list[Fraction]]:
    """Return the inverse of a square upper triangular matrix."""
    count = len(upper)
    inverse = [[Fraction(int(i == j)) for j in range(count)] for i in range(count)]
    for i in reversed(range(count)):
        for k in range(i + 1, count):
            inverse[i] = [a - upper[i][k] * b for a, b in zip(inverse[i], inverse[k], strict=True)]
        inverse[i] = [a / upper[i][i] for a in inverse[i]]
    return inverse


def _combined(group: list[tuple[Fraction, ...]], repeats: list[int]) -> tuple[tuple[Fraction, ...], ...]:
    """Return generators of a group modulo the repeats along the axes, smallest translations first."""

    def reduced(s: tuple[Fraction, ...]) -> tuple[Fraction, ...]:
        return tuple(a % Fraction(1, r) for a, r in zip(s, repeats, strict=True))

    left = {reduced(s) for s in group} - {(Fraction(0),) * len(repeats)}
    made = {(Fraction(0),) * len(repeats)}
    generators = []
    # First those of the largest order: fewest generators are needed then.
    for s in sorted(left, key=lambda s: (-lcm(*(a.denominator for a in s)), s)):
        if s not in made:
            generators.append(s)
            turns = range(lcm(*(a.denominator for a in s)))
            steps = [tuple(k * a for a in s) for k in turns]
            made = {reduced(_sum(m, step)) for m in made for step in steps}
    return tuple(generators)
