"""Finds out about a job, in processes of their own, what counting cannot tell."""

from __future__ import annotations

from dataclasses import asdict, replace
from typing import TYPE_CHECKING, Any

from lattice.errors import LatticeError
from lattice.sizing.asking import Launch, alone, ask
from lattice.sizing.estimate import lattices_of, matrices_of
from lattice.sizing.factors import Factors
from lattice.sizing.figures import Assumptions
from lattice.sizing.knowledge import Coarse, Counter, Knowledge, assumed_coarse, coarse_of_answer
from lattice.solve.registry import DIRECT_UNKNOWNS

if TYPE_CHECKING:
    from lattice.geometry.lattice import Lattice
    from lattice.job.schema import Job

LIMIT = 180.0
"""Seconds a probe may take."""


def gather(
    job: Job,
    ranks: int = 1,
    assumptions: Assumptions | None = None,
    exact_ranks: int = 0,
    launch: Launch = alone,
) -> Knowledge:
    """Return what probes on this machine tell about a job; what they cannot is told in `problems`.

    Parameters
    ----------
    job : Job
    ranks : int
        That the run is to have: patches and slabs depend on it.
    assumptions : Assumptions, optional
    exact_ranks : int
        Analyse on so many ranks, too; 0 does not.
    launch : callable
        Makes the command line that runs a program on several ranks.
    """
    knowledge = _with_coarse(job, assumptions)
    knowledge = _with_factors(job, ranks, knowledge, assumptions, 1, alone)
    if exact_ranks > 1:
        knowledge = _with_factors(job, exact_ranks, knowledge, assumptions, exact_ranks, launch)
    return knowledge


def _question(job: Job, **more: Any) -> dict[str, Any]:
    return {"job": job.model_dump_json(), **more}


def _with_coarse(job: Job, assumptions: Assumptions | None) -> Knowledge:
    """Return the coarse lattice, and the step of the march where it was sought."""
    fine = job.make_lattice()
    asked = assumed_coarse(job, fine)
    marched = job.start.kind in ("march", "window", "recurrence") and job.start.dt is None
    wanted = _takes_coarse(job, assumptions)
    given = asked.origin == "the job's" and job.solve.coarse.smoother != "auto"
    if not marched and (not wanted or given):
        return Knowledge()
    try:
        answer = ask("coarse", _question(job), 1, alone, LIMIT)
    except LatticeError as error:
        return Knowledge(problems=(f"the coarse lattice was not sought: {error}",) if wanted else ())
    dt = answer.get("dt")
    if not wanted:
        return Knowledge(dt=dt)
    if "error" in answer:
        return Knowledge(dt=dt, problems=(f"no coarse lattice on a small box: {answer['error']}",))
    return Knowledge(coarse=_laid_over(job, fine, coarse_of_answer(answer)), dt=dt)


def _laid_over(job: Job, fine: Lattice, found: Coarse) -> Coarse:
    """Return the coarse lattice with what the job gives itself."""
    asked = job.solve.coarse
    given = {
        name: min(getattr(fine, name), getattr(asked, name))
        for name in ("nt", "ny", "nx")
        if getattr(asked, name) is not None
    }
    return replace(found, **given)


def _takes_coarse(job: Job, assumptions: Assumptions | None) -> bool:
    """Tell whether a leg of the run has two levels."""
    name = job.solve.preconditioner
    if name != "auto":
        return bool(name == "coarse")
    counter = Counter(job)
    problems = [counter.problem(lattice) for _, lattice in lattices_of(job, assumptions)]
    return any(p.numbers > DIRECT_UNKNOWNS[p.dimensions] and p.lattice.nt > 1 for p in problems)


def _with_factors(
    job: Job,
    ranks: int,
    knowledge: Knowledge,
    assumptions: Assumptions | None,
    on_ranks: int,
    launch: Launch,
) -> Knowledge:
    """Return the knowledge with the analyses of all matrices on a number of ranks."""
    matrices = [m for m in matrices_of(job, ranks, knowledge, assumptions) if m.shared or on_ranks == 1]
    if not matrices:
        return knowledge
    question = _question(job, matrices=[(asdict(m.lattice), m.folded) for m in matrices])
    try:
        answer = ask("analysis", question, on_ranks, launch, LIMIT)
    except LatticeError as error:
        problem = f"the LU was not analysed on {on_ranks} rank(s): {error}"
        return replace(knowledge, problems=(*knowledge.problems, problem))
    found = {m.part: Factors(**record) for m, record in zip(matrices, answer["factors"], strict=True)}
    if on_ranks > 1:
        return replace(knowledge, exact=found, exact_ranks=on_ranks)
    return replace(knowledge, factors={**knowledge.factors, **found})
