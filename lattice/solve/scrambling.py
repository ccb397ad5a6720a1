"""Fields with the spectrum of a given one, but phases that know nothing of it.

The phases are made from the mode numbers, not from a stream of random numbers, so that a field is the same
on any number of ranks.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.spectral.transform import Transform

# Any irrational numbers serve; cubes of mode numbers times such are equidistributed (Weyl 1916).
STEPS = (math.sqrt(2.0), math.sqrt(3.0), math.sqrt(5.0), math.sqrt(7.0))


def scramble(transform: Transform, field: Any, out: Any, number: int = 0) -> None:
    """Set `out` to a field with the moduli of `field`'s Fourier coefficients and other phases.

    Collective.

    Parameters
    ----------
    transform : Transform
    field, out : PETSc.Vec
        Field vectors of the transform's blocks; they may be the same.
    number : int
        Other numbers give other phases.
    """
    spectrum = transform.forward(field)
    spectrum *= np.exp(2j * np.pi * _turns(transform, spectrum.shape[-1], number))
    transform.backward(spectrum, out)


def _turns(transform: Transform, components: int, number: int) -> NDArray[np.float64]:
    """Return the phase of every mode and component in turns, odd in the mode numbers as a real field's."""
    modes = [m.astype(float) for m in transform.modes()]
    mixed = sum((k + 2 + number % 7) * m for k, m in enumerate(modes))
    turns = STEPS[0] * np.asarray(mixed) ** 3
    for step, m in zip(STEPS[1:], modes, strict=False):
        turns = turns + (step + 0.1 * number) * m**3
    of_component = np.arange(1, components + 1) * STEPS[0] * np.sign(np.asarray(mixed))[..., None]
    return np.asarray((turns[..., None] + of_component) % 1.0)
