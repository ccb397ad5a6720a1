"""Fills in what a sound job leaves to defaults: paths, values of a stored start, free scalars."""

from __future__ import annotations

import re
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from lattice.errors import InputError
from lattice.job.problems import Findings, listed
from lattice.job.schema import Job
from lattice.job.section import Section
from lattice.job.starts import (
    ArrayStart,
    ExcerptStart,
    MarchKeys,
    MosaicStart,
    NoiseStart,
    StateStart,
    WavesStart,
)
from lattice.job.subspace import lost_in_job
from lattice.job.unknowns import axes, default_free, open_means

if TYPE_CHECKING:
    from lattice.laws.law import Law
    from lattice.store.statemeta import StateMeta

S = TypeVar("S", bound=Section)

STATE_NAME = "state.h5"
"""The state in a run's folder."""


def changed(section: S, **values: Any) -> S:
    """Return a copy of a section with some keys replaced, checked like the original."""
    given = {name: getattr(section, name) for name in type(section).model_fields}
    return type(section).model_validate({**given, **values})


def find_files(job: Job, folder: Path, findings: Findings) -> Job:
    """Replace the start's files by their absolute paths: beside the job file or in the current folder."""
    start = job.start
    if isinstance(start, (StateStart, ArrayStart, ExcerptStart)):
        found = _find("start.file", start.file, folder, findings)
        return changed(job, start=changed(start, file=found))
    if isinstance(start, MosaicStart):
        members = {
            name: changed(member, file=_find(f"start.members.{name}.file", member.file, folder, findings))
            for name, member in start.members.items()
        }
        return changed(job, start=changed(start, members=members))
    return job


def _find(key: str, name: str, folder: Path, findings: Findings) -> str:
    """Return the absolute path of a file, a run's folder standing for its state."""
    given = Path(name).expanduser()
    candidates = [(folder / given).absolute(), given.absolute()]
    for candidate in candidates:
        path = candidate / STATE_NAME if candidate.is_dir() else candidate
        if path.is_file():
            return str(path)
    places = listed(dict.fromkeys(str(candidate.parent) for candidate in candidates))
    findings.refuse(key, f"must be an existing file, got '{name}'; looked in {places}")
    return name


def fill_from_state(job: Job, law: Law, findings: Findings) -> Job:
    """Take the values that the job leaves out from the stored states it starts from."""
    if isinstance(job.start, (ExcerptStart, MosaicStart)):
        return _fill_composed(job, law, findings)
    if not isinstance(job.start, StateStart):
        return job
    try:
        from lattice.store.statefile import read_meta

        meta = read_meta(job.start.file)
    except InputError as error:
        findings.refuse("start.file", error.message)
        return job
    _judge_stored(job, law, meta, findings)
    if findings.problems:
        return job
    stored = meta.parameters if meta.law == law.name else {}
    return changed(job, box=_box_from(job, law, meta.values), law=_law_from(job, law, stored))


def _fill_composed(job: Job, law: Law, findings: Findings) -> Job:
    """Take the box that an excerpt or a mosaic makes, and the parameters of its first state."""
    try:
        values = _composed_values(job, law)
    except InputError as error:
        named = re.match(r"(start\.[\w.]+):? (.*)", error.message, re.DOTALL)
        key, text = named.groups() if named else ("start", str(error))
        findings.refuse(key, text)
        return job
    job = changed(job, box=_box_from(job, law, values), law=_law_from(job, law, values))
    wanted = [f"length_{axis}" for axis in axes(law)] + (["period"] if job.lattice.nt > 1 else [])
    for name in wanted:
        if getattr(job.box, name) is None:
            findings.refuse(f"box.{name}", "is required: the start has none to give; add it to [box]")
    return job


def _composed_values(job: Job, law: Law) -> dict[str, float]:
    start: Any = job.start
    if isinstance(job.start, ExcerptStart):
        from lattice.starts.excerpt import excerpt_values
        from lattice.starts.sources import describe_source

        return excerpt_values(start, describe_source(start, law), law)
    from lattice.starts.mosaic import plan_mosaic

    return plan_mosaic(start, law, job.lattice.nt).values


def _judge_stored(job: Job, law: Law, meta: StateMeta, findings: Findings) -> None:
    if (meta.components, meta.dimensions) != (law.components, law.dimensions):
        findings.refuse(
            "start.file",
            f"must hold components {listed(law.components)} in {law.dimensions} dimension(s),"
            f" got {listed(meta.components)} in {meta.dimensions}; take a state of the same law",
        )
    if job.lattice.nt > 1 and job.box.period is None and meta.lattice.nt == 1:
        findings.refuse(
            "box.period",
            "is required: the stored state is steady or travelling, without a period; add it to [box]",
        )


def _box_from(job: Job, law: Law, values: Mapping[str, float]) -> Any:
    names = [f"{kind}_{axis}" for axis in axes(law) for kind in ("length", "drift")]
    names += ["rotation"] if law.rotating_pair else []
    if job.lattice.nt > 1:
        names.append("period")
    missing = {n: values[n] for n in names if getattr(job.box, n) is None and n in values}
    return changed(job.box, **missing)


def _law_from(job: Job, law: Law, parameters: Mapping[str, float]) -> Any:
    if job.law.name is None:
        return job.law
    stored = {name: parameters[name] for name in law.defaults if name in parameters}
    return changed(job.law, parameters={**stored, **job.law.parameters})


def fill_in(job: Job, law: Law, file: Path) -> Job:
    """Return the job with every remaining default written out."""
    means = dict.fromkeys(open_means(law), 0.0) | job.solve.mean
    lost = lost_in_job(job, law)
    free = job.solve.free if job.solve.free is not None else default_free(law, job.lattice.nt, means, lost)
    named = tuple(name for name in free if not name.startswith("source_"))
    return changed(
        job,
        law=_law_filled(job, law),
        box=_box_filled(job, law),
        lattice=_lattice_filled(job, law),
        solve=changed(job.solve, free=named, mean=means),
        start=_start_filled(job, law, means, free),
        output=changed(job.output, folder=job.output.folder or f"runs/{file.stem}"),
    )


def _box_filled(job: Job, law: Law) -> Any:
    names = [f"drift_{axis}" for axis in axes(law)] + (["rotation"] if law.rotating_pair else [])
    return changed(job.box, **{name: getattr(job.box, name) or 0.0 for name in names})


def _law_filled(job: Job, law: Law) -> Any:
    if job.law.name is None:
        return changed(job.law, components=job.law.components or ("u",), dimensions=job.law.dimensions or 1)
    return changed(job.law, parameters={**law.defaults, **job.law.parameters})


def _lattice_filled(job: Job, law: Law) -> Any:
    if law.dimensions == 1 or job.lattice.order_y is not None:
        return job.lattice
    return changed(job.lattice, order_y=job.lattice.order_x)


def _start_filled(job: Job, law: Law, means: dict[str, float], free: tuple[str, ...]) -> Any:
    start = job.start
    if not isinstance(start, (MarchKeys, NoiseStart, WavesStart)):
        return start
    filled = changed(start, mean={c: means.get(c, 0.0) for c in law.components} | start.mean)
    if isinstance(filled, WavesStart):
        modes = tuple(changed(wave, component=wave.component or law.components[0]) for wave in filled.modes)
        return changed(filled, modes=modes)
    if isinstance(filled, NoiseStart):
        return filled
    if filled.match_drift is None:
        guessed = (axis for axis in axes(law) if getattr(job.box, f"drift_{axis}") is None)
        filled = changed(filled, match_drift=tuple(axis for axis in guessed if f"drift_{axis}" in free))
    if filled.match_rotation is None:
        filled = changed(filled, match_rotation="rotation" in free and job.box.rotation is None)
    return filled
