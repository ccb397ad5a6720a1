"""The largest stable step of a march: what the explicit part of the scheme bears.

Errors of one step are measured on the flow itself, whose shortest waves are faint; whether these waves
would grow has to be asked for.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from lattice.starts.stepper import Stepper

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

EXPLICIT_REACH = 2.0
"""Largest rate times step that is taken as stable; the classical scheme of order 4 bears 2.8 on the
imaginary axis (common knowledge: sqrt(8)), and the flow's velocities may still grow."""
ITERATIONS = 12
MEASURED = 4
"""Iterations of the power method, and those at its end over which the growth is averaged."""
DIFFERENCE = 1e-6
"""Size of the disturbance, relative to the flow's."""
HALVINGS = 40


def stable_step(stepper: Stepper, spectrum: Complex, dt: float) -> float:
    """Return `dt`, halved until the waves of every length are stable about the flow at this instant.

    A wave that the linear part damps at the rate d feels the explicit part over a time of at most 1/d, so
    that the rates of the linearised explicit part count times `min(dt, 1/d)`; the largest such product, by
    the power method, must be within the reach of the scheme. For advection it is max|u| times the largest
    wavenumber that viscosity does not damp faster.

    Parameters
    ----------
    stepper : Stepper
        Of the law and slice; its own step is not used.
    spectrum : ndarray
        The flow at one instant.
    dt : float
        A step that is accurate enough.
    """
    damping = np.maximum(0.0, -stepper.operator.growth_rates())
    for _ in range(HALVINGS):
        if _reach(stepper, spectrum, dt, damping) <= EXPLICIT_REACH:
            break
        dt *= 0.5
    return dt


def _reach(stepper: Stepper, spectrum: Complex, dt: float, damping: Real) -> float:
    """Return the largest rate of the explicit part times the time over which it acts."""
    felt = dt / np.maximum(1.0, damping * dt / EXPLICIT_REACH)
    size = float(np.linalg.norm(spectrum))
    if not (np.isfinite(size) and size > 0.0):
        return 0.0
    base = stepper.operator.nonlinear(spectrum)
    wave = _any_wave(stepper, spectrum.shape)
    growth = []
    with np.errstate(over="ignore", invalid="ignore"):
        for _ in range(ITERATIONS):
            disturbed = stepper.operator.nonlinear(spectrum + DIFFERENCE * size * wave)
            later = felt * (disturbed - base) / (DIFFERENCE * size)
            growth.append(float(np.linalg.norm(later)))
            if not (np.isfinite(growth[-1]) and growth[-1] > 0.0):
                return 0.0 if growth[-1] == 0.0 else float("inf")
            wave = later / growth[-1]
    return float(np.exp(np.mean(np.log(growth[-MEASURED:]))))


def _any_wave(stepper: Stepper, shape: tuple[int, ...]) -> Any:
    """Return a disturbance of waves of all lengths, of norm 1, always the same."""
    parts = np.random.default_rng(0).standard_normal((2, *shape))
    wave = parts[0] + 1j * parts[1]
    stepper.modes.restore_symmetry(wave)
    return wave / np.linalg.norm(wave)
