"""What kind of state a field is: how it moves, what it repeats, which symmetries of its law it has.

All is judged on Fourier coefficients. A field that repeats r times has energy at multiples of r only; one
that is at rest in a moving frame has no time derivative there; a reflection is a symmetry where the image,
shifted as well as it can be, is the field itself.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.classify.alignment import TURN, Aligner
from lattice.classify.mirror import mirrored, mirrored_frame
from lattice.classify.motion import Motion, find_motion, slope, turned
from lattice.classify.spectra import Real, Spectra
from lattice.classify.translations import Translations, find_translations
from lattice.geometry.blocks import Blocks
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law, Reflection
from lattice.laws.symmetry import symmetries_at

if TYPE_CHECKING:
    from mpi4py import MPI

TOLERANCE = 1e-5
"""Root mean square of what may be missing from a property, over that of the field about its means.

A state solved to a residual of 1e-10 has such a property to 1e-7 or better where it has it: the residual
over the slowest rate of decay, which is 1e-3 or faster. What a state lacks it lacks by far more, but next to
the point where a family of states loses the property; there it lacks it by the root of the distance, so
1e-5 tells apart parameters that differ by 1e-10."""
FLAT = 1e-12
"""Root mean square below which nothing but rounding is left, next to the largest mean (or 1)."""


@dataclass(frozen=True)
class StateReflection:
    """A reflection of the law that leaves a state unchanged: u(. + shift) = S u(reflected .).

    Parameters
    ----------
    reflection : Reflection
    shift : dict of str to float
        Fractions of the periods by axis name, from 0 to below 1; half of that of a reflected axis is where
        it is reflected.
    angle : float
        Radians by which the pair of components that may be turned is turned.
    """

    reflection: Reflection
    shift: dict[str, float]
    angle: float = 0.0


@dataclass(frozen=True)
class Classification:
    """What a field is found to be.

    Parameters
    ----------
    kind : str
        "constant", "steady", "travelling" (at rest in a frame that moves or turns), "periodic", or
        "relative periodic": after a period it is itself only in the moving or turning frame.
    repeats : tuple of int
        (rt, ry, rx): how often the field repeats along each axis; 1 where it does not vary.
    combined : tuple of dict of str to str
        Translations in time and space at once that leave it unchanged, as fractions of the whole periods
        by axis; those that are no repeats.
    reflections : tuple of StateReflection
        The law's reflections that leave it unchanged.
    velocity : dict of str to float
        drift_x, drift_y, rotation of the frame in which it is at rest or periodic.
    fluctuation : float
        Root mean square about the means of the components.
    time_change, frame_change : float
        Root mean square of the time derivative in the given frame and in the frame of `velocity`, over that
        of all derivatives, each with its period as the unit.
    return_change : float
        Root mean square change over the smallest period in the frame of the laboratory, over `fluctuation`.
    tolerance : float
        What counted as no change.
    """

    kind: str
    repeats: tuple[int, int, int]
    combined: tuple[dict[str, str], ...]
    reflections: tuple[StateReflection, ...]
    velocity: dict[str, float]
    fluctuation: float
    time_change: float
    frame_change: float
    return_change: float
    tolerance: float

    @property
    def repeats_itself(self) -> bool:
        """Whether the field holds a smaller one several times."""
        return self.repeats != (1, 1, 1)

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return asdict(self)

    @classmethod
    def of_record(cls, record: Mapping[str, Any]) -> Classification:
        """Return the classification that `record` wrote, also after JSON."""
        content = dict(record)
        content["repeats"] = tuple(content["repeats"])
        content["combined"] = tuple(content["combined"])
        content["reflections"] = tuple(_reflection_of(r) for r in content["reflections"])
        return cls(**content)


def _reflection_of(record: Mapping[str, Any]) -> StateReflection:
    reflection = dict(record["reflection"])
    reflection["signs"] = tuple(reflection["signs"])
    return StateReflection(Reflection(**reflection), record["shift"], record["angle"])


def classify(
    law: Law,
    lattice: Lattice,
    values: Mapping[str, float],
    owned: Real,
    blocks: Blocks,
    comm: MPI.Intracomm,
    tolerance: float = TOLERANCE,
) -> Classification:
    """Return what kind of state a distributed field is.

    Collective. No rank gathers the field unless the lattice is too small for shared transforms.

    Parameters
    ----------
    law : Law
    lattice : Lattice
    values : mapping of str to float
        Period, lengths, drifts, rotation and parameters.
    owned : ndarray, shape blocks.shape
        This rank's part of the field, without halo.
    blocks : Blocks
        How the field is distributed.
    comm : MPI.Intracomm
        That of the blocks.
    tolerance : float
        Relative root mean square below which a change is none.

    Returns
    -------
    Classification
    """
    assert comm.size == blocks.comm.size
    assert lattice.shape == blocks.lattice.shape
    spectra = Spectra(blocks)
    try:
        return _Judge(law, values, spectra, spectra.whole_or_own(owned), tolerance).verdict()
    finally:
        spectra.destroy()


class _Judge:
    """The questions asked of one field."""

    def __init__(
        self, law: Law, values: Mapping[str, float], spectra: Spectra, field: Real, tolerance: float
    ) -> None:
        self.law, self.values, self.spectra, self.field = law, values, spectra, field
        self.tolerance = tolerance
        self.coefficients = spectra.forward(field)
        self.energies = spectra.energies(self.coefficients)
        is_mean = spectra.is_mean()
        self.fluctuation = float(np.sqrt(spectra.total(self.energies[~is_mean].sum())))
        self.mean = float(np.sqrt(spectra.total(self.energies[is_mean].sum())))
        self.energies[is_mean] = 0.0
        self.pair = pair_of(law)
        self.movable = movable_axes(law)

    def verdict(self) -> Classification:
        pair = None if self._pair_is_still() else self.pair
        motion = find_motion(self.spectra, self.coefficients, self.movable, pair)
        scale = max(motion.gradient, self.mean if pair else 0.0)
        if self.fluctuation <= FLAT * max(1.0, self.mean) and not self._turns():
            return self._made("constant", motion, scale, Translations((1,) * len(self.spectra.axes), (), ()))
        at_rest = motion.rest <= self.tolerance * scale
        added = at_rest and motion.change > self.tolerance * scale
        velocity = self._velocity(motion if added else None)
        skip = ("t",) if at_rest else ()
        found = find_translations(self.spectra, self.energies, self.tolerance * self.fluctuation, skip)
        if at_rest:
            kind = "travelling" if self._moves(velocity) else "steady"
            return self._made(kind, motion, scale, found, velocity)
        change = self._return_change(found)
        kind = "relative periodic" if change > self.tolerance else "periodic"
        return self._made(kind, motion, scale, found, velocity, change)

    def _pair_is_still(self) -> bool:
        """Tell whether turning changes nothing: there is no pair, or it is zero."""
        if self.pair is None:
            return True
        square = self.spectra.total(self.spectra.energies(turned(self.coefficients, self.pair)).sum())
        return float(square) <= (FLAT * max(1.0, self.mean, self.fluctuation)) ** 2

    def _turns(self) -> bool:
        return not self._pair_is_still() and self.values.get("rotation", 0.0) != 0.0

    def _velocity(self, motion: Motion | None) -> dict[str, float]:
        """Return the velocity of the frame, with what the field's own motion adds to it."""
        names = [f"drift_{axis}" for axis in ("x", "y") if axis in self.movable]
        velocity = {name: self.values.get(name, 0.0) for name in names}
        if self.pair:
            velocity["rotation"] = self.values.get("rotation", 0.0)
        for name, rate in (motion.rates if motion else {}).items():
            period = self.values.get("period", 1.0)
            if name == "rotation":
                velocity["rotation"] += rate / period
            else:
                velocity[f"drift_{name}"] += rate * self.values[f"length_{name}"] / period
        return velocity

    def _moves(self, velocity: Mapping[str, float]) -> bool:
        """Tell whether a field at rest in a frame changes in the laboratory, within a unit of time."""
        rate = np.zeros_like(self.coefficients)
        for axis in self.movable:
            scale = TURN / self.values[f"length_{axis}"]
            rate += velocity[f"drift_{axis}"] * scale * 1j * slope(self.spectra, self.coefficients, axis)
        if self.pair:
            rate -= velocity["rotation"] * turned(self.coefficients, self.pair)
        size = np.sqrt(self.spectra.total(self.spectra.energies(rate).sum()))
        return bool(size > self.tolerance * max(self.fluctuation, self.mean if self.pair else 0.0))

    def _return_change(self, found: Translations) -> float:
        """Return the relative change over the smallest period, in the frame of the laboratory."""
        period = self.values.get("period", 1.0) / found.repeats[self.spectra.axes.index("t")]
        aligner = Aligner(self.spectra, self.movable, self.pair)
        shift = tuple(
            -self.values.get(f"drift_{axis}", 0.0) * period / self.values[f"length_{axis}"]
            if axis in self.movable
            else 0.0
            for axis in self.spectra.axes
        )
        angle = self.values.get("rotation", 0.0) * period if self.pair else 0.0
        change = aligner.moved(self.coefficients, shift, angle) - self.coefficients
        square = self.spectra.total(self.spectra.energies(change).sum())
        return float(np.sqrt(square)) / max(self.fluctuation, self.mean if self.pair else 0.0)

    def _made(
        self,
        kind: str,
        motion: Motion,
        scale: float,
        found: Translations,
        velocity: dict[str, float] | None = None,
        change: float = 0.0,
    ) -> Classification:
        repeats = dict(zip(self.spectra.axes, found.repeats, strict=True))
        names = self.spectra.axes
        return Classification(
            kind=kind,
            repeats=(repeats.get("t", 1), repeats.get("y", 1), repeats.get("x", 1)),
            combined=tuple(
                {n: str(s) for n, s in zip(names, shift, strict=True) if s} for shift in found.combined
            ),
            reflections=() if kind == "constant" else self._reflections(kind, found),
            velocity=velocity or self._velocity(None),
            fluctuation=self.fluctuation,
            time_change=motion.change / scale if scale > 0.0 else 0.0,
            frame_change=motion.rest / scale if scale > 0.0 else 0.0,
            return_change=change,
            tolerance=self.tolerance,
        )

    def _reflections(self, kind: str, found: Translations) -> tuple[StateReflection, ...]:
        shiftable = (*(() if kind == "steady" else ("t",)), *self.movable)
        aligner = Aligner(self.spectra, shiftable, self.pair)
        judged = (self._reflection(r, aligner, found) for r in images_of(self.law, self.values))
        return tuple(r for r in judged if r is not None)

    def _reflection(
        self, reflection: Reflection, aligner: Aligner, found: Translations
    ) -> StateReflection | None:
        """Return how a reflection leaves the field unchanged, None where it does not."""
        if not self._frame_allows(reflection):
            return None
        image = self.spectra.forward(mirrored(self.spectra.blocks, self.field, reflection))
        best = aligner.align(image, self.coefficients)
        if not best.distance <= self.tolerance:
            return None
        shift = _smallest(best.shift, found)
        return StateReflection(reflection, dict(zip(self.spectra.axes, shift, strict=True)), best.angle)

    def _frame_allows(self, reflection: Reflection) -> bool:
        """Tell whether the image moves with the same frame; a frame that matters must not be turned round."""
        image = mirrored_frame(self.law, self.values, reflection)
        return not self._moves({n: image.get(n, 0.0) - self.values.get(n, 0.0) for n in self._velocity(None)})


def _smallest(shift: tuple[float, ...], found: Translations) -> tuple[float, ...]:
    """Return the smallest of the shifts that differ by a translation of the field, time first."""
    choices = [tuple((s + float(g)) % 1.0 for s, g in zip(shift, move, strict=True)) for move in found.group]
    rounded = [tuple(0.0 if s > 1.0 - 1e-6 else s for s in choice) for choice in choices or [shift]]
    return min(rounded, key=lambda choice: [round(s, 6) for s in choice])


def images_of(law: Law, values: Mapping[str, float]) -> list[Reflection]:
    """Return a law's reflections at its parameters' values, one of each two that differ by half a turn."""
    pair = pair_of(law)
    found = symmetries_at(law, values).reflections
    return [r for r in found if pair is None or r.signs[pair[0]] > 0]


def pair_of(law: Law) -> tuple[int, int] | None:
    """Return the indices of the components of the law's turning pair."""
    if law.rotating_pair is None:
        return None
    first, second = law.rotating_pair
    return law.components.index(first), law.components.index(second)


def movable_axes(law: Law) -> tuple[str, ...]:
    """Return the space axes along which a state of the law may be shifted."""
    return tuple(axis for axis, homogeneous in law.symmetries.homogeneous.items() if homogeneous)
