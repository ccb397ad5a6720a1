"""What no symmetry changes about a state: by these numbers two states may be one, or are not.

Period, lengths, mean square, and the energy of the longest waves, folded over the signs of their wavenumbers;
of the smallest state that a state repeats. They are kept in a member's record, so that states are compared
whose fields are gone.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from lattice.store.statefile import StateFile
from lattice.store.statemeta import StateMeta

AT_REST = ("steady", "travelling", "constant")
"""Kinds of states that are at rest in a frame: their period says nothing, one level is all of them."""
MODES_2, MODES_3 = 8, 5
"""Waves per axis whose energy is kept, on lattices of two and of three axes."""


@dataclass(frozen=True)
class Tolerance:
    """How far two sets of numbers may be apart.

    Parameters
    ----------
    size : float
        Relative difference of periods, lengths, parameters and mean squares.
    waves : float
        Distance of the amplitudes of the longest waves, relative to all.
    """

    size: float
    waves: float


POSSIBLE = Tolerance(1e-2, 2e-2)
"""Beyond these two states are two, also if they are solved on coarse and on fine lattices."""
CERTAIN = Tolerance(1e-3, 1e-2)
"""Within these two states count as one where no fields can be compared."""

Complex = npt.NDArray[np.complex128]
Real = npt.NDArray[np.float64]


def fingerprint(path: Path, kind: str, repeats: Sequence[int]) -> list[float]:
    """Return the amplitudes of the longest waves of a stored field, all components together.

    Unchanged by shifts, by reflections and by turning a pair of components; relative to all of them.

    Parameters
    ----------
    path : Path
        State file; read in bounded memory.
    kind : str
        As `lattice.classify` has it.
    repeats : sequence of int
        How often the field repeats along (t, y, x).
    """
    with StateFile(path) as file:
        still = kind in AT_REST
        counts = _counts(file.meta, repeats, still)
        energy = np.zeros(counts)
        for component in file.meta.components:
            energy += _folded(_modes(file, component, counts, repeats, still))
    total = float(np.sqrt(energy.sum()))
    return [round(float(a) / total, 6) for a in np.sqrt(energy).ravel()] if total > 0.0 else []


def _counts(meta: StateMeta, repeats: Sequence[int], still: bool) -> tuple[int, int, int]:
    most = MODES_3 if meta.dimensions == 2 and not still else MODES_2
    shape = zip(meta.lattice.shape, repeats, strict=True)
    nt, ny, nx = (max(1, min(most, (n // r + 1) // 2)) for n, r in shape)
    return (1 if still else nt), ny, nx


def _modes(
    file: StateFile, component: str, counts: Sequence[int], repeats: Sequence[int], still: bool
) -> Complex:
    """Return Fourier coefficients at multiples of the repeats: signed in t and y, from 0 up in x."""
    nt, ny, nx = file.meta.lattice.shape
    over_t = _waves(nt, [k * repeats[0] for k in range(1 - counts[0], counts[0])])
    over_y = _waves(ny, [k * repeats[1] for k in range(1 - counts[1], counts[1])])
    over_x = _waves(nx, [k * repeats[2] for k in range(counts[2])])
    result = np.zeros((len(over_t), len(over_y), len(over_x)), complex)
    slabs = [(0, file.levels(component, 0, 1))] if still else file.slabs(component)
    for first, slab in slabs:
        part = np.einsum("tyx,kx,jy->tjk", slab, over_x, over_y, optimize=True)
        result += np.einsum("tjk,lt->ljk", part, over_t[:, first : first + len(slab)])
    result /= float(ny * nx * (1 if still else nt))
    return result


def _waves(nodes: int, numbers: Sequence[int]) -> Complex:
    waves: Complex = np.exp(-2j * np.pi * np.outer(numbers, np.arange(nodes)) / nodes)
    return waves


def _folded(modes: Complex) -> Real:
    """Return the energy by the sizes of the wavenumbers."""
    energy: Real = np.square(np.abs(modes))
    energy[:, :, 1:] *= np.float64(2.0)  # the waves of a real field with negative wavenumbers in x
    for axis in (0, 1):
        middle = energy.shape[axis] // 2
        plus = np.take(energy, range(middle, energy.shape[axis]), axis)
        minus = np.flip(np.take(energy, range(middle), axis), axis)
        rest = [slice(None)] * 3
        rest[axis] = slice(1, None)
        plus[tuple(rest)] += minus
        energy = plus
    return energy


@dataclass(frozen=True)
class Likeness:
    """The numbers of one state that no symmetry changes.

    Parameters
    ----------
    law : str
    sizes : dict of str to float
        Period, lengths, parameters, mean square.
    waves : tuple of float
        See `fingerprint`.
    """

    law: str
    sizes: dict[str, float]
    waves: tuple[float, ...]

    @classmethod
    def of(cls, numbers: Mapping[str, Any], kind: str, repeats: Sequence[int]) -> Likeness:
        """Return those of a member's record."""
        sizes = {name: value for name, value in (numbers.get("scalars") or {}).items() if not _moving(name)}
        for name, count in zip(("period", "length_y", "length_x"), repeats, strict=False):
            if name in sizes:
                sizes[name] /= count
        if kind in AT_REST:
            sizes.pop("period", None)
        sizes["mean_square"] = numbers.get("mean_square") or 0.0
        return cls(str(numbers.get("law")), sizes, tuple(numbers.get("fingerprint", ())))

    def near(self, other: Likeness, tolerance: Tolerance) -> bool:
        """Whether both may be one state."""
        if self.law != other.law or self.sizes.keys() != other.sizes.keys():
            return False
        if any(_apart(value, other.sizes[name]) > tolerance.size for name, value in self.sizes.items()):
            return False
        mine, theirs = np.asarray(self.waves), np.asarray(other.waves)
        return mine.shape == theirs.shape and bool(np.linalg.norm(mine - theirs) <= tolerance.waves)


def _moving(name: str) -> bool:
    """Whether reflections change a scalar's sign, or it vanishes at a solution."""
    return name.startswith(("drift_", "source_")) or name == "rotation"


def _apart(a: float, b: float) -> float:
    return abs(a - b) / max(abs(a), abs(b), 1e-300)
