"""Fills in what a sound job leaves to defaults: paths, values of a stored start, free scalars."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from lattice.errors import InputError
from lattice.job.problems import Findings, listed
from lattice.job.schema import ArrayStart, Job, MarchStart, Section, StateStart, WavesStart
from lattice.job.unknowns import axes, default_free, open_means

if TYPE_CHECKING:
    from lattice.laws.law import Law
    from lattice.store.statemeta import StateMeta

S = TypeVar("S", bound=Section)


def changed(section: S, **values: Any) -> S:
    """Return a copy of a section with some keys replaced, checked like the original."""
    given = {name: getattr(section, name) for name in type(section).model_fields}
    return type(section).model_validate({**given, **values})


def find_files(job: Job, folder: Path, findings: Findings) -> Job:
    """Replace the start's file by its absolute path: beside the job file or in the current folder."""
    if not isinstance(job.start, (StateStart, ArrayStart)):
        return job
    given = Path(job.start.file).expanduser()
    candidates = [(folder / given).absolute(), given.absolute()]
    for candidate in candidates:
        if candidate.is_file():
            return changed(job, start=changed(job.start, file=str(candidate)))
    places = listed(dict.fromkeys(str(candidate.parent) for candidate in candidates))
    findings.refuse("start.file", f"must be an existing file, got '{job.start.file}'; looked in {places}")
    return job


def fill_from_state(job: Job, law: Law, findings: Findings) -> Job:
    """Take the values that the job leaves out from the stored state it starts from."""
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
    return changed(job, box=_box_from(job, law, meta), law=_law_from(job, law, meta))


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


def _box_from(job: Job, law: Law, meta: StateMeta) -> Any:
    names = [f"{kind}_{axis}" for axis in axes(law) for kind in ("length", "drift")]
    names += ["rotation"] if law.rotating_pair else []
    if job.lattice.nt > 1:
        names.append("period")
    missing = {n: meta.values[n] for n in names if getattr(job.box, n) is None and n in meta.values}
    return changed(job.box, **missing)


def _law_from(job: Job, law: Law, meta: StateMeta) -> Any:
    if meta.law != law.name or job.law.name is None:
        return job.law
    stored = {name: meta.parameters[name] for name in law.defaults if name in meta.parameters}
    return changed(job.law, parameters={**stored, **job.law.parameters})


def fill_in(job: Job, law: Law, file: Path) -> Job:
    """Return the job with every remaining default written out."""
    means = dict.fromkeys(open_means(law), 0.0) | job.solve.mean
    free = job.solve.free if job.solve.free is not None else default_free(law, job.lattice.nt, means)
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
    if not isinstance(start, (MarchStart, WavesStart)):
        return start
    filled = changed(start, mean={c: means.get(c, 0.0) for c in law.components} | start.mean)
    if isinstance(filled, WavesStart):
        modes = tuple(changed(wave, component=wave.component or law.components[0]) for wave in filled.modes)
        return changed(filled, modes=modes)
    if filled.match_drift is None:
        guessed = (axis for axis in axes(law) if getattr(job.box, f"drift_{axis}") is None)
        filled = changed(filled, match_drift=tuple(axis for axis in guessed if f"drift_{axis}" in free))
    if filled.match_rotation is None:
        filled = changed(filled, match_rotation="rotation" in free and job.box.rotation is None)
    return filled
