"""The study file's keys: types, ranges, defaults and what each key means."""

from __future__ import annotations

from typing import Literal

from pydantic import model_validator

from lattice.job.section import Count, Name, Positive, Section
from lattice.job.section import key as _key

Kind = Literal["strong", "weak-area", "weak-time", "weak-space", "refinement"]
KINDS: dict[Kind, str] = {
    "strong": "the same box on more ranks",
    "weak-area": "a box that grows with the ranks, along every axis by the same factor",
    "weak-time": "a period that grows with the ranks",
    "weak-space": "lengths that grow with the ranks",
    "refinement": "the same box on finer lattices",
}
Measure = Literal["steps", "solve", "kernels", "files"]


class StudySection(Section):
    """What is varied and what is measured."""

    title: Name | None = _key("heading of the report", None, shown="the file's name")
    question: Name = _key("what the study is to answer, in a sentence", "How does the solve scale?")
    kind: Kind = _key("; ".join(f"`{name}`: {text}" for name, text in KINDS.items()))
    ranks: tuple[Count, ...] | None = _key("MPI ranks of the points", None, shown="[1, 2]")
    nodes: tuple[Count, ...] | None = _key(
        "nodes of the points instead of ranks, each with the ranks that the site puts on one", None
    )
    factors: tuple[Positive, ...] = _key("nodes per axis over those of the job, for `refinement`", (1.0,))
    measure: Measure = _key(
        "`steps`: a number of Newton steps; `solve`: Newton's method to the job's residual; `kernels`:"
        " residual, tangent, halo, transforms alone; `files`: writing and reading a state",
        "steps",
    )
    newton_steps: Count = _key("Newton steps of one repeat, for `steps`", 1)
    repeats: Count = _key(
        "measured repeats of every point; one where ranks share cores, which tells all counts", 3
    )
    warm_ups: int = _key("repeats before those, not measured", 1, ge=0)
    budget: Positive | None = _key(
        "wall time in seconds of one call of the command; the next call goes on", None, shown="none"
    )
    core_hours: Positive | None = _key(
        "most that all points may use together on a site; no point is submitted beyond", None, shown="none"
    )
    point_seconds: Positive = _key("wall time after which one point is given up", 1800.0)
    stop_below: float = _key("efficiency under which no larger point is measured", 0.0, ge=0, lt=1)
    folder: Name | None = _key(
        "where rows and report are kept, relative to the file", None, shown="`runs/<name of the file>`"
    )

    @model_validator(mode="after")
    def _judge(self) -> StudySection:
        if self.ranks is not None and self.nodes is not None:
            raise ValueError("give ranks or nodes, not both")
        return self
