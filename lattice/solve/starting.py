"""The start of a run, and what its residual says about the stages it needs."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from lattice.solve.legs import STAGES
from lattice.solve.scrambling import scramble
from lattice.spectral.transform import Transform

if TYPE_CHECKING:
    from collections.abc import Callable

    from lattice.laws.law import Law
    from lattice.system.system import System

ROUGH = 0.03
"""Residual of a start, as a share of that of foreign phases, above which damped steps come first."""


GIVEN = ("state", "waves", "array")
"""Starts that the user has made to be near a state."""


def default_stages(
    system: System, x: Any, kind: str, nested: int, report: Callable[[str], None]
) -> tuple[str, ...]:
    """Return the stages for a start whose job does not say, and report why. Collective."""
    if system.lattice.nt == 1 or nested or kind in GIVEN:
        return ("newton",)
    if system.subspace:
        report(f"stages {', '.join(STAGES)}: the start is not one from a state")
        return STAGES
    share = roughness(system, x)
    stages = STAGES if share > ROUGH else ("newton",)
    report(
        f"stages {', '.join(stages)}: the start's residual is {100 * share:.2g} % of that of a field of its"
        f" spectrum that knows nothing of the law, {'more than' if share > ROUGH else 'at most'}"
        f" {100 * ROUGH:.2g} %"
    )
    return stages


def roughness(system: System, x: Any) -> float:
    """Return the residual of a field as a share of that of one with its spectrum and foreign phases.

    Near 0 close to a state, near 1 where the field knows nothing of the law. Collective.
    """
    transform = Transform(system.blocks)
    foreign, out, field = system.vector(), system.vector(), system.blocks.vector()
    count = system.blocks.owned_size
    own = _residual(system, x, out)
    field.getArray()[:] = x.getArray(readonly=1)[:count]
    scramble(transform, field, field)
    x.copy(foreign)
    foreign.getArray()[:count] = field.getArray(readonly=1)
    wanted = _residual(system, foreign, out)
    for item in (transform, foreign, out, field):
        item.destroy()
    return own / wanted if wanted > 0.0 else 0.0


def _residual(system: System, x: Any, out: Any) -> float:
    """Return the norm of the law's residual at a vector of unknowns."""
    system.residual(x, out)
    field = system.blocks.vector()
    field.getArray()[:] = out.getArray(readonly=1)[: system.blocks.owned_size]
    size = float(field.norm())
    field.destroy()
    return size


def loose_scalars(law: Law, given: tuple[str, ...] | None) -> tuple[str, ...]:
    """Return the scalars that move in the damped stage only: those given, else lengths of like axes."""
    if given is not None:
        return given
    return tuple(f"length_{a}" for a in "xy"[: law.dimensions] if law.symmetries.homogeneous[a])
