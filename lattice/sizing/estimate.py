"""What a job needs: memory of every rank by part, time, core hours, files, and on which assumptions."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from lattice.geometry.lattice import Lattice
from lattice.sizing import seconds
from lattice.sizing.calibration import Calibration
from lattice.sizing.figures import Assumptions, Estimate, LegEstimate
from lattice.sizing.knowledge import GUESSED_DT, Coarse, Counter, Knowledge, assumed_coarse
from lattice.sizing.memory import PROGRAM_MB, LuTask, checkpoint_mb, memory_parts
from lattice.solve.legs import Leg, halved, plan_legs
from lattice.solve.refine import refined_lattice
from lattice.solve.registry import DIRECT_UNKNOWNS

if TYPE_CHECKING:
    from lattice.job.schema import Job
    from lattice.sizing.problem import Problem

ROUGH_STARTS = ("march", "window", "recurrence", "noise", "mosaic", "excerpt")
"""Starts after which a run may take the damped stage and refine: known only once the start is made."""
ITERATIONS = {"direct": 2, "coarse": 14, "slabs": 30, "patches": 60}
NEWTON_STEPS = {"state": 4, "march": 5, "waves": 5}
LATER_STEPS = 4
DAMPED_STEPS, DAMPED_ITERATIONS = 60, 80
LEAST_UNKNOWNS = 2_000
"""Numbers of a rank below which messages cost more than another rank saves."""


def estimate(
    job: Job,
    ranks: int = 1,
    calibration: Calibration | None = None,
    knowledge: Knowledge | None = None,
    assumptions: Assumptions | None = None,
) -> Estimate:
    """Return what a job needs on a number of ranks.

    Starts no MPI and no PETSc: what these could tell is in `knowledge`, from `lattice.sizing.gather`.

    Parameters
    ----------
    job : Job
        Resolved.
    ranks : int
    calibration : Calibration, optional
        Without one there is no time and no core hours.
    knowledge : Knowledge, optional
        Without it factors come from growth laws alone, and are rougher.
    assumptions : Assumptions, optional

    Raises
    ------
    InputError
        If the ranks cannot share the lattice.
    """
    return _Sizing(job, ranks, calibration, knowledge or Knowledge(), assumptions or Assumptions()).make()


def lattices_of(job: Job, assumptions: Assumptions | None = None) -> list[tuple[Leg, Lattice]]:
    """Return the legs a run is expected to make, and the lattice of each."""
    chosen = _stages(job, assumptions or Assumptions())
    found: list[tuple[Leg, Lattice]] = []
    lattice = job.make_lattice()
    for leg in plan_legs(chosen, job.solve):
        if leg.halvings >= 0:
            lattice = halved(job.make_lattice(), leg.halvings)
        elif leg.factor != 1.0:
            lattice = refined_lattice(lattice, leg.factor)
        found.append((leg, lattice))
    return found


def _stages(job: Job, assumptions: Assumptions) -> tuple[str, ...]:
    if job.solve.stages is not None:
        return tuple(job.solve.stages)
    if assumptions.stages is not None:
        return assumptions.stages
    steady = job.lattice.nt == 1 or job.solve.nested
    return ("damped", "newton", "refine") if job.start.kind in ROUGH_STARTS and not steady else ("newton",)


@dataclass(frozen=True)
class Asked:
    """A matrix to analyse.

    Parameters
    ----------
    lattice : Lattice
        The whole one, without a subspace.
    part : Lattice
        What its problem has, the key of its factors.
    folded : bool
        The job's subspace applies.
    shared : bool
        All ranks hold it together.
    """

    lattice: Lattice
    part: Lattice
    folded: bool
    shared: bool


def matrices_of(
    job: Job, ranks: int, knowledge: Knowledge, assumptions: Assumptions | None = None
) -> list[Asked]:
    """Return the matrices that a run factorises, each once."""
    return _Sizing(job, ranks, None, knowledge, assumptions or Assumptions()).matrices()


class _Sizing:
    """The sizing of one job on one number of ranks."""

    def __init__(
        self,
        job: Job,
        ranks: int,
        calibration: Calibration | None,
        knowledge: Knowledge,
        assumptions: Assumptions,
    ) -> None:
        self.job, self.ranks, self.calibration = job, ranks, calibration
        self.knowledge, self.given = knowledge, assumptions
        self.counter = Counter(job)
        self.said: list[str] = []

    def make(self) -> Estimate:
        """Return the estimate."""
        legs = tuple(self._leg(leg, lattice) for leg, lattice in lattices_of(self.job, self.given))
        self._say_counts(legs)
        start_up, start, total = self._times(legs)
        lattices = [lattice for _, lattice in lattices_of(self.job, self.given)]
        state = max(checkpoint_mb(self.counter.problem(lattice)) for lattice in lattices)
        return Estimate(
            ranks=self.ranks,
            legs=legs,
            rank_mb=max(leg.rank_mb for leg in legs),
            all_ranks_mb=max(leg.all_ranks_mb for leg in legs),
            start_up_seconds=start_up,
            start_seconds=start,
            seconds=total,
            core_hours=None if total is None else total * self.ranks / 3600,
            state_mb=state,
            # The state, the point the leg began at, and the next state until it takes the old one's place.
            scratch_mb=3 * state + 1.0,
            assumptions=tuple(dict.fromkeys(self.said)),
        )

    def matrices(self) -> list[Asked]:
        """Return the matrices that are factorised, each once."""
        found: dict[Asked, None] = {}
        for _, lattice in lattices_of(self.job, self.given):
            problem = self.counter.problem(lattice)
            name = self._preconditioner(problem)
            coarse = self._coarse(lattice) if name == "coarse" else None
            whole = coarse.on(lattice) if coarse else lattice
            small = self.counter.problem(whole) if coarse else None
            for task in self._tasks(name, problem, small, coarse):
                part = task.problem.lattice
                found[Asked(whole if task.shared else part, part, task.shared, task.shared)] = None
        return list(found)

    def _leg(self, leg: Leg, lattice: Lattice) -> LegEstimate:
        problem = self.counter.problem(lattice)
        name = self._preconditioner(problem)
        coarse = self._coarse(lattice) if name == "coarse" else None
        small = self.counter.problem(coarse.on(lattice)) if coarse else None
        spectral = coarse is not None and coarse.smoother == "spectral"
        tasks = self._tasks(name, problem, small, coarse)
        damped = leg.method == "damped"
        iterations = self._iterations(name, coarse, damped)
        steps = self._steps(leg)
        basis = iterations if not damped else 0
        program = self.calibration.program_mb if self.calibration else PROGRAM_MB
        parts = memory_parts(problem, self.ranks, basis, tasks, small, spectral, damped, program)
        mean = dict(parts)
        if "LU" in mean:
            uneven = sum(t.factors.largest - t.factors.megabytes / self.ranks for t in tasks if t.shared)
            mean["LU"] -= uneven
        step = self._step(problem, iterations, tasks, small, spectral, damped)
        once = 0.0
        if self.calibration:
            speeds = self.calibration.on(self.ranks)
            once = 0.0 if damped else seconds.analysis_seconds(tasks, speeds)
            once += seconds.plan_seconds(problem, speeds, small) if small or damped else 0.0
        total = sum(step.values()) * steps + once if step else None
        return LegEstimate(
            leg.stage,
            leg.method,
            lattice.shape,
            problem.unknowns,
            name,
            small.lattice.shape if small else None,
            parts,
            sum(mean.values()) * self.ranks,
            step,
            steps,
            iterations,
            total,
            "/".join(dict.fromkeys(task.factors.origin for task in tasks)) or "none",
        )

    def _step(
        self,
        problem: Problem,
        iterations: int,
        tasks: Sequence[LuTask],
        small: Problem | None,
        spectral: bool,
        damped: bool,
    ) -> dict[str, float]:
        if self.calibration is None:
            return {}
        speeds = self.calibration.on(self.ranks)
        if damped:
            return {"linear": seconds.damped_seconds(problem, speeds, iterations)}
        return seconds.step_seconds(problem, speeds, iterations, tasks, small, spectral)

    def _preconditioner(self, problem: Problem) -> str:
        """Return the preconditioner, as `lattice.solve.registry` chooses it."""
        name = str(self.job.solve.preconditioner)
        if name != "auto":
            return name
        most = DIRECT_UNKNOWNS[problem.dimensions]
        return "direct" if problem.numbers <= most or problem.lattice.nt == 1 else "coarse"

    def _coarse(self, lattice: Lattice) -> Coarse:
        if self.knowledge.coarse is not None:
            return self.knowledge.coarse
        coarse = assumed_coarse(self.job, lattice)
        if coarse.origin != "the job's":
            self.said.append(f"coarse lattice {coarse.origin}")
        return coarse

    def _tasks(
        self, name: str, problem: Problem, small: Problem | None, coarse: Coarse | None
    ) -> list[LuTask]:
        """Return what is factorised."""
        if name == "direct":
            return [self._shared(problem, self.ranks)]
        if name == "patches" or small is None or coarse is None:
            return [self._patches(problem)]
        options = self.job.solve.coarse
        if options.solver == "patches":
            tasks = [self._patches(small)]
        else:
            tasks = [self._shared(small, min(self.ranks, options.lu_ranks or self.ranks))]
        if coarse.smoother == "slabs":
            tasks.append(self._slabs(problem))
        return tasks

    def _shared(self, problem: Problem, ranks: int) -> LuTask:
        return LuTask(problem, self.knowledge.factors_of(problem, ranks))

    def _patches(self, problem: Problem) -> LuTask:
        """Return the patches of a rank: its block, cut as the job asks, with overlap."""
        options, lattice, copies = self.job.solve.patches, problem.lattice, 1
        sizes = {}
        grid = _grid(problem, self.ranks)
        for name, nodes, parts in zip(("nt", "ny", "nx"), lattice.shape, grid, strict=True):
            block = -(-nodes // parts)
            asked = getattr(options, name) or block
            cuts = -(-block // asked)
            copies *= cuts
            reach = -(-block // cuts) + 2 * options.overlap
            sizes[name] = nodes if nodes == 1 else min(nodes, reach)
        return self._own(replace(lattice, **sizes), copies)

    def _slabs(self, problem: Problem) -> LuTask:
        options, lattice = self.job.solve.coarse, problem.lattice
        count = max(self.ranks, min(options.slabs or max(4, self.ranks), max(1, lattice.nt // 4)))
        levels = min(lattice.nt, -(-lattice.nt // count) + 2 * options.slab_overlap)
        return self._own(replace(lattice, nt=levels), -(-count // self.ranks))

    def _own(self, lattice: Lattice, copies: int) -> LuTask:
        part = self.counter.part(lattice)
        return LuTask(part, self.knowledge.factors_of(part, 1), copies, shared=False)

    def _iterations(self, name: str, coarse: Coarse | None, damped: bool) -> int:
        if damped:
            return self.given.damped_iterations or DAMPED_ITERATIONS
        kind = "slabs" if coarse is not None and coarse.smoother == "slabs" else name
        return self.given.iterations or ITERATIONS[kind]

    def _steps(self, leg: Leg) -> int:
        if leg.method == "damped":
            return self.given.damped_steps or min(DAMPED_STEPS, self.job.solve.damped.steps)
        first = NEWTON_STEPS.get(self.job.start.kind, 5) if leg.stage == "newton" else LATER_STEPS
        return self.given.steps or min(first, self.job.solve.newton_steps)

    def _say_counts(self, legs: Sequence[LegEstimate]) -> None:
        if self.job.solve.stages is None and self.given.stages is None:
            text = ", ".join(dict.fromkeys(leg.stage for leg in legs))
            why = "the run decides by the start's residual; --stages newton sizes the shorter way"
            self.said.append(f"stages {text}" + (f" ({why})" if len(legs) > 1 else ""))
        for leg in legs:
            kind = "conjugate gradient" if leg.method == "damped" else "linear"
            self.said.append(f"{leg.stage}: {leg.steps} steps of {leg.iterations} {kind} iterations")

    def _times(self, legs: Sequence[LegEstimate]) -> tuple[float | None, float | None, float | None]:
        calibration = self.calibration
        if calibration is None:
            return None, None, None
        speeds = calibration.on(self.ranks)
        two_level = any(leg.coarse for leg in legs)
        start_up = speeds.two_level_start_up if two_level else speeds.start_up
        start = self._start(calibration)
        return start_up, start, start_up + start + sum(leg.seconds or 0.0 for leg in legs)

    def _start(self, calibration: Calibration) -> float:
        """Return the seconds of making the start."""
        start, lattice = self.job.start, self.job.make_lattice()
        problem = self.counter.problem(lattice)
        if start.kind not in ("march", "window", "recurrence"):
            return calibration.on(self.ranks).write.seconds(problem.numbers)
        given = getattr(start, "dt", None)
        window_dt = given or self.knowledge.dt or GUESSED_DT
        if not given:
            known = "found on a small box" if self.knowledge.dt else "assumed"
            self.said.append(f"march: step {window_dt:.3g} ({known}), twice that while it spins up")
        # The spin-up may err ten times as much a step; the error falls as dt**5.
        spin_dt = given or 2.0 * window_dt
        period = self.counter.values["period"] if lattice.nt > 1 else 0.0
        lengths = (1.0 + start.blend) * period + (period if start.match_drift else 0.0)
        lengths += getattr(start, "march_time", 0.0)
        steps = 1.1 * start.spin_up / spin_dt + lengths / window_dt
        ny, nx = lattice.ny, lattice.nx
        if start.shape is not None:
            ny, nx = (1, *start.shape)[-2:] if len(start.shape) == 1 else tuple(start.shape)
        return seconds.march_seconds(steps, ny * nx * problem.components, calibration)


def _grid(problem: Problem, ranks: int) -> tuple[int, int, int]:
    from lattice.geometry.blocks import process_grid

    return process_grid(ranks, problem.lattice, problem.halo) or (1, 1, 1)
