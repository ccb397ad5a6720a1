"""A leg of Newton's method."""

from __future__ import annotations

from typing import Any

from lattice.errors import LatticeError
from lattice.solve.course import Course, Ending, shape_text
from lattice.solve.newton import Newton, NewtonResult, Step
from lattice.solve.recorder import Done


def newton_leg(course: Course) -> Ending:
    """Solve by Newton's method from where the leg stands. Collective."""
    system, recorder, stage = course.system, course.recorder, course.leg.stage
    before = steps_of(recorder.history[course.progress.first :])
    if course.progress.reports:
        course.report(f"{stage}: Newton's method on {shape_text(course.lattice)} nodes")

    def after_step(step: Step, x: Any) -> None:
        done = Done(stage, step.number, step.residual_rms, step.linear_iterations)
        recorder.step(done, system, x, newton.function())
        course.keep_choice()
        recorder.write(system, x, "running", course.progress)

    made = course.inverse(course.report)
    newton = Newton(system, made, course.options, course.stop, after_step, before)
    system.set_reference(course.reference)
    if not before:
        recorder.begin_leg([u.name for u in system.unknowns])
    result = newton.solve(course.x)
    course.seconds |= _phases(newton.seconds)
    newton.destroy()
    if not recorder.history:
        raise LatticeError(f"Newton's method made no step: {result.reason}")
    return _ending(result)


def steps_of(history: list[dict[str, Any]]) -> tuple[Step, ...]:
    """Return the steps that a leg's entries of the history tell of."""
    return tuple(
        Step(number, entry["residual_rms"], entry["linear_iterations"], 0.0)
        for number, entry in enumerate(history)
    )


def _ending(result: NewtonResult) -> Ending:
    if result.converged:
        return Ending("done", result.reason)
    return Ending("interrupted" if result.interrupted else "failed", result.reason)


def _phases(seconds: dict[str, float]) -> dict[str, float]:
    """Return the seconds of a solve by phase, without what followed its steps."""
    solving = seconds["solve"] - seconds["after_step"]
    return {
        "set_up": seconds["set_up"],
        "residual": seconds["residual"],
        "linear": solving - seconds["set_up"] - seconds["residual"],
    }
