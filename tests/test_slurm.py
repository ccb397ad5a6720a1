"""Submission through a real Slurm of one node, started for these tests."""

from __future__ import annotations

import json
import signal
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from lattice.store.statefile import read_meta
from tests.batch import FILM, ROOT, events, lattice, submitted, view
from tests.cluster import Cluster, running_cluster, wait_for

SITE = """
scheduler = "slurm"
cores_per_node = 8
time = "5m"
concurrent = 2
"""


@pytest.fixture(scope="module")
def cluster(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Cluster]:
    with running_cluster(tmp_path_factory.mktemp("slurm")) as made:
        yield made


@pytest.fixture
def project(tmp_path: Path, cluster: Cluster) -> Path:
    folder = tmp_path / "a project"
    (folder / "sites").mkdir(parents=True)
    (folder / "sites" / "here.toml").write_text(SITE)
    (folder / "film.toml").write_text(FILM)
    return folder


def submit(project: Path, cluster: Cluster, *arguments: str) -> str:
    options = ("--site", "here", "--yes")
    return submitted(lattice("submit", *options, *arguments, cwd=project, env=cluster.environment))


def wait_for_end(folder: Path, cluster: Cluster, seconds: float = 120.0) -> dict[str, Any]:
    """Return how a run stands once it has ended."""
    last: dict[str, Any] = {}

    def reached() -> bool:
        nonlocal last
        # The scheduler forgets quickly and is asked once a look: no busy loop.
        time.sleep(0.5)
        last = view(folder, cluster.environment)
        return not last["active"]

    wait_for(reached, seconds, f"not ended: {last}")
    return last


def entries(folder: Path) -> list[dict[str, Any]]:
    path = folder / "steps.jsonl"
    return [json.loads(line) for line in path.read_text().splitlines()] if path.exists() else []


def test_a_job_runs_on_two_ranks_to_its_state_and_is_watched(project: Path, cluster: Cluster) -> None:
    folder = project / "runs" / "film"
    job = submit(project, cluster, "film.toml", "--ranks", "2")
    assert view(folder, cluster.environment)["job"] == job
    end = wait_for_end(folder, cluster)
    assert (end["outcome"], end["site"], end["leg"]) == ("converged", "here", 1)
    assert json.loads((folder / "summary.json").read_text())["ranks"] == 2
    assert "TasksPerNode" in (told := cluster.ask("scontrol", "show", "job", job)) or "NumTasks=2" in told
    assert f"JobId={job}" in told and "ExitCode=0:0" in told


@pytest.mark.long
def test_a_run_is_cancelled_while_it_waits_and_while_it_runs(project: Path, cluster: Cluster) -> None:
    slow = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.02")
    submit(project, cluster, "film.toml", "--ranks", "2", "--out", "first", *slow)
    first, second = project / "first", project / "second"
    waiting = submit(project, cluster, "film.toml", "--out", "second", "--after", str(first))
    assert view(second, cluster.environment)["outcome"] == "waiting"
    assert "Dependency" in view(second, cluster.environment)["queued"]
    wait_for(lambda: len(entries(first)) > 2, 90, "no steps")
    for folder in (second, first):
        done = lattice("cancel", folder, cwd=project, env=cluster.environment)
        assert done.returncode == 0, done.stderr
    assert "JobState=CANCELLED" in cluster.ask("scontrol", "show", "job", waiting)
    end = wait_for_end(first, cluster)
    assert end["outcome"] == "interrupted" and end["reason"].startswith("stopped by lattice cancel")
    assert read_meta(first / "state.h5").outcome == "interrupted"
    assert view(second, cluster.environment)["outcome"] == "cancelled"


@pytest.mark.long
def test_runs_are_told_from_their_files_while_the_controller_is_down(project: Path, cluster: Cluster) -> None:
    folder = project / "run"
    submit(project, cluster, "film.toml", "--out", "run")
    wait_for(lambda: events(folder, "began"), 60, "not begun")
    cluster.stop_controller()
    try:
        found = view(folder, cluster.environment)
        assert found["outcome"] in ("running", "unknown", "converged")
        assert found["queued"] in ("no answer", "")
        wait_for(
            lambda: (folder / "summary.json").exists(), 90, "the run does not end without the controller"
        )
        assert json.loads((folder / "summary.json").read_text())["outcome"] == "converged"
    finally:
        cluster.start_controller()
    assert wait_for_end(folder, cluster)["outcome"] == "converged"


@pytest.mark.long
def test_a_chain_of_legs_on_changing_ranks_equals_the_uninterrupted_run(
    project: Path, cluster: Cluster
) -> None:
    whole, folder = project / "whole", project / "chain"
    small = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.1")
    submit(project, cluster, "film.toml", "--out", "whole", "--ranks", "2", *small)
    assert wait_for_end(whole, cluster)["outcome"] == "converged"
    (project / "sites" / "here.toml").write_text(SITE + "legs = 60\n")
    options = ("--out", "chain", "--ranks", "2,1,3,1", "--time", "16s")
    submit(project, cluster, "film.toml", *options, *small)
    end = wait_for_end(folder, cluster, 600)
    assert end["outcome"] == "converged", end
    legs = events(folder, "ended")
    assert len(legs) >= 3 and [leg["code"] for leg in legs] == [4] * (len(legs) - 1) + [0]
    assert [event["ranks"] for event in events(folder, "began")][:3] == [2, 1, 3]
    # The same steps, to the rounding that another number of ranks brings.
    once, chained = entries(whole), entries(folder)
    assert [entry["step"] for entry in chained] == [entry["step"] for entry in once]
    for one, other in zip(once, chained, strict=True):
        assert abs(one["residual_rms"] - other["residual_rms"]) <= 1e-8 * max(once[0]["residual_rms"], 1.0)
        assert abs(one["residual_rms"] / other["residual_rms"] - 1) < 1e-3


@pytest.mark.long
def test_the_schedulers_own_warning_stops_a_run_in_time(project: Path, cluster: Cluster) -> None:
    folder = project / "run"
    (project / "sites" / "here.toml").write_text(SITE + 'warning = "15s"\nlegs = 1\n')
    slow = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.02")
    # A leg's own clock would stop it later: the signal must come from Slurm, whose limits are whole minutes.
    endless = ("--set", "solve.residual_rms=1e-30", "--set", "solve.newton_steps=100000")
    job = submit(project, cluster, "film.toml", "--out", "run", "--time", "2m30s", *endless, *slow)
    cluster.ask("scontrol", "update", f"jobid={job}", "TimeLimit=2")
    end = wait_for_end(folder, cluster, 200)
    assert end["outcome"] == "interrupted" and "stopped by the end of the wall clock" in end["reason"]
    assert "all 1 legs are used" in end["reason"]
    assert "JobState=FAILED Reason=NonZeroExitCode" in (
        told := cluster.ask("scontrol", "show", "job", job)
    ), told
    assert "ExitCode=4:0" in told


@pytest.mark.long
def test_a_requeued_job_goes_on_from_its_state(project: Path, cluster: Cluster) -> None:
    folder = project / "run"
    small = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.1")
    job = submit(project, cluster, "film.toml", "--out", "run", "--ranks", "2", *small)
    wait_for(lambda: len(entries(folder)) > 3, 90, "no steps")
    assert cluster.ask("scontrol", "requeue", job) == ""
    wait_for(lambda: "PENDING" in cluster.ask("squeue", "-h", "-j", job, "-o", "%T"), 60, "not requeued")
    assert view(folder, cluster.environment)["outcome"] == "waiting"
    kept = read_meta(folder / "state.h5").history[-1]["step"]
    cluster.ask("scontrol", "update", f"jobid={job}", "StartTime=now")
    end = wait_for_end(folder, cluster, 240)
    assert end["outcome"] == "converged"
    assert [event["job"] for event in events(folder, "began")] == [job, job]
    steps = [entry["step"] for entry in entries(folder)]
    assert steps == list(range(len(steps))) and len(steps) > kept


@pytest.mark.long
def test_a_run_that_is_requeued_at_its_wall_clock_converges(project: Path, cluster: Cluster) -> None:
    folder = project / "run"
    (project / "sites" / "here.toml").write_text(SITE + 'legs = 40\nchain = "requeue"\n')
    small = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.1")
    job = submit(project, cluster, "film.toml", "--out", "run", "--time", "16s", *small)
    wait_for(lambda: len(events(folder, "submitted")) > 1, 90, "not requeued")
    # A job that is put back waits two minutes; here it may start at once.
    deadline = time.monotonic() + 240
    while view(folder, cluster.environment)["active"] and time.monotonic() < deadline:
        cluster.ask("scontrol", "update", f"jobid={job}", "StartTime=now")
        time.sleep(1.0)
    assert view(folder, cluster.environment)["outcome"] == "converged"
    assert {event["job"] for event in events(folder, "began")} == {job}


@pytest.mark.long
def test_a_member_that_fails_leaves_the_rest_of_an_array_alone(project: Path, cluster: Cluster) -> None:
    for name, steps in (("good", 40), ("bad", 1), ("other", 40)):
        (project / f"{name}.toml").write_text(FILM.replace("= 1000", f"= {steps}"))
    array = submit(project, cluster, "good.toml", "bad.toml", "other.toml")
    folders = [project / "runs" / name for name in ("good", "bad", "other")]
    ends = [wait_for_end(folder, cluster) for folder in folders]
    assert [end["outcome"] for end in ends] == ["converged", "not converged", "converged"]
    assert [end["job"] for end in ends] == [f"{array}_{place}" for place in range(3)]
    assert "ArrayTaskThrottle=2" in cluster.ask("scontrol", "show", "job", array)
    assert "ExitCode=3:0" in cluster.ask("scontrol", "show", "job", f"{array}_1")


# Large enough that a factorisation takes seconds, in which no signal handler of Python's runs.
LARGE = FILM.replace("nt = 84, nx = 64", "nt = 420, nx = 320").replace("length_x = 22.0", "length_x = 110.0")


@pytest.mark.long
def test_a_signal_during_a_factorisation_is_answered_after_it(project: Path, cluster: Cluster) -> None:
    folder = project / "run"
    (project / "large.toml").write_text(LARGE)
    job = submit(
        project, cluster, "large.toml", "--out", "run", "--ranks", "2", "--set", "solve.residual_rms=1e-30"
    )
    wait_for(lambda: len(entries(folder)) > 0, 120, "no steps")
    cluster.ask("scancel", "--batch", f"--signal={signal.SIGUSR1.name[3:]}", job)
    end = wait_for_end(folder, cluster, 120)
    assert end["outcome"] == "interrupted"
    assert read_meta(folder / "state.h5").history, "a state with its steps"


def test_the_examples_name_no_real_site() -> None:
    texts = [path.read_text() for path in (ROOT / "jobs" / "sites").glob("*.toml")]
    assert len(texts) == 3 and all("made up" in text or "local" in text for text in texts)
