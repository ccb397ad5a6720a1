"""Time of a step by part, from counts and what a machine was measured to do."""

from __future__ import annotations

from collections.abc import Sequence

from lattice.sizing.calibration import Calibration, Speeds
from lattice.sizing.factors import Factors
from lattice.sizing.memory import LuTask
from lattice.sizing.problem import Problem

RESIDUALS = 2.0
"""Residuals per Newton step: one, and what the line search and its measures take."""
ORTHOGONAL = 0.5
"""A vector operation of GMRES, done for all basis vectors at once in PETSc, over one called from Python."""
SMOOTHING = 4.0
"""Vector operations of one application of two levels besides transforms."""


def step_seconds(
    problem: Problem,
    speeds: Speeds,
    iterations: int,
    tasks: Sequence[LuTask],
    coarse: Problem | None = None,
    spectral: bool = False,
) -> dict[str, float]:
    """Return the seconds of one Newton step by part.

    Parameters
    ----------
    problem : Problem
    speeds : Speeds
        On the ranks of the run.
    iterations : int
        Linear iterations of the step.
    tasks : sequence of LuTask
        What is factorised: the lattice itself, or the coarse one first.
    coarse : Problem, optional
        The coarse lattice, where there are two levels.
    spectral : bool
        The spectral smoother is used.

    Returns
    -------
    dict of str to float
        assembly, factorisation, set-up (what else is done once a step), linear, residual, write.
    """
    tangent = _tangent(problem, speeds)
    parts = {
        "assembly": sum(_assembly(problem, task, speeds) for task in tasks),
        "factorisation": sum(_factor(task, speeds) for task in tasks),
        "set-up": problem.scalars * tangent + _borders(problem, speeds, tasks, coarse),
        "linear": iterations * iteration_seconds(problem, speeds, iterations, tasks, coarse, spectral),
        "residual": RESIDUALS * tangent,
        "write": speeds.write.seconds(problem.numbers),
    }
    if coarse is not None:
        owned, small = problem.owned(speeds.ranks), coarse.owned(speeds.ranks)
        restricted = (1 + problem.scalars) * (_half(speeds, owned) + _half(speeds, small))
        parts["set-up"] += restricted + speeds.symbol.seconds(owned)
        parts["set-up"] += coarse.scalars * _tangent(coarse, speeds)
    return parts


def iteration_seconds(
    problem: Problem,
    speeds: Speeds,
    iterations: int,
    tasks: Sequence[LuTask],
    coarse: Problem | None = None,
    spectral: bool = False,
) -> float:
    """Return the mean seconds of one linear iteration of a solve of so many."""
    owned = problem.owned(speeds.ranks)
    products = _tangent(problem, speeds) * (1 if coarse is None else 2)
    basis = speeds.vector.constant + ORTHOGONAL * iterations * speeds.vector.each * owned
    solves = sum(_solve(task, speeds) for task in tasks)
    total = products + basis + solves
    if coarse is not None:
        small = coarse.owned(speeds.ranks)
        pairs = 2 if spectral else 1
        total += pairs * speeds.transform.seconds(owned) + speeds.transform.seconds(small)
        total += SMOOTHING * speeds.vector.seconds(owned)
    return total


def damped_seconds(problem: Problem, speeds: Speeds, iterations: int) -> float:
    """Return the seconds of one damped step with so many conjugate gradient iterations.

    By the spectral preconditioner; the other one costs about as much a step, with fewer iterations.
    """
    owned = problem.owned(speeds.ranks)
    each = 2 * _tangent(problem, speeds) + speeds.transform.seconds(owned) + 4 * speeds.vector.seconds(owned)
    once = (6 + problem.scalars) * _tangent(problem, speeds) + speeds.symbol.seconds(owned)
    return iterations * each + once + speeds.write.seconds(problem.numbers)


def analysis_seconds(tasks: Sequence[LuTask], speeds: Speeds) -> float:
    """Return the seconds of the analyses, done once on a lattice."""
    return sum(task.copies * speeds.analysis.seconds(task.problem.nonzeros) for task in tasks)


def plan_seconds(problem: Problem, speeds: Speeds, coarse: Problem | None) -> float:
    """Return the seconds of planning transforms, done once on a lattice."""
    small = 0.0 if coarse is None else speeds.plan.seconds(coarse.owned(speeds.ranks))
    return speeds.plan.seconds(problem.owned(speeds.ranks)) + small


def march_seconds(steps: float, numbers: int, calibration: Calibration) -> float:
    """Return the seconds of a march of so many steps of slices of so many numbers; one rank marches."""
    return steps * calibration.march.seconds(numbers)


def factor_seconds(factors: Factors, speeds: Speeds) -> float:
    """Return the seconds of one factorisation shared by the ranks."""
    return speeds.factor.seconds(factors.entries) + speeds.flop * factors.flops


def _tangent(problem: Problem, speeds: Speeds) -> float:
    nodes = problem.owned(speeds.ranks) / problem.components
    return speeds.tangent.seconds(nodes * problem.flops_per_node)


def _assembly(problem: Problem, task: LuTask, speeds: Speeds) -> float:
    nonzeros = task.problem.nonzeros if task.shared else problem.nonzeros
    return speeds.assembly.seconds(nonzeros / speeds.ranks)


def _factor(task: LuTask, speeds: Speeds) -> float:
    return task.copies * factor_seconds(task.factors, speeds)


def _solve(task: LuTask, speeds: Speeds) -> float:
    return task.copies * speeds.solve.seconds(task.factors.entries)


def _borders(problem: Problem, speeds: Speeds, tasks: Sequence[LuTask], coarse: Problem | None) -> float:
    """Return the seconds of eliminating scalars and pins: one solve each, on the level of the factors."""
    if not tasks:
        return 0.0
    first = tasks[0]
    level = problem if coarse is None else coarse
    columns = 2 * problem.scalars if first.shared else problem.scalars
    each = speeds.vector.seconds(level.owned(speeds.ranks))
    return columns * (_solve(first, speeds) + (2 + problem.scalars) * each)


def _half(speeds: Speeds, numbers: float) -> float:
    """Return the seconds of one transform, one way."""
    return 0.5 * speeds.transform.seconds(numbers)
