"""What a subspace asks of a law, and which conditions and scalars it takes away."""

from __future__ import annotations

from collections.abc import Mapping

from lattice.errors import InputError
from lattice.geometry.subspace import HalfPeriod, Signs, Subspace
from lattice.kernels.forms import sourced
from lattice.laws.law import Law, Reflection
from lattice.laws.symmetry import row_signs, symmetries_at
from lattice.system.unknowns import FRAME

KEY = "solve.subspace"
STILL = 1e-6
"""Lengths of the box passed in a period up to which a stored state's drift counts as 0."""


def lost_conditions(law: Law, subspace: Subspace | None) -> frozenset[str]:
    """Return the conditions that have no meaning in a subspace.

    A mirror fixes where a state lies along its axis, and the drift is 0. A component that changes its sign
    has no mean. A pair of which one component changes its sign cannot be turned.
    """
    if subspace is None:
        return frozenset()
    lost = {f"phase_{axis}" for axis in "xy"[: law.dimensions] if subspace.mirrors(axis)}
    for signs in subspace.signs:
        by_name = dict(zip(law.components, signs, strict=True))
        lost |= {f"mean_{c}" for c in sourced(law) if by_name[c] < 0}
        if law.rotating_pair and len({by_name[c] for c in law.rotating_pair}) == 2:
            lost.add("phase_rotation")
    return frozenset(lost)


def held_scalars(law: Law, lost: frozenset[str]) -> dict[str, float]:
    """Return the scalars that must be 0 where conditions are lost: sources, drifts, rotation."""
    sources = [f"source_{c}" for c in sourced(law) if f"mean_{c}" in lost]
    return dict.fromkeys([*sources, *(name for phase, name in FRAME.items() if phase in lost)], 0.0)


def check_subspace(law: Law, subspace: Subspace, values: Mapping[str, float]) -> None:
    """Refuse a subspace that the law at these values does not keep.

    Raises
    ------
    InputError
        With what the law has instead.
    """
    for reflection in reflections_of(subspace):
        _check_reflection(law, reflection, values)
    half = subspace.half_period
    for axis in "xy":
        moved = half is not None and getattr(half, f"shift_{axis}")
        if not (subspace.mirrors(axis) or moved):
            continue
        if not law.symmetries.homogeneous.get(axis, False):
            where = "has no such axis" if axis not in law.symmetries.homogeneous else f"depends on {axis}"
            raise InputError(f"cannot move or mirror {axis}: the law {where}; leave it out", key=KEY)
        drift = values.get(f"drift_{axis}", 0.0)
        passed = abs(drift) * values.get("period", 1.0) / values.get(f"length_{axis}", 1.0)
        if subspace.mirrors(axis) and passed > STILL:
            raise InputError(
                f"mirrors {axis}, so the state cannot drift along it: drift_{axis} must be 0, got "
                f"{drift}; set it to 0, or leave out the mirror",
                key=KEY,
            )
    if half is not None and half == HalfPeriod(tuple(1 for _ in half.signs)):
        raise InputError("half_period must change something: else the period is half as long", key=KEY)


def check_means(means: Mapping[str, float], lost: frozenset[str]) -> None:
    """Refuse a given mean of a component that changes its sign.

    Raises
    ------
    InputError
        Naming the component.
    """
    for name, mean in means.items():
        if mean and f"mean_{name}" in lost:
            raise InputError(
                f"must be 0: {name} changes its sign in solve.subspace, got {mean}; remove it",
                key=f"solve.mean.{name}",
            )


def reflections_of(subspace: Subspace) -> list[Reflection]:
    """Return the reflections of the law that a subspace needs."""
    found = []
    if subspace.mirror_x is not None:
        found.append(Reflection(True, False, subspace.mirror_x))
    if subspace.mirror_y is not None:
        found.append(Reflection(False, True, subspace.mirror_y))
    half = subspace.half_period
    if half is not None:
        found.append(Reflection(half.mirror_x, half.mirror_y, half.signs))
    return [r for r in found if r.x or r.y or min(r.signs) < 0]


def _check_reflection(law: Law, reflection: Reflection, values: Mapping[str, float]) -> None:
    known = symmetries_at(law, values).reflections
    if reflection not in known:
        choices = law_signs(law, reflection.x, reflection.y, values)
        signs = " or ".join(str(list(s)) for s in choices)
        remedy = f"it has it with signs {signs}" if choices else "it has none like it"
        raise InputError(
            f"needs a law that {_words(law, reflection)} leaves unchanged, and this one is not at these "
            f"parameters: {remedy}; see `lattice laws`",
            key=KEY,
        )
    if row_signs(law, reflection, values) != reflection.signs:
        raise InputError(
            "is not possible for this law: a constraint changes its sign otherwise than its component does",
            key=KEY,
        )


def law_signs(law: Law, flip_x: bool, flip_y: bool, values: Mapping[str, float]) -> list[Signs]:
    """Return the signs with which a law has a reflection of these axes."""
    found = [
        r.signs
        for r in symmetries_at(law, values).reflections
        if (r.x, r.y, r.time) == (flip_x, flip_y, False)
    ]
    return found if flip_x or flip_y else [(1,) * len(law.components), *found]


def _words(law: Law, reflection: Reflection) -> str:
    flips = [f"{axis} -> -{axis}" for axis in "xy" if getattr(reflection, axis)]
    flips += [f"{c} -> -{c}" for c, sign in zip(law.components, reflection.signs, strict=True) if sign < 0]
    return ", ".join(flips)
