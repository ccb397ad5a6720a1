"""The canonical representative of a state, and whether two states are the same up to symmetry.

Shifts in time and along homogeneous axes, the turn of a pair of components, and the law's reflections move
a state onto others that are the same for any purpose. The canonical one has the largest value of its first
component at the first node of every axis (the largest modulus, real, where components may be turned).
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from lattice.classify.alignment import Aligner
from lattice.classify.distributed import DistributedState, carried, cut, one_level, stored_state
from lattice.classify.kind import TOLERANCE, classify, images_of, movable_axes, pair_of
from lattice.classify.mirror import mirrored, mirrored_frame
from lattice.classify.spectra import Complex, Spectra
from lattice.errors import InputError
from lattice.laws.law import Law, Reflection

if TYPE_CHECKING:
    from mpi4py import MPI

SAME = 1e-3
"""Largest relative difference of two solutions that count as one state on like lattices."""
EQUAL_PEAKS = 1e-6


@dataclass(frozen=True)
class Comparison:
    """How far two states are apart, up to the symmetries of their law.

    Parameters
    ----------
    distance : float
        Root mean square difference of the fields after the best shift, turn and reflection, over the root
        mean square of both about their means; boxes are laid on each other.
    scalars : float
        Largest relative difference of period, lengths and parameters; of a drift that of what is passed in a
        period, in lengths of the box.
    reflection : Reflection, optional
        What the second was reflected by.
    shift : dict of str to float
        What the second was shifted by, as fractions of its periods.
    angle : float
        What it was turned by.
    """

    distance: float
    scalars: float
    reflection: Reflection | None
    shift: dict[str, float]
    angle: float

    def same(self, tolerance: float = SAME) -> bool:
        """Tell whether both are one state; allow for the lattices' errors where those differ."""
        return max(self.distance, self.scalars) <= tolerance


def compare_files(
    first: str | os.PathLike[str], second: str | os.PathLike[str], comm: MPI.Intracomm
) -> Comparison:
    """Compare two stored states up to symmetry, each reduced to what it repeats.

    Collective; the files may have different lattices.

    Raises
    ------
    StateFileError
        If a file cannot be used.
    InputError
        If the states are of different laws.
    """
    with stored_state(first, comm) as a, stored_state(second, comm) as b:
        if a.law.text != b.law.text or a.law.components != b.law.components:
            raise InputError(f"must be of the law of {first} to be compared with it", file=str(second))
        one, other = primitive(a), primitive(b)
        found = compare(one, other)
        one.destroy()
        other.destroy()
    return found


def compare(first: DistributedState, second: DistributedState) -> Comparison:
    """Compare two states of one law up to symmetry, as they are. Collective."""
    if (first.lattice.nt == 1) != (second.lattice.nt == 1):
        return Comparison(np.inf, np.inf, None, {}, 0.0)
    shape = tuple(min(a, b) for a, b in zip(first.lattice.shape, second.lattice.shape, strict=True))
    one, other = carried(first, shape), carried(second, shape)  # type: ignore[arg-type]
    spectra, law = Spectra(one.blocks), first.law
    aligner = Aligner(spectra, ("t", *movable_axes(law)), pair_of(law))
    wanted = spectra.forward(spectra.whole_or_own(one.owned))
    field = spectra.whole_or_own(other.owned)
    found = []
    for reflection in (None, *images_of(law, second.values)):
        image = field if reflection is None else mirrored(spectra.blocks, field, reflection)
        values = second.values if reflection is None else mirrored_frame(law, second.values, reflection)
        best = aligner.align(wanted, spectra.forward(image))
        apart = scalar_difference(law, first.values, values, steady=shape[0] == 1)
        shift = dict(zip(spectra.axes, best.shift, strict=True))
        found.append(Comparison(best.distance, apart, reflection, shift, best.angle))
    for item in (spectra, one, other):
        item.destroy()
    return min(found, key=lambda c: max(c.distance, c.scalars))


def scalar_difference(
    law: Law, first: Mapping[str, float], second: Mapping[str, float], steady: bool
) -> float:
    """Return the largest difference of the scalars of two states, as `Comparison` tells it."""
    sizes = ["length_x", "length_y"][: law.dimensions] + ([] if steady else ["period"])
    apart = [
        abs(first[name] - second[name]) / max(abs(first[name]), abs(second[name]), 1e-300)
        for name in (*sizes, *(p.name for p in law.parameters))
        if first[name] != second[name]
    ]
    period = 1.0 if steady else first["period"]
    for axis in movable_axes(law):
        drifts = [values.get(f"drift_{axis}", 0.0) for values in (first, second)]
        apart.append(abs(drifts[0] - drifts[1]) * period / first[f"length_{axis}"])
    if law.rotating_pair:
        apart.append(abs(first.get("rotation", 0.0) - second.get("rotation", 0.0)) * period / (2.0 * np.pi))
    return max(apart, default=0.0)


def primitive(state: DistributedState, tolerance: float = TOLERANCE) -> DistributedState:
    """Return the smallest state that a state repeats: one level if it is at rest in a frame. Collective."""
    found = classify(
        state.law, state.lattice, state.values, state.owned, state.blocks, state.blocks.comm, tolerance
    )
    part = cut(state, found.repeats)
    if found.kind not in ("steady", "travelling", "constant") or part.lattice.nt == 1:
        return part
    still = one_level(part, found.velocity)
    part.destroy()
    return still


def canonical(state: DistributedState) -> DistributedState:
    """Return the canonical representative of a state, on its lattice. Collective.

    Of the law's reflections the one is taken whose largest value is largest; where that does not decide,
    the one with the larger sum of its first waves, each with its own phase.
    """
    spectra, law = Spectra(state.blocks), state.law
    aligner = Aligner(spectra, ("t", *movable_axes(law)), pair_of(law))
    field = spectra.whole_or_own(state.owned)
    choices = []
    for reflection in (None, *images_of(law, state.values)):
        image = field if reflection is None else mirrored(spectra.blocks, field, reflection)
        coefficients = spectra.forward(image)
        shift, angle, value = aligner.peak(_peaked(coefficients, pair_of(law)))
        moved = aligner.moved(coefficients, shift, angle)
        values = state.values if reflection is None else mirrored_frame(law, state.values, reflection)
        choices.append((value, _mark(spectra, moved), moved, values))
    largest = max(choice[0] for choice in choices)
    equal = [c for c in choices if c[0] >= largest - EQUAL_PEAKS * abs(largest)]
    _, _, moved, values = max(equal, key=lambda choice: choice[1])
    whole = spectra.backward(moved)
    owned = whole if spectra.blocks is state.blocks else whole[state.blocks.block.slices]
    spectra.destroy()
    result = carried(state, state.lattice.shape)
    result.owned[...] = owned
    result.values.update(values)
    return result


def _peaked(coefficients: Complex, pair: tuple[int, int] | None) -> Complex:
    """Return the parts whose peak is the largest value of the first component, or of the pair's modulus."""
    zero = np.zeros(coefficients.shape[:-1], dtype=complex)
    if pair is None:
        return np.stack([coefficients[..., 0], zero, zero])
    return np.stack([zero, coefficients[..., pair[0]], -coefficients[..., pair[1]]])


def _mark(spectra: Spectra, coefficients: Complex) -> float:
    """Return a sum of the first waves that no reflection leaves alone, but one of the state's own."""
    turns = sum(((0.37 + 0.11 * k) * m for k, m in enumerate(spectra.modes)), np.zeros(1))
    sizes = sum((np.abs(m) for m in spectra.modes), np.zeros(1))
    waves = spectra.weights * np.exp(2j * np.pi * turns + 1j - 0.3 * sizes)
    weights = np.exp(-np.arange(coefficients.shape[-1]))
    return float(spectra.total((waves[..., None] * weights * coefficients).real.sum()))
