"""Judges a job as a whole, with its law at hand: what fits together and what makes physical sense."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from lattice.job.choices import PRECONDITIONERS
from lattice.job.problems import Findings, did_you_mean, listed
from lattice.job.schema import CoarseSection, Job, PatchesSection
from lattice.job.starts import (
    ArrayStart,
    MarchKeys,
    NoiseStart,
    RecurrenceStart,
    Wave,
    WavesStart,
    WindowStart,
)
from lattice.job.subspace import judge_subspace
from lattice.job.unknowns import axes, homogeneous_axes, judge_free, open_means, scalar_names

if TYPE_CHECKING:
    from lattice.laws.law import Law


def judge_law_section(job: Job, findings: Findings) -> None:
    """Refuse a law section that names no law, two laws or an unknown one."""
    from lattice.laws.catalogue import law_names

    section = job.law
    own_keys = [key for key in ("equations", "components", "dimensions") if getattr(section, key) is not None]
    if section.name is None:
        if section.equations is None:
            findings.refuse("law", "needs a name or equations; add name = ... (`lattice laws` lists them)")
        return
    if own_keys:
        findings.refuse(
            f"law.{own_keys[0]}",
            f"is for a law of your own, but law.name = '{section.name}' picks a shipped one; remove one",
        )
    known = law_names()
    if section.name not in known:
        findings.refuse(
            "law.name",
            f"must be a shipped law, got '{section.name}'{did_you_mean(section.name, known)};"
            " `lattice laws` lists them, or give equations",
        )


def judge(job: Job, law: Law) -> Findings:
    """Return everything that speaks against a job whose law could be read."""
    findings = Findings()
    _judge_parameters(job, law, findings)
    _judge_dimensions(job, law, findings)
    _judge_box(job, law, findings)
    _judge_lattice(job, law, findings)
    _judge_solve(job, law, findings)
    judge_subspace(job, law, findings)
    if not findings.problems:
        judge_free(job, law, findings)
    _judge_start(job, law, findings)
    return findings


def _judge_parameters(job: Job, law: Law, findings: Findings) -> None:
    if job.law.name is None:
        return
    for name in job.law.parameters:
        if name not in law.defaults:
            findings.refuse(
                f"law.parameters.{name}",
                f"is not a parameter of '{law.name}'{did_you_mean(name, law.defaults)};"
                f" known are {listed(law.defaults)}",
            )


def _judge_dimensions(job: Job, law: Law, findings: Findings) -> None:
    keys = [("box", "length_y"), ("box", "drift_y"), ("lattice", "ny"), ("lattice", "order_y")]
    given = [(section, key) for section, key in keys if getattr(getattr(job, section), key) is not None]
    if law.dimensions == 1:
        for section, key in given:
            findings.refuse(f"{section}.{key}", "is for laws in two dimensions, this one has one; remove it")
    elif job.lattice.ny is None:
        findings.refuse("lattice.ny", "is required for a law in two dimensions; add ny = ... to [lattice]")


def _judge_box(job: Job, law: Law, findings: Findings) -> None:
    box, stored = job.box, job.start.kind in ("state", "excerpt", "mosaic")
    wanted = [f"length_{axis}" for axis in axes(law)] + (["period"] if job.lattice.nt > 1 else [])
    for name in wanted:
        if getattr(box, name) is None and not stored:
            findings.refuse(f"box.{name}", f"is required; add {name} = ... to [box]")
    if box.period is not None and job.lattice.nt == 1:
        findings.refuse(
            "box.period", "has no meaning for lattice.nt = 1 (a steady or travelling state); remove it"
        )
    for axis in axes(law):
        drift = getattr(box, f"drift_{axis}")
        if drift and axis not in homogeneous_axes(law):
            findings.refuse(
                f"box.drift_{axis}",
                f"must be 0: the law depends on {axis}, so no state can drift along {axis}, got {drift};"
                " remove it",
            )
    if box.rotation and law.rotating_pair is None:
        findings.refuse(
            "box.rotation",
            f"must be 0: the law has no pair of components that may be turned, got {box.rotation}; remove it",
        )


def judge_forcing(job: Job, law: Law, findings: Findings) -> None:
    """Refuse a box whose length does not hold whole periods of the law's forcing; for a resolved job."""
    from lattice.job.unknowns import first_values
    from lattice.laws.forcing import find_aperiodic_axes

    values = first_values(job, law)
    for axis in find_aperiodic_axes(law, values):
        findings.refuse(
            f"box.length_{axis}",
            f"must hold whole periods of what the law prescribes along {axis}, got"
            f" {values[f'length_{axis}']}; fit the length or the law's parameters"
            " (in full precision, 2*pi = 6.283185307179586)",
        )
    for name in job.solve.free or ():
        if name.startswith("length_") and name[-1] not in homogeneous_axes(law):
            findings.refuse(
                "solve.free",
                f"must not name {name}: the law prescribes a force along {name[-1]}, which fits the given"
                " length only; remove it",
            )


def _judge_lattice(job: Job, law: Law, findings: Findings) -> None:
    lattice = job.lattice
    if lattice.nt > 1:
        _judge_nodes("nt", lattice.nt, lattice.order_t, 2 * lattice.order_t, findings)
    _judge_nodes("nx", lattice.nx, lattice.order_x, _fewest(law, "x", lattice.order_x), findings)
    if law.dimensions == 2 and lattice.ny is not None:
        order_y = lattice.order_y or lattice.order_x
        _judge_nodes("ny", lattice.ny, order_y, _fewest(law, "y", order_y), findings)


def _fewest(law: Law, axis: str, order: int) -> int:
    """Return the fewest nodes: twice the order, and no node twice in one difference."""
    from lattice.kernels.scheme import reach

    reaches = [reach(equation.expression, order, order)["xy".index(axis)] for equation in law.equations]
    return max(2 * order, 2 * max(reaches) + 1)


def _judge_nodes(name: str, nodes: int, order: int, fewest: int, findings: Findings) -> None:
    if nodes < fewest:
        alone = " or 1 (no time axis)" if name == "nt" else ""
        findings.refuse(
            f"lattice.{name}",
            f"must be >= {fewest}{alone} for order {order}, got {name} = {nodes};"
            f" raise {name}{' or lower the order' if order > 2 else ''}",
        )


def _judge_solve(job: Job, law: Law, findings: Findings) -> None:
    solve = job.solve
    if solve.preconditioner not in PRECONDITIONERS:
        findings.refuse(
            "solve.preconditioner",
            f"must be one of {listed(PRECONDITIONERS)}, got '{solve.preconditioner}'"
            f"{did_you_mean(solve.preconditioner, PRECONDITIONERS)}",
        )
    patched = solve.preconditioner == "patches" or solve.coarse.solver == "patches"
    if not patched and solve.patches != PatchesSection():
        findings.refuse(
            "solve.patches",
            f"is for solve.preconditioner = 'patches', got '{solve.preconditioner}'; remove the table",
        )
    if solve.preconditioner in ("direct", "patches") and solve.coarse != CoarseSection():
        findings.refuse(
            "solve.coarse",
            f"is for solve.preconditioner = 'coarse' or 'auto', got '{solve.preconditioner}';"
            " remove the table",
        )
    _judge_sizes("patches", job, findings)
    _judge_sizes("coarse", job, findings)
    for component in solve.mean:
        _judge_mean(f"solve.mean.{component}", component, law, findings)
    _judge_stages(job, law, findings)


def _judge_stages(job: Job, law: Law, findings: Findings) -> None:
    """Refuse stages out of order, and a damped stage where there is nothing for it."""
    stages, order = job.solve.stages, ("damped", "newton", "refine")
    known = scalar_names(law)
    for name in job.solve.damped.free or ():
        if name not in known:
            findings.refuse(
                "solve.damped.free",
                f"must name scalars of the problem, {listed(known)}, got '{name}'{did_you_mean(name, known)}",
            )
    if stages is None:
        return
    if list(stages) != [stage for stage in order if stage in stages]:
        findings.refuse(
            "solve.stages", f"must be stages in the order {listed(order)}, each once, got {listed(stages)}"
        )
    elif "refine" in stages and "newton" not in stages:
        findings.refuse("solve.stages", "must have newton before refine; add it")
    if job.solve.nested and stages != ("newton",):
        findings.refuse(
            "solve.nested", f'is for solve.stages = ["newton"], got {listed(stages)}; remove one of them'
        )


def _judge_sizes(table: str, job: Job, findings: Findings) -> None:
    """Refuse patches or a coarse lattice with more nodes along an axis than the lattice."""
    for name in ("nt", "nx", "ny"):
        size, nodes = getattr(getattr(job.solve, table), name), getattr(job.lattice, name) or 1
        if size is not None and size > nodes:
            findings.refuse(
                f"solve.{table}.{name}", f"must be <= lattice.{name} = {nodes}, got {size}; lower it"
            )


def _judge_mean(key: str, component: str, law: Law, findings: Findings) -> None:
    if component not in law.components:
        findings.refuse(key, _no_component(component, law))
    elif component not in open_means(law):
        findings.refuse(key, f"cannot be given: the law fixes the mean of {component} by itself; remove it")


def _no_component(component: str, law: Law) -> str:
    return (
        f"names no component of the law, got '{component}'{did_you_mean(component, law.components)};"
        f" known are {listed(law.components)}"
    )


def _judge_start(job: Job, law: Law, findings: Findings) -> None:
    start = job.start
    if isinstance(start, (MarchKeys, NoiseStart, WavesStart)):
        _judge_offsets(start.mean, law, findings)
    if isinstance(start, MarchKeys):
        _judge_march(start, job, law, findings)
    if isinstance(start, WindowStart):
        _judge_window(start, job, law, findings)
    elif isinstance(start, RecurrenceStart):
        _judge_recurrence(start, job, findings)
    elif isinstance(start, WavesStart):
        for place, wave in enumerate(start.modes, start=1):
            _judge_wave(f"start.modes[{place}]", wave, job, law, findings)
    elif isinstance(start, ArrayStart):
        _judge_array(start, findings)


def _judge_offsets(mean: Mapping[str, float], law: Law, findings: Findings) -> None:
    for component in mean:
        if component not in law.components:
            findings.refuse(f"start.mean.{component}", _no_component(component, law))


def _judge_window(start: WindowStart, job: Job, law: Law, findings: Findings) -> None:
    for axis in "xy":
        marched, own = getattr(start, f"march_length_{axis}"), getattr(job.box, f"length_{axis}")
        if marched is None or own is None or marched == own:
            continue
        key, fewest = f"start.march_length_{axis}", own * (1.0 + start.blend_space)
        if axis not in homogeneous_axes(law):
            findings.refuse(
                key,
                f"must be left out: the law depends on {axis}, so that no part of a box stands for the whole",
            )
        elif marched < fewest * (1.0 - 1e-12):
            findings.refuse(
                key,
                f"must be box.length_{axis} = {own} or at least (1 + start.blend_space) times that,"
                f" {fewest:g}, to hold the window and what is blended with it, got {marched}; raise it",
            )


def _judge_recurrence(start: RecurrenceStart, job: Job, findings: Findings) -> None:
    if job.lattice.nt == 1:
        findings.refuse(
            "start.kind",
            "must not be 'recurrence' for lattice.nt = 1: a recurrence is a field in time; raise lattice.nt",
        )
        return
    if job.solve.free is not None and "period" not in job.solve.free:
        findings.refuse(
            "solve.free", "must name period for start.kind = 'recurrence', which gives the period; add it"
        )
    if job.box.period is None:
        return
    shortest, longest = start.shortest or 0.5 * job.box.period, start.longest or 1.5 * job.box.period
    if not shortest < longest:
        findings.refuse(
            "start.longest", f"must exceed start.shortest = {shortest:g}, got {longest:g}; raise it"
        )
    elif start.march_time <= longest:
        findings.refuse(
            "start.march_time",
            f"must exceed the longest period looked for, {longest:g}, got {start.march_time}; raise it",
        )


def _judge_march(start: MarchKeys, job: Job, law: Law, findings: Findings) -> None:
    if start.shape is not None and len(start.shape) != law.dimensions:
        form = "[nx]" if law.dimensions == 1 else "[ny, nx]"
        findings.refuse(
            "start.shape",
            f"must be {form} for a law in {law.dimensions} dimension(s), got {list(start.shape)}",
        )
    for nodes in start.shape or ():
        if nodes < 8:
            findings.refuse("start.shape", f"must have at least 8 nodes on each axis, got {nodes}; raise it")
    for axis in start.match_drift or ():
        if axis not in homogeneous_axes(law):
            findings.refuse(
                "start.match_drift",
                f"must name axes along which the law is the same everywhere"
                f" ({listed(homogeneous_axes(law))}), got '{axis}'; remove it",
            )
    if start.match_rotation and law.rotating_pair is None:
        findings.refuse(
            "start.match_rotation",
            "must be false: the law has no pair of components that may be turned; remove it",
        )
    if start.dt is not None and job.box.period is not None and start.dt > job.box.period:
        findings.refuse(
            "start.dt", f"must be <= box.period = {job.box.period}, got {start.dt}; shorten the time step"
        )


def _judge_wave(key: str, wave: Wave, job: Job, law: Law, findings: Findings) -> None:
    if wave.component is None and len(law.components) > 1:
        findings.refuse(
            f"{key}.component", f"is required for a law of several components: {listed(law.components)}"
        )
    elif wave.component is not None and wave.component not in law.components:
        findings.refuse(f"{key}.component", _no_component(wave.component, law))
    for number, nodes in (("kt", job.lattice.nt), ("kx", job.lattice.nx), ("ky", job.lattice.ny or 1)):
        most = (nodes - 1) // 2
        if abs(getattr(wave, number)) > most:
            findings.refuse(
                f"{key}.{number}",
                f"must lie within -{most} .. {most} on lattice.n{number[1]} = {nodes},"
                f" got {getattr(wave, number)}; lower it or raise the nodes",
            )


def _judge_array(start: ArrayStart, findings: Findings) -> None:
    if Path(start.file).suffix == ".npy" and start.dataset is not None:
        findings.refuse("start.dataset", "is for HDF5 files, start.file is a .npy file; remove it")
