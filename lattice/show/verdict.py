"""Whether the residual of a state is small enough, in words."""

from __future__ import annotations

import math

from lattice.store.statemeta import StateMeta

WANTED_RESIDUAL = 1e-10
"""Residual from which on a state counts as a solution of its lattice equations."""
USELESS_RESIDUAL = 1e-6
"""Residual above which it certainly is none."""


def is_solution(meta: StateMeta) -> bool:
    """Whether the residual is known and small enough for a solution of the lattice equations."""
    return math.isfinite(meta.residual_rms) and meta.residual_rms <= WANTED_RESIDUAL


def residual_text(meta: StateMeta) -> str:
    """Return the residual and whether it meets what is wanted, in words."""
    if not math.isfinite(meta.residual_rms):
        return f"not computed: not known to meet {WANTED_RESIDUAL:.0e}"
    largest = f", largest {meta.residual_max:.1e}" if math.isfinite(meta.residual_max) else ""
    numbers = f"rms {meta.residual_rms:.1e}{largest}"
    if is_solution(meta):
        return f"{numbers}: meets {WANTED_RESIDUAL:.0e}"
    advice = ", not a solution" if not meta.residual_rms <= USELESS_RESIDUAL else ""
    return f"{numbers}: does NOT meet {WANTED_RESIDUAL:.0e}{advice}"
