"""The job's invariant subspace: from words to signs, and whether the law and the other keys allow it."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from lattice.errors import InputError
from lattice.geometry.subspace import HalfPeriod, Signs, Subspace
from lattice.job.problems import Findings

if TYPE_CHECKING:
    from collections.abc import Mapping

    from lattice.job.schema import Job
    from lattice.laws.law import Law

KEY = "solve.subspace"


def subspace_of(job: Job, law: Law) -> Subspace | None:
    """Return the subspace that a job asks for, None without one.

    Raises
    ------
    InputError
        If the law has none like it, or several between which the job does not choose.
    """
    section = job.solve.subspace
    values = {**law.defaults, **job.law.parameter_values()}
    mirrors = {
        f"mirror_{axis}": _signs(getattr(section, f"mirror_{axis}"), f"mirror_{axis}", law, {axis}, values)
        for axis in "xy"
        if getattr(section, f"mirror_{axis}") is not None
    }
    half = None
    if section.half_period is not None:
        moves = dict.fromkeys(section.half_period, True)
        flips = {move[-1] for move in moves if move.startswith("mirror")}
        half = HalfPeriod(_signs(section.half_period_signs, "half_period_signs", law, flips, values), **moves)
    elif section.half_period_signs != "law":
        raise InputError(
            "belongs to half_period; add half_period = [] for a change of signs alone",
            key=f"{KEY}.half_period_signs",
        )
    return Subspace(**mirrors, half_period=half) if mirrors or half else None


def _signs(asked: Any, key: str, law: Law, flips: set[str], values: Mapping[str, float]) -> Signs:
    """Return one sign per component from the job's word or list."""
    from lattice.system.invariant import law_signs

    count = len(law.components)
    if asked in ("odd", "even"):
        return (-1 if asked == "odd" else 1,) * count
    if asked != "law":
        if len(asked) != count:
            raise InputError(
                f"must have one sign for each of {', '.join(law.components)}, got {list(asked)}",
                key=f"{KEY}.{key}",
            )
        return tuple(asked)
    if not flips:
        return (1,) * count
    choices = law_signs(law, "x" in flips, "y" in flips, values)
    if len(choices) == 1:
        return choices[0]
    found = "none" if not choices else "several: " + " or ".join(str(list(c)) for c in choices)
    raise InputError(
        f"must say the signs: with {' and '.join(sorted(flips))} mirrored the law has {found};"
        " give one of them" + ("" if choices else " law that has, see `lattice laws`"),
        key=f"{KEY}.{key}",
    )


def lost_in_job(job: Job, law: Law) -> frozenset[str]:
    """Return the conditions that the job's subspace takes away."""
    from lattice.system.invariant import lost_conditions

    return lost_conditions(law, subspace_of(job, law))


def judge_subspace(job: Job, law: Law, findings: Findings) -> None:
    """Refuse a subspace that the law, the lattice or another key does not allow."""
    try:
        subspace = subspace_of(job, law)
        if subspace is None:
            return
        _check(job, law, subspace)
    except InputError as error:
        findings.refuse(error.key or KEY, error.message)
        return
    _judge_method(job, findings)


def _check(job: Job, law: Law, subspace: Subspace) -> None:
    from lattice.system.invariant import check_means, check_subspace, held_scalars, lost_conditions

    values = {**law.defaults, **job.law.parameter_values()}
    box = {name: getattr(job.box, name) for name in ("drift_x", "drift_y", "rotation", "period")}
    lengths = {name: getattr(job.box, name) for name in ("length_x", "length_y")}
    given = {name: value for name, value in {**box, **lengths}.items() if value is not None}
    check_subspace(law, subspace, {**values, **given})
    lost = lost_conditions(law, subspace)
    check_means(job.solve.mean, lost)
    held = [name for name in job.solve.free or () if name in held_scalars(law, lost)]
    if held:
        raise InputError(
            f"must not name {held[0]}: solve.subspace holds it at 0; remove it", key="solve.free"
        )
    if subspace.half_period and job.lattice.nt == 1:
        raise InputError("needs a state that changes in time: lattice.nt > 1", key=f"{KEY}.half_period")
    subspace.part(job.make_lattice())


def _judge_method(job: Job, findings: Findings) -> None:
    solve = job.solve
    if solve.preconditioner not in ("auto", "direct"):
        findings.refuse(
            "solve.preconditioner",
            f"must be 'direct' (or 'auto') in a solve.subspace, got '{solve.preconditioner}':"
            " the others know the whole lattice only",
        )
    if solve.nested:
        findings.refuse("solve.nested", f"must be 0 in a solve.subspace, got {solve.nested}; remove it")
