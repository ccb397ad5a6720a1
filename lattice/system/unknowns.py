"""The unknown scalars of a problem and the condition that fixes each.

Where a state lies in time and along a homogeneous axis is arbitrary, and so is the angle of a pair of
components that may be turned; a phase condition fixes each and leaves room for one free scalar. A mean
that the law leaves open is given and leaves room for a source.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass

from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.kernels.forms import sourced
from lattice.laws.law import Law

Values = dict[str, float]

LOOSE = "loose"
"""The condition of a scalar that none fixes."""
FRAME = {"phase_x": "drift_x", "phase_y": "drift_y", "phase_rotation": "rotation"}
"""The scalar of the frame that moves a state along each phase but that in time."""


@dataclass(frozen=True)
class Unknown:
    """One free scalar, paired with its condition.

    Parameters
    ----------
    name : str
        The scalar.
    condition : str
        "phase_t", "phase_x", "phase_y", "phase_rotation", "mean_<component>" or `LOOSE`.
    unit : float
        Size of a relative change of one: the scalar's unknown is `sqrt(N) * scalar / unit`, so that a
        relative change costs as much as the same change at each of the N unknowns of the field.
    """

    name: str
    condition: str
    unit: float


def pair_unknowns(
    law: Law,
    lattice: Lattice,
    free: Sequence[str],
    values: Mapping[str, float],
    lost: Collection[str] = (),
) -> tuple[Unknown, ...]:
    """Pair every free scalar, and the source of every open mean, with a condition.

    Parameters
    ----------
    law : Law
    lattice : Lattice
    free : sequence of str
    values : mapping of str to float
    lost : collection of str
        Conditions that the fields of a subspace do not leave.

    Raises
    ------
    InputError
        If more scalars are free than conditions can fix, or one that a subspace holds.
    """
    phases = ["phase_t"] if lattice.nt > 1 else []
    phases += [f"phase_{axis}" for axis in "xy"[: law.dimensions] if law.symmetries.homogeneous[axis]]
    phases += ["phase_rotation"] if law.rotating_pair else []
    own = {"period": "phase_t", **{name: phase for phase, name in FRAME.items()}}
    phases = [phase for phase in phases if phase not in lost]
    asked = [name for name in free if not name.startswith("source_")]
    held = [name for name in asked if own.get(name) in lost]
    if held:
        raise InputError(
            f"must not name {held[0]}: solve.subspace holds it at 0; remove it", key="solve.free"
        )
    paired = {name: own[name] for name in asked if own.get(name) in phases}
    left = [phase for phase in phases if phase not in paired.values()]
    for name in asked:
        if name not in paired:
            if not left:
                raise InputError(
                    f"at most {len(phases)} scalars besides sources can be free here, got {len(asked)}; "
                    "hold one",
                    key="solve.free",
                )
            paired[name] = left.pop(0)
    pairs = [Unknown(name, paired[name], _unit(name, values)) for name in asked]
    pairs += [Unknown(f"source_{c}", f"mean_{c}", 1.0) for c in sourced(law) if f"mean_{c}" not in lost]
    return tuple(pairs)


def loose_unknowns(
    names: Sequence[str], paired: Sequence[Unknown], values: Mapping[str, float]
) -> tuple[Unknown, ...]:
    """Return the named scalars as unknowns without a condition, but for those that have one."""
    known = {unknown.name for unknown in paired}
    return tuple(Unknown(name, LOOSE, _unit(name, values)) for name in names if name not in known)


def _unit(name: str, values: Mapping[str, float]) -> float:
    """Return the size a relative change of a scalar refers to."""
    value = abs(values[name])
    if name in FRAME.values():
        _, _, axis = name.partition("_")
        whole = values[f"length_{axis}"] if axis else 2.0 * math.pi
        return max(value, whole / values["period"] if values["period"] != 1.0 else 1.0)
    return value if value > 0 else 1.0
