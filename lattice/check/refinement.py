"""Refinement: the state solved again on finer lattices, and what becomes of every observable.

A state that does not survive is none of the law, however small its residual on its own lattice.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.check.convergence import Band, Series, band_of
from lattice.check.failures import own_failure
from lattice.check.observables import Named, measure
from lattice.check.statistics import CORRELATION
from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.laws.calculus import order_of
from lattice.laws.law import Law
from lattice.solve.newton import Newton, NewtonResult, Step
from lattice.solve.refine import carry, refined_lattice
from lattice.solve.registry import make_preconditioner
from lattice.solve.stop import StopFlag
from lattice.system.system import System

if TYPE_CHECKING:
    from lattice.check.subject import Subject

Array = NDArray[np.float64]
Report = Callable[[str], None]

ROUNDING = 1e-12
"""Relative size of differences between lattices that are rounding errors."""
WANTED, ACCEPTED = 1e-11, 1e-9
"""Residual that is wanted on refined lattices, and that is enough where a solve goes no further, in units of
the equations' largest term where that is above 1."""


@dataclass(frozen=True)
class Level:
    """One refined lattice.

    Parameters
    ----------
    shape : tuple of int
        Nodes (nt, ny, nx).
    ratio : float
        Of the spacings of the lattice before it to its own, averaged over the axes.
    converged : bool
    residual_rms : float
    distance : float
        Root mean square by which the solved field differs from that carried over from the lattice before, in
        units of the fluctuation.
    newton_steps : int
    seconds : float
    observables : dict of str to float
    reason : str
        How the solve ended.
    interrupted : bool
        Whether a signal ended it.
    """

    shape: tuple[int, int, int]
    ratio: float
    converged: bool
    residual_rms: float
    distance: float
    newton_steps: int
    seconds: float
    observables: dict[str, float]
    reason: str
    interrupted: bool = False


@dataclass(frozen=True)
class Refinement:
    """What refinement showed.

    Parameters
    ----------
    factor : float
    levels : tuple of Level
        Refined lattices, coarsest first.
    bands : dict of str to Band
        Of every observable, by name; empty where the state was lost.
    """

    factor: float
    levels: tuple[Level, ...]
    bands: dict[str, Band]

    @property
    def survived(self) -> bool:
        """Whether every refined lattice was solved."""
        return all(level.converged for level in self.levels)

    @property
    def distance(self) -> float:
        """The largest distance between neighbouring lattices."""
        return max(level.distance for level in self.levels)


def refine(
    subject: Subject,
    own: Mapping[str, float],
    error_per_residual: float,
    named: Sequence[Named],
    factor: float,
    count: int,
    options: Any,
    report: Report,
    stop: StopFlag,
    term: float,
) -> Refinement:
    """Solve a state again on refined lattices.

    Collective.

    Parameters
    ----------
    subject : Subject
    own : mapping of str to float
        Observables on the state's own lattice.
    error_per_residual : float
        Inverse of the smallest singular value: what a residual may mean for the field.
    named : sequence of Named
        The user's observables.
    factor : float
        Of nodes from lattice to lattice, in every axis.
    count : int
        Refined lattices.
    options : object
        A job's solve section.
    report : callable
        Takes lines for the user.
    stop : StopFlag
        Looked at between steps.
    term : float
        Root mean square of the equations' largest term.
    """
    levels: list[Level] = []
    system, owned, values = subject.system, subject.owned, dict(subject.values)
    for number in range(count):
        lattice = refined_lattice(subject.lattice, factor ** (number + 1))
        level, solved = _solve(subject, system, owned, values, lattice, named, options, report, stop, term)
        if number:
            system.destroy()
        levels.append(level)
        system, owned, values = solved
        if not level.converged:
            break
    if levels:
        system.destroy()
    bands = {}
    if levels and all(level.converged for level in levels):
        bands = make_bands(subject, own, levels, error_per_residual)
    return Refinement(factor, tuple(levels), bands)


def _solve(
    subject: Subject,
    before: System,
    owned: Array,
    values: Mapping[str, float],
    lattice: Lattice,
    named: Sequence[Named],
    options: Any,
    report: Report,
    stop: StopFlag,
    term: float,
) -> tuple[Level, tuple[System, Array, dict[str, float]]]:
    began = time.perf_counter()
    free = tuple(u.name for u in subject.system.unknowns if not u.name.startswith("source_"))
    system = System(subject.law, lattice, values, free, subject.system.means, subject.comm)
    start = carry(before, owned, system)
    x = system.vector()
    system.pack(start, values, x)
    report(f"refinement: {_nodes(lattice)} nodes, {system.blocks.size} field unknowns")
    lines, unit, interrupted = Steps(report), max(1.0, term), False
    floor = rounding_floor(subject.law, lattice, values, math.sqrt(_square(system, start)))
    options = options.model_copy(update={"residual_rms": max(WANTED * unit, floor)})
    try:
        result = _newton(system, x, start, values, options, stop, lines)
        converged, reason, steps = result.converged, result.reason, len(result.steps) - 1
        residual = result.steps[-1].residual_rms if result.steps else math.nan
        interrupted = result.interrupted
        # Where rounding stops Newton's method just short of what is wanted, the state is solved all the same.
        converged = converged or (residual <= ACCEPTED * unit and not interrupted)
    except Exception as error:  # noqa: BLE001 - PETSc wraps the failures of a callback
        converged, reason, steps, residual = False, str(own_failure(error)), 0, math.nan
    solved, found = system.field_of(x), dict(system.values_of(x))
    x.destroy()
    observables = measure(system, solved, found, named) if converged else {}
    level = Level(
        lattice.shape,
        _ratio(before.lattice, lattice),
        converged,
        residual,
        _distance(system, solved, start),
        steps,
        time.perf_counter() - began,
        observables,
        reason,
        interrupted,
    )
    return level, (system, solved, found)


def _newton(
    system: System,
    x: Any,
    start: Array,
    values: Mapping[str, float],
    options: Any,
    stop: StopFlag,
    lines: Steps,
) -> NewtonResult:
    """Solve from the start; by LU where the preconditioner of choice refuses the lattice."""
    system.set_reference(x)
    try:
        return _solved(system, x, options, stop, lines)
    except Exception as error:
        failure = own_failure(error)
        if not isinstance(failure, InputError) or options.preconditioner != "auto":
            raise
        lines.report(f"by LU instead: {failure}")
    system.pack(start, values, x)
    return _solved(system, x, options.model_copy(update={"preconditioner": "direct"}), stop, lines)


def _solved(system: System, x: Any, options: Any, stop: StopFlag, lines: Steps) -> NewtonResult:
    made = make_preconditioner(options.preconditioner, system, options)
    newton = Newton(system, made, options, stop, lines.after)
    result = newton.solve(x)
    newton.destroy()
    return result


class Steps:
    """Reports Newton steps as they come."""

    def __init__(self, report: Report) -> None:
        self.report = report

    def after(self, step: Step, x: Any) -> None:
        """Report one step."""
        self.report(f"  step {step.number}: residual_rms {step.residual_rms:.3e}")


def rounding_floor(law: Law, lattice: Lattice, values: Mapping[str, float], size: float) -> float:
    """Return the residual that rounding alone leaves: of the highest derivatives of a field of a size.

    A difference of order d sums numbers of size `(2/h)^d` to a result of order 1.
    """
    orders = [order_of(equation.expression) for equation in law.equations]
    steps = (values["length_x"] / lattice.nx, values.get("length_y", 1.0) / lattice.ny)
    amplified = max((2.0 / steps[0]) ** a * (2.0 / steps[1]) ** b for a, b, _ in orders)
    highest = max((2.0 / min(steps[: law.dimensions])) ** total for _, _, total in orders)
    return float(np.finfo(float).eps * size * min(amplified, highest))


def _square(system: System, owned: Array) -> float:
    return float(system.comm.allreduce(float((owned**2).sum()))) / system.lattice.nodes


def _nodes(lattice: Lattice) -> str:
    return " x ".join(str(n) for n, axis in zip(lattice.shape, "tyx", strict=True) if n > 1 or axis == "x")


def _ratio(coarse: Lattice, fine: Lattice) -> float:
    """Return the geometric mean over the axes of how much finer a lattice is."""
    ratios = [b / a for a, b in zip(coarse.shape, fine.shape, strict=True) if a > 1]
    return math.exp(float(np.mean(np.log(ratios))))


def _distance(system: System, first: Array, second: Array) -> float:
    """Return the root mean square difference in units of the fluctuation; infinite where it is not finite."""
    means = np.array([system.means.get(c, 0.0) for c in system.law.components])
    local = np.array([((first - second) ** 2).sum(), ((second - means) ** 2).sum()])
    difference, size = system.comm.allreduce(local)
    if not np.isfinite(difference):
        return math.inf
    return math.sqrt(difference / size) if size > 0.0 else 0.0


def make_bands(
    subject: Subject, own: Mapping[str, float], levels: Sequence[Level], error_per_residual: float
) -> dict[str, Band]:
    """Return the bands of all observables that are measured on every lattice."""
    nominal = nominal_order(subject.lattice)
    residual = max(level.residual_rms for level in levels)
    ratios = tuple(level.ratio for level in levels)
    bands = {}
    for name, value in own.items():
        values = (value, *(level.observables[name] for level in levels))
        scale = max(scale_of(name, subject, own), max(abs(v) for v in values))
        noise = scale * max(ROUNDING, residual * error_per_residual)
        bands[name] = band_of(Series(name, values, ratios, nominal, noise))
    return bands


def scale_of(name: str, subject: Subject, own: Mapping[str, float]) -> float:
    """Return the size that an observable's differences are measured against where it may vanish."""
    for unknown in subject.system.unknowns:
        if unknown.name == name:
            return abs(unknown.unit)
    if name.startswith(CORRELATION):
        return abs(own[name])
    size = own.get("mean_square", 1.0)
    return math.sqrt(size) if name.startswith(("min_", "max_")) else size


def nominal_order(lattice: Lattice) -> float:
    """Return the order of the state: of the worst of the axes that have more than one node.

    Examples
    --------
    >>> nominal_order(Lattice(nt=1, ny=1, nx=32, order_t=2, order_x=6))
    6.0
    """
    axes = ((lattice.nt, lattice.order_t), (lattice.ny, lattice.order_y), (lattice.nx, lattice.order_x))
    return float(min(order for nodes, order in axes if nodes > 1))
