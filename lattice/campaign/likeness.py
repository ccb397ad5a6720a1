"""Whether two stored states are one up to the law's symmetries.

First by what no symmetry changes: period, lengths, mean square, and the energy of the longest waves, folded
over the signs of their wavenumbers. These are kept in a member's record, so that states whose field is gone
are compared, too.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from lattice.store.statefile import StateFile
from lattice.store.statemeta import StateMeta

SIZES = ("period", "length_x", "length_y")
SAME_SIZE = 1e-3
"""Largest relative difference of a period, length or parameter, and of the mean square, of one state on two
lattices: differences of order 4 at usual spacings leave up to some 3e-4 (README's table of refinement)."""
SAME_FIELD = 1e-2
"""Largest distance of two fields, relative to the fields, for the same reason."""
MODES_2, MODES_3 = 8, 5
"""Waves per axis whose energy is kept, on lattices of two and of three axes."""


def fingerprint(path: Path) -> list[float]:
    """Return the amplitudes of the longest waves of a stored field, all components together.

    Unchanged by shifts, by reflections and by turning a pair of components; relative to the whole.

    Parameters
    ----------
    path : Path
        State file; read in bounded memory.
    """
    with StateFile(path) as file:
        counts = _counts(file.meta)
        energy = np.zeros(counts)
        for component in file.meta.components:
            energy += _folded(_modes(file, component, counts))
    total = float(np.sqrt(energy.sum()))
    return [round(float(a) / total, 6) for a in np.sqrt(energy).ravel()] if total > 0.0 else []


def _counts(meta: StateMeta) -> tuple[int, int, int]:
    most = MODES_3 if meta.dimensions == 2 and meta.lattice.nt > 1 else MODES_2
    nt, ny, nx = (max(1, min(most, (n + 1) // 2)) for n in meta.lattice.shape)
    return nt, ny, nx


def _modes(file: StateFile, component: str, counts: Sequence[int]) -> npt.NDArray[np.complex128]:
    """Return Fourier coefficients: signed in t and y, from 0 up in x."""
    shape = file.meta.lattice.shape
    over_t, over_y = (_waves(n, range(1 - m, m)) for n, m in zip(shape[:2], counts[:2], strict=True))
    over_x = _waves(shape[2], range(counts[2]))
    result = np.zeros((len(over_t), len(over_y), len(over_x)), complex)
    for first, slab in file.slabs(component):
        part = np.einsum("tyx,kx,jy->tjk", slab, over_x, over_y, optimize=True)
        result += np.einsum("tjk,lt->ljk", part, over_t[:, first : first + len(slab)])
    result /= float(np.prod(shape))
    return result


def _waves(nodes: int, numbers: range) -> npt.NDArray[np.complex128]:
    waves: npt.NDArray[np.complex128] = np.exp(
        -2j * np.pi * np.outer(list(numbers), np.arange(nodes)) / nodes
    )
    return waves


def _folded(modes: npt.NDArray[np.complex128]) -> npt.NDArray[np.float64]:
    """Return the energy by the sizes of the wavenumbers."""
    energy: npt.NDArray[np.float64] = np.square(np.abs(modes))
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


def alike(one: Mapping[str, Any], other: Mapping[str, Any]) -> bool:
    """Whether two records' numbers may be of one state: everything that no symmetry changes agrees."""
    if one.get("law") != other.get("law"):
        return False
    return _sizes_agree(one, other) and _fingerprints_agree(one, other)


def _sizes_agree(one: Mapping[str, Any], other: Mapping[str, Any]) -> bool:
    mine, theirs = one.get("scalars", {}), other.get("scalars", {})
    names = (set(mine) | set(theirs)) - _moving(mine) - _moving(theirs)
    if any(not _near(mine.get(name), theirs.get(name)) for name in names):
        return False
    return _near(one.get("mean_square"), other.get("mean_square"))


def _moving(scalars: Mapping[str, Any]) -> set[str]:
    """Names of scalars that reflections change the sign of, or that vanish at a solution."""
    return {name for name in scalars if name.startswith(("drift_", "source_")) or name == "rotation"}


def _near(a: float | None, b: float | None) -> bool:
    if a is None or b is None:
        return a is b
    return math.isclose(a, b, rel_tol=SAME_SIZE, abs_tol=1e-12)


def _fingerprints_agree(one: Mapping[str, Any], other: Mapping[str, Any]) -> bool:
    mine, theirs = np.asarray(one.get("fingerprint", [])), np.asarray(other.get("fingerprint", []))
    if mine.shape != theirs.shape:
        return False
    return bool(np.linalg.norm(mine - theirs) <= SAME_FIELD)
