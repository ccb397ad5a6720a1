"""Shift a field so that the mirrors of a subspace lie where the field is most nearly symmetric."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from lattice.classify.alignment import Aligner
from lattice.classify.mirror import mirrored
from lattice.classify.spectra import Complex, Real, Spectra
from lattice.geometry.blocks import Blocks
from lattice.geometry.subspace import Subspace
from lattice.laws.law import Law, Reflection

if TYPE_CHECKING:
    from lattice.system.system import System


INSIDE = 1e-10
"""Share of a field's size by which it may miss a symmetry that it has."""


def centred(law: Law, subspace: Subspace, owned: Real, blocks: Blocks) -> tuple[Real, float]:
    """Return this rank's part of a whole field shifted to the mirrors, and what is not symmetric of it.

    Collective. Only axes that a symmetry mirrors are shifted along. Mirrors lie half a spacing before the
    first node.

    Parameters
    ----------
    law : Law
    subspace : Subspace
    owned : ndarray, shape blocks.shape
    blocks : Blocks
        Of the whole lattice.

    Returns
    -------
    owned : ndarray, shape blocks.shape
    distance : float
        Root mean square of the field less its image under the least fitting symmetry, over that of the field
        about its means.
    """
    spectra = Spectra(blocks)
    coefficients = spectra.forward(spectra.whole_or_own(owned))
    shift = dict.fromkeys(spectra.axes, 0.0)
    distances = [0.0]
    for reflection, moved in _symmetries(subspace):
        axes = tuple(axis for axis in "yx" if getattr(reflection, axis))
        aligner = Aligner(spectra, axes, None)
        whole = spectra.backward(coefficients)
        image = spectra.forward(mirrored(spectra.blocks, whole, reflection))
        later = aligner.moved(coefficients, tuple(moved.get(axis, 0.0) for axis in spectra.axes), 0.0)
        best = aligner.align(image, later)
        distances.append(best.distance)
        for axis, amount in zip(spectra.axes, best.shift, strict=True):
            if axis in axes and not shift[axis]:
                # u(. + s) is the image: the mirror is at s/2.
                shift[axis] = amount / 2.0 + 0.5 / spectra.nodes[spectra.axes.index(axis)]
    found = _shifted(spectra, coefficients, shift)
    result = found if spectra.blocks is blocks else found[blocks.block.slices]
    spectra.destroy()
    return np.ascontiguousarray(result), max(distances)


def _symmetries(subspace: Subspace) -> list[tuple[Reflection, dict[str, float]]]:
    """Return every symmetry as a reflection and the fractions of the periods that come with it."""
    found: list[tuple[Reflection, dict[str, float]]] = []
    if subspace.mirror_x is not None:
        found.append((Reflection(True, False, subspace.mirror_x), {}))
    if subspace.mirror_y is not None:
        found.append((Reflection(False, True, subspace.mirror_y), {}))
    half = subspace.half_period
    if half is not None:
        moved = {"t": 0.5, "y": 0.5 * half.shift_y, "x": 0.5 * half.shift_x}
        found.append((Reflection(half.mirror_x, half.mirror_y, half.signs), moved))
    return found


def _shifted(spectra: Spectra, coefficients: Complex, shift: dict[str, float]) -> Real:
    return spectra.backward(Aligner(spectra, (), None).moved(coefficients, tuple(shift.values()), 0.0))


def into_subspace(system: System, owned: Real, report: Callable[[str], None]) -> Real:
    """Return this rank's part of the unknown field for a whole start: the start itself without a subspace.

    Collective. In a subspace the start is shifted to the mirrors and made symmetric, unless it is so already.
    """
    if system.subspace is None or _is_inside(system, owned):
        return system.project(owned)
    moved, distance = centred(system.law, system.subspace, owned, system.whole_blocks)
    report(
        f"subspace: {system.blocks.size} of {system.whole_blocks.size} numbers carry the field; the start is "
        f"symmetric to {distance:.1e} of its size"
    )
    return system.project(moved)


def _is_inside(system: System, owned: Real) -> bool:
    """Tell whether a whole field has the subspace's symmetries, to rounding. Collective."""
    x = system.vector()
    system.pack(system.project(owned), {}, x)
    change = system.whole_field(x) - owned
    x.destroy()
    squares = np.array([float((change**2).sum()), float((owned**2).sum())])
    off, size = system.comm.allreduce(squares)
    return bool(off <= INSIDE**2 * size)
