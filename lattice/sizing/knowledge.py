"""What was found out about a job beforehand: LU analyses, the coarse lattice, the step of its march."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, replace
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.sizing.factors import Factors, assumed, shared
from lattice.sizing.problem import Problem, problem_of

if TYPE_CHECKING:
    from lattice.geometry.subspace import Subspace
    from lattice.job.schema import Job
    from lattice.laws.law import Law

GUESSED_DT = 0.1
"""Step of a march that nobody has looked for."""
LEAST_GAIN = 1.5


@dataclass(frozen=True)
class Coarse:
    """The second level of `coarse`.

    Parameters
    ----------
    nt, ny, nx, order : int
    smoother : str
        "spectral" or "slabs".
    origin : str
        How it is known, in words.
    """

    nt: int
    ny: int
    nx: int
    order: int
    smoother: str
    origin: str

    def on(self, fine: Lattice) -> Lattice:
        """Return the coarse lattice of a fine one: never finer."""
        counts = {name: min(getattr(self, name), getattr(fine, name)) for name in ("nt", "ny", "nx")}
        order_t = min(6, max(fine.order_t, 4))
        return replace(fine, order_t=order_t, order_x=self.order, order_y=self.order, **counts)


@dataclass(frozen=True)
class Knowledge:
    """What probes have found; empty, everything is assumed.

    Parameters
    ----------
    factors : mapping of Lattice to Factors
        On one rank.
    exact : mapping of Lattice to Factors
        On the rank count `exact_ranks`.
    exact_ranks : int
        0 where there are none.
    coarse : Coarse or None
    dt : float or None
        Step of the march.
    problems : tuple of str
        What could not be found out, and why.
    """

    factors: Mapping[Lattice, Factors] = field(default_factory=dict)
    exact: Mapping[Lattice, Factors] = field(default_factory=dict)
    exact_ranks: int = 0
    coarse: Coarse | None = None
    dt: float | None = None
    problems: tuple[str, ...] = ()

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return {
            "factors": [[asdict(lattice), f.record()] for lattice, f in self.factors.items()],
            "exact": [[asdict(lattice), f.record()] for lattice, f in self.exact.items()],
            "exact_ranks": self.exact_ranks,
            "coarse": None if self.coarse is None else asdict(self.coarse),
            "dt": self.dt,
            "problems": list(self.problems),
        }

    @classmethod
    def of_record(cls, record: Mapping[str, Any]) -> Knowledge:
        """Return the knowledge that `record` wrote."""
        factors, exact = (
            {Lattice(**lattice): Factors(**found) for lattice, found in record[name]}
            for name in ("factors", "exact")
        )
        coarse = None if record["coarse"] is None else Coarse(**record["coarse"])
        return cls(factors, exact, record["exact_ranks"], coarse, record["dt"], tuple(record["problems"]))

    def factors_of(self, problem: Problem, ranks: int) -> Factors:
        """Return the factors of a lattice on a number of ranks, from the best source there is."""
        lattice = problem.lattice
        if ranks == self.exact_ranks and lattice in self.exact:
            return self.exact[lattice]
        found = self.factors.get(lattice)
        if found is None:
            found = assumed(problem.numbers, problem.nonzeros, problem.axes)
        return shared(found, ranks)


def assumed_coarse(job: Job, fine: Lattice) -> Coarse:
    """Return a coarse lattice where nobody has looked: the job's own keys, else half the nodes per axis."""
    asked = job.solve.coarse
    smoother = asked.smoother if asked.smoother != "auto" else "spectral"
    order = asked.order or (8 if fine.dimensions == 1 or smoother == "slabs" else 6)
    counts = {
        name: nodes if nodes == 1 else getattr(asked, name) or max(4, 2 * -(-nodes // 4))
        for name, nodes in (("nt", fine.nt), ("ny", fine.ny), ("nx", fine.nx))
    }
    given = all(getattr(asked, name) for name, nodes in counts.items() if nodes > 1)
    origin = "the job's" if given else "assumed: half the nodes of every axis"
    return Coarse(**counts, order=order, smoother=smoother, origin=origin)


def coarse_of_answer(answer: Mapping[str, Any]) -> Coarse:
    """Return the coarse lattice a probe has found."""
    counts = {name: int(answer[name]) for name in ("nt", "ny", "nx", "order")}
    return Coarse(**counts, smoother=str(answer["smoother"]), origin="found on a small box of these spacings")


class Counter:
    """Counts of one job's lattices, each computed once.

    Parameters
    ----------
    job : Job
    """

    def __init__(self, job: Job) -> None:
        from lattice.job.subspace import subspace_of

        self.job, self.law, self.values = job, job.make_law(), job.make_values()
        self.subspace: Subspace | None = subspace_of(job, self.law)
        self._known: dict[Lattice, Problem] = {}

    def problem(self, lattice: Lattice) -> Problem:
        """Return the counts of the job's law on a lattice."""
        if lattice not in self._known:
            law: Law = self.law
            free = self.job.solve.free or ()
            self._known[lattice] = problem_of(law, lattice, free, self.values, self.subspace)
        return self._known[lattice]

    def part(self, lattice: Lattice) -> Problem:
        """Return the counts of a part of the lattice, such as a slab, without a subspace."""
        free = self.job.solve.free or ()
        try:
            return problem_of(self.law, lattice, free, self.values)
        except InputError:
            return self.problem(self.job.make_lattice())
