"""A leg of damped steps, on new lattices where period or lengths move on."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from lattice.solve.course import Course, Ending, shape_text
from lattice.solve.damped import Damped, DampedResult, DampedStep
from lattice.solve.memory import Memory
from lattice.solve.recorder import Done
from lattice.solve.refine import fitted_lattice, still_fits

LARGEST_CHANGE = 4.0
"""Factor by which period or a length may leave its start, either way, before the steps count as lost."""


def damped_leg(course: Course) -> Ending:
    """Make damped steps from where the leg stands. Collective."""
    options = _options(course)
    course.report(f"{course.leg.stage}: damped steps on {shape_text(course.lattice)} nodes")
    if course.progress.memory.step == 0:
        course.recorder.begin_leg([*(u.name for u in course.system.unknowns), "damping"])
    while True:
        result = _damped_here(course, options)
        course.update(memory=result.memory)
        if result.ending != "drifted":
            return _ending(result)
        change = _change(course)
        if not 1.0 / LARGEST_CHANGE < change < LARGEST_CHANGE:
            return Ending("stalled", f"period or a length has moved to {change:.2g} times its start")
        values = course.system.values_of(course.x)
        lattice = fitted_lattice(course.lattice, values, course.progress.spacings)
        course.report(f"period or lengths have moved: {shape_text(lattice)} nodes keep the spacings")
        course.move_to(lattice, course.loose_now)
        course.update(memory=result.memory.on_new_lattice())


def _options(course: Course) -> Any:
    """Return the stage's options with the residual at which this leg ends."""
    options, progress = course.options.damped, course.progress
    target = options.residual_rms * course.leg.tighter
    if progress.leg + 1 == len(progress.legs):
        target = min(target, course.options.residual_rms)
    return options.model_copy(update={"residual_rms": target})


def _damped_here(course: Course, options: Any) -> DampedResult:
    """Make damped steps on the present lattice."""
    system, lattice, spacings = course.system, course.lattice, course.progress.spacings

    def fits(values: Mapping[str, float]) -> bool:
        return still_fits(lattice, values, spacings, options.relattice)

    def after_step(step: DampedStep, memory: Memory, x: Any, residual: Any) -> None:
        course.update(memory=memory)
        course.recorder.step(_done(course, step), system, x, residual)
        course.keep_choice()
        if course.recorder.is_due():
            course.recorder.write(system, x, "running", course.progress)

    damped = Damped(system, lambda: course.inverse(_silent), options, course.stop, after_step, fits)
    result = damped.run(course.x, course.progress.memory)
    damped.destroy()
    return result


def _done(course: Course, step: DampedStep) -> Done:
    more = {
        "damping": step.damping,
        "solve_iterations": step.solve_iterations,
        "preconditioner": step.preconditioner,
        "nodes": list(course.lattice.shape),
    }
    columns = {"damping": step.damping}
    stage = course.leg.stage
    return Done(stage, step.number, step.residual_rms, step.linear_iterations, more, columns)


def _change(course: Course) -> float:
    """Return the factor by which the period or a length has left the leg's start, the largest one."""
    first = course.recorder.history[course.progress.first]["scalars"]
    now = course.system.values_of(course.x)
    factors = [now[n] / v for n, v in first.items() if n == "period" or n.startswith("length_")]
    return max(factors, key=lambda f: max(f, 1.0 / f), default=1.0)


def _ending(result: DampedResult) -> Ending:
    words = {"small": "done", "step limit": "not converged"}
    return Ending(words.get(result.ending, result.ending), result.reason)


def _silent(text: str) -> None:
    pass
