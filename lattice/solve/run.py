"""A run: start, legs of damped steps and of Newton's method, summary."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from lattice.errors import LatticeError
from lattice.solve.conclusion import conclude
from lattice.solve.course import Course, Ending
from lattice.solve.damped_leg import damped_leg
from lattice.solve.legs import retry, retry_held
from lattice.solve.newton_leg import newton_leg
from lattice.solve.petsc import start_petsc
from lattice.solve.progress import kept_state
from lattice.solve.recorder import Recorder
from lattice.solve.stop import StopFlag
from lattice.store.runfolder import RunFolder, Summary, lattice_numbers

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.job.schema import Job
    from lattice.store.statemeta import StateMeta

Report = Callable[[str], None]


@dataclass(frozen=True)
class Outcome:
    """How a run ended: the process exit code and the content of summary.json."""

    exit_code: int
    summary: Summary


def run_job(
    job: Job,
    folder: Path,
    comm: MPI.Intracomm,
    petsc_options: Sequence[str],
    report: Report,
    job_text: str,
    resume: bool = False,
) -> Outcome:
    """Run a job and keep its files in a folder.

    Collective.

    Parameters
    ----------
    job : Job
        Resolved, the same on all ranks.
    folder : Path
        Made if it is not there; held by this run until it ends.
    comm : MPI.Intracomm
    petsc_options : sequence of str
        As typed after `--`.
    report : callable
        Takes lines for the user; silent on all ranks but one.
    job_text : str
        The resolved job in TOML, for the folder and the state file.
    resume : bool
        Go on from the folder's state, where it holds one of this job: the steps that follow are those of a
        run that was not interrupted.

    Returns
    -------
    Outcome

    Raises
    ------
    LatticeError
        If the folder cannot be used, the start cannot be made, or a factorisation fails for good.
    InputError
        If the folder's run is that of another job.
    """
    start_petsc(petsc_options)
    with RunFolder(folder, comm) as files, StopFlag(comm, folder) as stop:
        kept = kept_state(files, job_text, comm) if resume else None
        files.begin(job_text, kept is not None)
        return _run(Course(job, Recorder(files, comm, report, job_text), comm, stop), kept)


def _run(course: Course, kept: StateMeta | None) -> Outcome:
    """Do all legs, from the start or from where a kept state stands."""
    if kept is None:
        course.start()
    else:
        course.go_on(kept)
    ending = _legs(course, entered=kept is not None)
    course.seconds["write"] = course.recorder.writing
    course.seconds["total"] = course.recorder.elapsed
    outcome = Outcome(*conclude(course, ending))
    # Freeing is collective: where one rank has failed, it would wait for the others for ever.
    course.destroy()
    return outcome


def _legs(course: Course, entered: bool) -> Ending:
    """Do leg after leg; return how the run ends."""
    while True:
        began = course.recorder.elapsed
        ending = _leg(course, entered)
        _note(course, ending, began)
        entered = False
        if _tries_again(course, ending):
            continue
        if ending.word != "done":
            return _lost(course, ending)
        if course.progress.leg + 1 == len(course.progress.legs):
            return Ending("converged", ending.reason)
        course.update(leg=course.progress.leg + 1)


def _lost(course: Course, ending: Ending) -> Ending:
    """Return the run's ending for a leg that has not come to its own."""
    if ending.word in ("failed", "stalled") and course.leg.stage == "refine":
        return Ending("not surviving refinement", ending.reason)
    return Ending("not converged", ending.reason) if ending.word == "failed" else ending


def _tries_again(course: Course, ending: Ending) -> bool:
    """Go back to the start of a leg that may be tried in another way; tell whether there is one."""
    legs, present = course.progress.legs, course.progress.leg
    if ending.word == "failed":
        others = retry(legs, present)
        if others is not None:
            course.report(f"{ending.reason}; damped steps on this lattice first")
            course.back_to_reference()
            course.update(legs=others)
            return True
    if ending.word == "stalled" and course.options.damped.attempts > 1 and course.loose_now:
        course.report(f"{ending.reason}; again from the start, {' and '.join(course.loose_now)} held")
        course.back_to_start()
        course.update(legs=retry_held(legs, present))
        return True
    return False


def _leg(course: Course, entered: bool) -> Ending:
    """Do the present leg."""
    damped = any(leg.method == "damped" for leg in course.progress.legs[: course.progress.leg + 1])
    try:
        if not entered:
            course.enter()
        return damped_leg(course) if course.leg.method == "damped" else newton_leg(course)
    except LatticeError as error:
        # Damped steps can lead to a field that does not change in time, and its phase cannot be fixed.
        if not damped or len(course.recorder.history) <= 1:
            raise
        return Ending("not converged", str(error))


def _note(course: Course, ending: Ending, began: float) -> None:
    """Add the present leg to the run's reports."""
    entries, stage = course.recorder.history[course.progress.first :], course.leg.stage
    spent = course.recorder.elapsed - began
    report = {
        "stage": stage,
        "method": course.leg.method,
        "lattice": lattice_numbers(course.lattice),
        "steps": entries[-1]["step"] - entries[0]["step"] if entries else 0,
        "linear_iterations": sum(entry["linear_iterations"] for entry in entries),
        "residual_rms": entries[-1]["residual_rms"] if entries else None,
        "seconds": spent,
        "ending": ending.reason,
    }
    course.seconds[stage] = course.seconds.get(stage, 0.0) + spent
    course.update(reports=(*course.progress.reports, report))
