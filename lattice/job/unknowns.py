"""Which scalars of a job are free, and whether the set can be solved for.

Where a state sits in time and along a homogeneous axis is arbitrary, and so is the angle of a pair of
components that may be turned: each such freedom gives one condition (a phase), and each phase fixes one
free scalar. A mean that the law leaves open is given by
the job and fixes a uniform source, which is always free and need not be named.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from lattice.job.problems import Findings, did_you_mean, listed

if TYPE_CHECKING:
    from collections.abc import Collection, Mapping

    from lattice.job.schema import Job
    from lattice.laws.law import Law


def axes(law: Law) -> str:
    """Return the names of the law's space axes, "x" or "xy"."""
    return "xy"[: law.dimensions]


def homogeneous_axes(law: Law) -> list[str]:
    """Return the axes along which the law is the same everywhere."""
    return [axis for axis in axes(law) if law.symmetries.homogeneous[axis]]


def open_means(law: Law) -> tuple[str, ...]:
    """Return the components whose mean the law leaves open: conserved, or free to shift."""
    either = {*law.symmetries.conserved, *law.symmetries.shiftable}
    return tuple(component for component in law.components if component in either)


def scalar_names(law: Law) -> list[str]:
    """Return every scalar of the problem by name."""
    return [
        "period",
        *(f"length_{axis}" for axis in axes(law)),
        *(f"drift_{axis}" for axis in axes(law)),
        *(["rotation"] if law.rotating_pair else []),
        *(f"source_{component}" for component in open_means(law)),
        *law.defaults,
    ]


def frame_scalars(law: Law) -> list[str]:
    """Return the scalars of the frame in which a state repeats and that the law lets be free."""
    drifts = [f"drift_{axis}" for axis in homogeneous_axes(law)]
    return [*drifts, "rotation"] if law.rotating_pair else drifts


def is_frame_scalar(name: str) -> bool:
    """Tell whether a scalar moves or turns the frame."""
    return name.startswith("drift_") or name == "rotation"


def default_free(
    law: Law, nt: int, means: Mapping[str, float], lost: Collection[str] = ()
) -> tuple[str, ...]:
    """Return what is free where the job does not say; `lost` are conditions that a subspace takes away."""
    frame = [name for name in frame_scalars(law) if name != "rotation" or not mean_that_turns(law, means)]
    frame = [name for name in frame if _phase_of(name) not in lost]
    return ("period", *frame) if nt > 1 else tuple(frame)


def _phase_of(name: str) -> str:
    """Return the condition that fixes a scalar of the frame."""
    return "phase_" + name.removeprefix("drift_")


def mean_that_turns(law: Law, means: Mapping[str, float]) -> str:
    """Return the component whose given mean would turn with the frame, which must rest then, or nothing."""
    return next((c for c in law.rotating_pair or () if means.get(c, 0.0) != 0.0), "")


def first_values(job: Job, law: Law) -> dict[str, float]:
    """Return the value of every scalar a resolved job begins with; sources are 0.

    `period` is 1 for `nt = 1`, where it has no meaning; lengths and drifts in y exist in two
    dimensions only.
    """
    values = {"period": 1.0 if job.lattice.nt == 1 else _given(job, "period")}
    for axis in axes(law):
        values[f"length_{axis}"] = _given(job, f"length_{axis}")
    for axis in axes(law):
        values[f"drift_{axis}"] = float(getattr(job.box, f"drift_{axis}") or 0.0)
    if law.rotating_pair:
        values["rotation"] = float(job.box.rotation or 0.0)
    values.update({f"source_{component}": 0.0 for component in open_means(law)})
    return {**values, **law.defaults, **job.law.parameter_values()}


def _given(job: Job, name: str) -> float:
    value = getattr(job.box, name)
    assert value is not None, f"box.{name} is absent from a job that should have been resolved"
    return float(value)


def judge_free(job: Job, law: Law, findings: Findings) -> None:
    """Refuse a set of free scalars that no solution fits, with the reason."""
    free = job.solve.free
    if free is None:
        return
    for place, name in enumerate(free):
        if name in free[:place]:
            findings.refuse("solve.free", f"must name each scalar once, got '{name}' twice; remove one")
        else:
            _judge_name(name, job, law, findings)
    if not findings.problems:
        _judge_count(free, job, law, findings)


def _judge_name(name: str, job: Job, law: Law, findings: Findings) -> None:
    reason = (
        _period_reason(name, job)
        or _drift_reason(name, law)
        or _rotation_reason(name, job, law)
        or _source_reason(name, law)
    )
    known = scalar_names(law)
    if reason:
        findings.refuse("solve.free", reason)
    elif name not in known:
        findings.refuse(
            "solve.free",
            f"must name scalars of this law, got '{name}'{did_you_mean(name, known)};"
            f" known are {listed(known)}",
        )


def _period_reason(name: str, job: Job) -> str:
    if name == "period" and job.lattice.nt == 1:
        return (
            "must not name period for lattice.nt = 1: a steady or travelling state has none;"
            " remove it or raise lattice.nt"
        )
    return ""


def _drift_reason(name: str, law: Law) -> str:
    kind, _, axis = name.partition("_")
    if kind not in ("drift", "length") or axis not in ("x", "y"):
        return ""
    if axis not in axes(law):
        return f"must not name {name}: the law has one space dimension; remove it"
    if kind == "drift" and axis not in homogeneous_axes(law):
        return (
            f"must not name {name}: the law depends on {axis}, so no state can drift along {axis}; remove it"
        )
    return ""


def _rotation_reason(name: str, job: Job, law: Law) -> str:
    if name != "rotation":
        return ""
    if law.rotating_pair is None:
        return "must not name rotation: the law has no pair of components that may be turned; remove it"
    component = mean_that_turns(law, job.solve.mean)
    if component:
        return (
            f"must not name rotation: the given mean of {component} is not 0 and would turn with the state;"
            " remove it or the mean"
        )
    return ""


def _source_reason(name: str, law: Law) -> str:
    if not name.startswith("source_"):
        return ""
    component = name.removeprefix("source_")
    if component not in law.components:
        known = listed(f"source_{c}" for c in open_means(law))
        return f"must name a component after source_, got '{name}'; known are {known}"
    if component not in open_means(law):
        return (
            f"must not name {name}: the law fixes the mean of {component}, so no source is needed; remove it"
        )
    return ""


def _judge_count(free: tuple[str, ...], job: Job, law: Law, findings: Findings) -> None:
    """Compare the free scalars with the phases that can fix them."""
    periodic = job.lattice.nt > 1
    frame = [name for name in free if is_frame_scalar(name)]
    others = [name for name in free if name not in frame and not name.startswith("source_")]
    if periodic and not others:
        lengths = listed(f"length_{axis}" for axis in axes(law))
        findings.refuse(
            "solve.free",
            f"holds period and {lengths} fixed, but a generic state exists only for special periods;"
            f" add period (or one of {lengths}, or a parameter)",
        )
        return
    phases = int(periodic) + len(frame_scalars(law))
    if len(frame) + len(others) > phases:
        findings.refuse(
            "solve.free",
            f"must name at most {phases} scalar(s) besides sources here, got {listed(frame + others)}:"
            f" {_phase_text(periodic, law)} can fix no more; hold one of them",
        )
        return
    if len(frame) + len(others) < phases:
        _warn_of_held(free, job, law, findings)


def _warn_of_held(free: tuple[str, ...], job: Job, law: Law, findings: Findings) -> None:
    from lattice.job.subspace import lost_in_job

    lost = lost_in_job(job, law)
    drifts = [f"drift_{axis}" for axis in homogeneous_axes(law) if f"drift_{axis}" not in free]
    drifts = [name for name in drifts if _phase_of(name) not in lost]
    if drifts:
        findings.warn(
            f"{listed(drifts)} is held although the law is the same all along that axis: right for a wave"
            " followed in the resting frame or a state kept in place by a reflection; otherwise add it to"
            " solve.free"
        )
    held = "phase_rotation" in lost
    if law.rotating_pair and "rotation" not in free and not held and not mean_that_turns(law, job.solve.mean):
        findings.warn(
            f"rotation is held although ({listed(law.rotating_pair)}) may be turned by any angle: right for a"
            " plane wave that is followed by its drift or period, or a state kept from turning by a"
            " reflection; otherwise add it to solve.free"
        )


def _phase_text(periodic: bool, law: Law) -> str:
    phases = ["the phase in time"] if periodic else []
    phases += [f"the phase in {axis}" for axis in homogeneous_axes(law)]
    phases += [f"the angle of ({listed(law.rotating_pair)})"] if law.rotating_pair else []
    return " and ".join(phases) or "a steady state, which nothing shifts,"
