"""Stages of a run: what is done from a rough start on, and that a run which was cut short loses nothing."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice.errors import InputError
from lattice.job.reader import load_job
from lattice.job.schema import SolveSection
from lattice.job.writer import job_to_toml
from lattice.solve.course import Course, Ending
from lattice.solve.legs import Leg, plan_legs, retry
from lattice.solve.newton_leg import newton_leg
from lattice.solve.progress import difference
from lattice.solve.recorder import Recorder
from lattice.solve.run import Outcome, run_job
from lattice.store.runfolder import read_steps
from lattice.store.statefile import read_meta, read_whole
from tests.film import alike, film_state
from tests.mpi import run_module

JOB = """
law.name = "kuramoto-sivashinsky"
box = { period = 17.67, length_x = 17.631 }
lattice = { nt = 32, nx = 32, order_t = 6, order_x = 6 }
start = { kind = "array", file = "rough.npy" }
output.picture = false
"""
STAGES = ["solve.stages=['damped', 'newton', 'refine']", "solve.refine.count=1", "solve.refine.factor=1.25"]


@pytest.fixture(autouse=True)
def numpy_kernels(monkeypatch: pytest.MonkeyPatch) -> None:
    # That compiled loops equal these is shown in test_kernels.
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    np.save(tmp_path / "rough.npy", film_state()[0] + 0.2 * alike(1))
    (tmp_path / "rough.toml").write_text(JOB, encoding="utf-8")
    return tmp_path


def run(folder: Path, out: str, overrides: list[str], resume: bool = False) -> tuple[Outcome, list[str]]:
    from mpi4py import MPI

    job = load_job(folder / "rough.toml", overrides)
    said: list[str] = []
    outcome = run_job(job, folder / out, MPI.COMM_SELF, [], said.append, job_to_toml(job), resume)
    return outcome, said


def steps_of(folder: Path, out: str) -> list[dict[str, Any]]:
    return read_steps(folder / out / "steps.jsonl")


class Cut(Exception):
    """Ends a run as a kill would."""


def test_a_rough_start_becomes_a_state_that_survives_refinement(folder: Path) -> None:
    outcome, said = run(folder, "run", STAGES)
    assert outcome.exit_code == 0, said
    summary = json.loads((folder / "run" / "summary.json").read_text(encoding="utf-8"))
    assert [(s["stage"], s["method"]) for s in summary["stages"]] == [
        ("damped", "damped"),
        ("newton", "newton"),
        ("refine", "newton"),
    ]
    assert summary["stage"] == "refine"
    assert summary["lattice"]["nx"] == 40
    assert {entry["stage"] for entry in steps_of(folder, "run")} == {"damped", "newton", "refine"}
    numbers = [entry["step"] for entry in steps_of(folder, "run")]
    assert numbers == sorted(numbers)
    assert read_meta(folder / "run" / "state.h5").residual_rms <= 1e-10
    assert not (folder / "run" / "reference.h5").exists()


def test_a_run_cut_anywhere_goes_on_as_if_it_had_not_been(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    run(folder, "whole", STAGES)
    wanted = steps_of(folder, "whole")
    stages = [entry["stage"] for entry in wanted]
    # Within each stage.
    cuts = [3, stages.index("newton") + 1, stages.index("refine") + 1]
    step = Recorder.step
    monkeypatch.setattr(Recorder, "is_due", lambda self: True)
    for cut in cuts:

        def failing(self: Recorder, *arguments: Any, cut: int = cut) -> None:
            if len(self.history) == cut:
                raise Cut
            step(self, *arguments)

        out = f"cut-{cut}"
        monkeypatch.setattr(Recorder, "step", failing)
        with pytest.raises(Cut):
            run(folder, out, STAGES)
        monkeypatch.setattr(Recorder, "step", step)
        outcome, said = run(folder, out, STAGES, resume=True)
        assert outcome.exit_code == 0
        assert f"goes on after step {wanted[cut - 1]['step']}" in said
        found = steps_of(folder, out)
        assert [entry["step"] for entry in found] == [entry["step"] for entry in wanted]
        # The residual of a solved state is rounding.
        for before, after in zip(wanted, found, strict=True):
            assert after["residual_rms"] == pytest.approx(before["residual_rms"], rel=1e-8, abs=1e-13)
        whole, resumed = (read_whole(folder / name / "state.h5") for name in ("whole", out))
        assert np.abs(whole - resumed).max() <= 1e-9


def test_a_finished_run_goes_on_to_the_same_end(folder: Path) -> None:
    options = ["solve.stages=['damped', 'newton']"]
    run(folder, "run", options)
    before = steps_of(folder, "run")
    outcome, _ = run(folder, "run", options, resume=True)
    assert outcome.exit_code == 0
    assert [report["stage"] for report in outcome.summary.stages] == ["damped", "newton"]
    assert [e["residual_rms"] for e in steps_of(folder, "run")] == [e["residual_rms"] for e in before]


def test_a_run_stopped_by_a_limit_goes_on_under_another(folder: Path) -> None:
    options = ["solve.stages=['damped', 'newton']"]
    outcome, _ = run(folder, "run", [*options, "solve.damped.steps=3"])
    assert (outcome.exit_code, outcome.summary.outcome) == (3, "not converged")
    assert outcome.summary.reason == "the largest number of damped steps is used up"
    outcome, _ = run(folder, "run", options, resume=True)
    assert outcome.exit_code == 0


def test_a_run_of_another_job_is_not_taken_up(folder: Path) -> None:
    run(folder, "run", ["solve.stages=['damped']", "solve.damped.steps=1"])
    with pytest.raises(InputError, match=r"holds a run of another job: lattice.nx differs"):
        run(folder, "run", ["solve.stages=['damped']", "lattice.nx=36"], resume=True)


def test_a_folder_without_a_state_is_begun(folder: Path) -> None:
    outcome, _ = run(folder, "new", ["solve.stages=['damped']", "solve.damped.steps=1"], resume=True)
    assert outcome.summary.newton_steps == 1


def test_a_stall_is_reported_with_its_state(folder: Path) -> None:
    options = [
        "solve.stages=['damped', 'newton']",
        "solve.damped.stall_steps=1",
        "solve.damped.stall_fall=0.99",
    ]
    outcome, said = run(folder, "run", options)
    assert (outcome.exit_code, outcome.summary.outcome, outcome.summary.stage) == (3, "stalled", "damped")
    assert said[-1].startswith("stalled: residual_rms = ")
    assert read_meta(folder / "run" / "state.h5").outcome == "stalled"


def test_a_stalled_stage_may_go_once_more_with_lengths_held(folder: Path) -> None:
    options = [
        "solve.stages=['damped', 'newton']",
        "solve.damped.stall_steps=1",
        "solve.damped.stall_fall=0.99",
    ]
    outcome, said = run(folder, "run", [*options, "solve.damped.attempts=2"])
    assert outcome.summary.outcome == "stalled"
    assert sum("again from the start, length_x held" in line for line in said) == 1
    first, second = outcome.summary.stages
    assert first["stage"] == second["stage"] == "damped"
    starts = [entry for entry in steps_of(folder, "run") if entry["preconditioner"] == ""]
    assert [entry["residual_rms"] for entry in starts] == pytest.approx(
        [starts[0]["residual_rms"]] * 2, rel=1e-12
    )
    assert "length_x" in starts[0]["scalars"]
    assert "length_x" not in starts[1]["scalars"]


def test_a_state_of_the_coarse_lattice_only_is_reported_so(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def failing(course: Course) -> Ending:
        return Ending("failed", "no way") if course.leg.stage == "refine" else newton_leg(course)

    monkeypatch.setattr("lattice.solve.run.newton_leg", failing)
    np.save(folder / "rough.npy", film_state()[0])
    outcome, said = run(folder, "run", ["solve.stages=['newton', 'refine']"])
    assert (outcome.exit_code, outcome.summary.outcome) == (3, "not surviving refinement")
    assert outcome.summary.lattice.nx == 44
    assert said[-1].startswith("not surviving refinement: no way")


def test_lattices_follow_a_period_that_moves(folder: Path) -> None:
    run(folder, "run", ["solve.stages=['damped']", "box.period=23.0", "solve.damped.relattice=0.02"])
    entries = steps_of(folder, "run")
    spacing, counts = 23.0 / 32, {entry["nodes"][0] for entry in entries}
    assert len(counts) > 1
    for entry in entries[1:]:
        # A step of at most 10 % may pass before the lattice is made anew.
        assert entry["scalars"]["period"] / entry["nodes"][0] == pytest.approx(spacing, rel=0.15)


def test_failed_newton_steps_are_tried_again_after_damped_ones() -> None:
    legs = plan_legs(("damped", "newton", "refine"), SolveSection())
    again = retry(legs, 2)
    assert again is not None
    assert again[2:4] == (Leg("refine", "damped", tighter=1e-3), Leg("refine", "newton", again=True))
    assert retry(again, 3) is None
    assert retry(plan_legs(("newton", "refine"), SolveSection()), 1) is None


def test_limits_and_output_may_change_but_nothing_else() -> None:
    job = "[box]\nlength_x = 22.0\n[solve]\nnewton_steps = 3\n[solve.damped]\nsteps = 4\n[output]\nfolder = 'a'\n"
    other = job.replace("3", "5").replace("4", "6").replace("'a'", "'b'")
    assert difference(job, other) == ""
    assert difference(job, job.replace("22.0", "23.0")) == "box.length_x"
    assert difference(job, job.replace("[solve.damped]", "free = ['period']\n[solve.damped]")) == "solve.free"


@pytest.mark.parametrize("ranks", [pytest.param(2, marks=pytest.mark.long), 3])
def test_damped_steps_are_the_same_on_several_ranks(folder: Path, ranks: int) -> None:
    options = ["solve.stages=['damped']", "solve.damped.steps=5"]
    run(folder, "alone", options)
    command = ["solve", "rough.toml", "--out", "together", *(w for o in options for w in ("--set", o))]
    done = run_module(ranks, "lattice", *command, cwd=folder, check=False, timeout=120.0)
    assert done.returncode == 3, done.stdout + done.stderr
    alone, together = (
        [entry["residual_rms"] for entry in steps_of(folder, out)] for out in ("alone", "together")
    )
    # Sums over ranks are rounded in another order, and conjugate gradients amplify that: 8e-6 after six steps.
    assert together == pytest.approx(alone, rel=1e-4)
