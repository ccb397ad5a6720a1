"""The end of a run: its last state file, summary.json, picture, the kind of state, the last line."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from lattice.classify.kind import classify
from lattice.classify.words import lines
from lattice.errors import LatticeError
from lattice.store.runfolder import Summary, peak_memory_mb

if TYPE_CHECKING:
    from lattice.solve.course import Course, Ending
    from lattice.solve.recorder import Recorder
    from lattice.system.system import System

CONVERGED, NOT_CONVERGED, INTERRUPTED = 0, 3, 4
CODES = {"converged": CONVERGED, "interrupted": INTERRUPTED}
"""Exit codes of outcomes; of all others `NOT_CONVERGED`."""
TRIVIAL = 1e-16
"""Mean square below which a state is nothing but the rounding of zero."""


def conclude(course: Course, ending: Ending) -> tuple[int, Summary]:
    """Write what a run ends with; return its exit code and summary.

    Collective.
    """
    recorder, system, x = course.recorder, course.system, course.x
    found = _classification(recorder, system, x) if ending.word == "converged" else {}
    recorder.write(system, x, ending.word, course.progress, found)
    summary = Summary(
        outcome=ending.word,
        reason=ending.reason,
        law=system.law.name,
        lattice=system.whole_lattice,
        unknowns=system.blocks.size + len(system.unknowns),
        residual_rms=recorder.history[-1]["residual_rms"],
        residual_max=recorder.residual_max,
        scalars=system.values_of(x),
        mean_square=recorder.mean_square,
        newton_steps=recorder.history[-1]["step"],
        linear_iterations=recorder.linear_iterations,
        seconds=course.seconds,
        ranks=course.comm.size,
        peak_memory_mb=peak_memory_mb(course.comm),
        versions=recorder.versions,
        classification=found,
        stage=course.leg.stage,
        stages=list(course.progress.reports),
    )
    recorder.files.write_summary(summary)
    if ending.word == "converged":
        recorder.files.drop_reference()
    start = course.job.start
    if ending.word == "converged" and start.kind == "mosaic":
        _compare_with_mosaic(course, start)
    if summary.mean_square < TRIVIAL:
        course.report("caution: the state is zero everywhere; start from a field nearer to a wanted one")
    if course.job.output.picture:
        _draw(recorder)
    course.report(f"{ending.word}: {ending.reason}; {_words(summary)}; files in {recorder.files.path}")
    return CODES.get(ending.word, NOT_CONVERGED), summary


def _classification(recorder: Recorder, system: System, x: Any) -> dict[str, Any]:
    """Return what kind of state was found, as plain data, and tell it."""
    values = system.values_of(x)
    field, blocks = system.whole_field(x), system.whole_blocks
    found = classify(system.law, system.whole_lattice, values, field, blocks, recorder.comm)
    for label, text in lines(found, system.law.components, values, system.law.dimensions):
        recorder.report(f"{label or '':<12}{text}")
    return found.record()


def _compare_with_mosaic(course: Course, start: Any) -> None:
    """Tell what has become of every member of the mosaic the run began from."""
    from lattice.starts.mosaic import report_settled

    system, x = course.system, course.x
    report_settled(
        start,
        system.whole_lattice,
        system.values_of(x),
        system.law,
        system.whole_field(x),
        system.whole_blocks.block,
        course.comm,
        course.report,
    )


def _draw(recorder: Recorder) -> None:
    """Draw the state's picture on one rank; a failure costs the picture, not the run."""
    if recorder.comm.rank > 0:
        return
    from lattice.show.pictures import plot_state

    try:
        plot_state(recorder.files.state, recorder.files.picture)
    except LatticeError as error:
        recorder.report(f"no picture: {error}")


def _words(summary: Summary) -> str:
    return (
        f"residual_rms {summary.residual_rms:.3e} after {summary.newton_steps} steps and"
        f" {summary.linear_iterations} linear iterations, {summary.seconds['total']:.1f} s"
    )
