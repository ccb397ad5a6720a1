"""Submitting, watching and cancelling on this machine, and PBS scripts under a stub of its commands."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from lattice.batch.legs import LegLog
from lattice.batch.local import SCHEDULER as LOCAL
from lattice.batch.local import job_of
from lattice.batch.scheduler import QueuedJob
from lattice.batch.site import Site
from lattice.batch.ticket import write_ticket
from lattice.batch.watch import find_runs, view_run, view_runs
from tests.batch import FILM, HALVED, environment, events, lattice, submitted, ticket, view
from tests.cluster import wait_for


@pytest.fixture
def project(tmp_path: Path) -> Path:
    (tmp_path / "film.toml").write_text(FILM)
    return tmp_path


def ended(folder: Path) -> Callable[[], bool]:
    return lambda: not view_run(folder).active


def test_a_submitted_job_runs_in_the_background_to_its_state(project: Path) -> None:
    folder = project / "runs" / "film"
    done = lattice("submit", "film.toml", "--ranks", "2", cwd=project)
    job = submitted(done)
    assert view(folder)["active"]
    refused = lattice("submit", "film.toml", "--force", cwd=project)
    assert refused.returncode == 2 and "`lattice cancel` it" in refused.stderr
    # It has a session of its own, which no terminal's end reaches, and outlives who submitted it.
    assert os.getsid(int(job.partition(".")[0])) == int(job.partition(".")[0])
    wait_for(ended(folder), 90, "not ended")
    end = view(folder)
    assert (end["outcome"], end["step"], end["leg"], end["queued"]) == ("converged", 4, 1, "")
    assert abs(end["scalars"]["period"] - 32.7854174) < 1e-6
    assert [event["event"] for event in events(folder)] == ["submitted", "began", "ended"]
    record = json.loads((folder / "submit.json").read_text())
    assert record["inputs"]["text"] == FILM and record["ranks"] == [2]

    refused = lattice("submit", "film.toml", cwd=project)
    assert refused.returncode == 2 and "holds a run that is converged" in refused.stderr
    refused = lattice("submit", "--resume", folder, cwd=project)
    assert refused.returncode == 2 and "has converged; there is nothing to go on with" in refused.stderr
    refused = lattice("cancel", folder, cwd=project)
    assert refused.returncode == 2 and "nothing is left to cancel" in refused.stderr
    table = lattice("runs", cwd=project).stdout
    assert "film  converged  1 of 5" in " ".join(table.split(" ")) or "converged" in table


@pytest.mark.long
def test_a_cancelled_run_keeps_its_state_and_goes_on_when_told(project: Path) -> None:
    folder = project / "here"
    slow = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.05")
    submitted(
        lattice("submit", "film.toml", "--out", "here", "--ranks", "2", "--time", "10h", *slow, cwd=project)
    )
    steps = folder / "steps.jsonl"
    wait_for(lambda: steps.exists() and len(steps.read_text().splitlines()) > 2, 90, "no steps")
    running = view(folder)
    assert running["outcome"] == "running" and running["finish"] is not None and running["limit"] == 36000
    done = lattice("cancel", "here", cwd=project)
    assert done.returncode == 0 and "stops at its next step" in done.stdout
    wait_for(ended(folder), 60, "not ended")
    end = view(folder)
    assert end["outcome"] == "interrupted"
    assert end["reason"].startswith("stopped by lattice cancel; stopped on request")
    count = len(steps.read_text().splitlines())
    dry = lattice("submit", "--resume", "here", "--dry-run", cwd=project)
    assert "--number 2" in dry.stdout and events(folder)[-1]["event"] == "ended"
    submitted(lattice("submit", "--resume", "here", "--ranks", "1", cwd=project))
    wait_for(lambda: len(steps.read_text().splitlines()) > count, 60, "does not go on")
    submitted_again = events(folder, "submitted")[-1]
    assert (submitted_again["leg"], submitted_again["ranks"]) == (2, 1)
    assert lattice("cancel", "here", "--now", cwd=project).returncode == 0
    wait_for(ended(folder), 60, "not ended")


def test_a_dry_run_writes_nothing(project: Path) -> None:
    done = lattice("submit", "film.toml", "--dry-run", cwd=project)
    assert done.returncode == 0 and done.stdout.startswith("#!/bin/bash\n")
    assert {path.name for path in project.iterdir()} == {"film.toml"}


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["film.toml", "--set", "lattice.nx=0"], "film.toml with --set: lattice.nx"),
        (["film.toml", "--site", "nowhere"], "--site: must be a site, got 'nowhere'"),
        (["film.toml", "--time", "1:30"], "which schedulers read differently"),
        (["film.toml", "--ranks", "2,x"], "must be an integer >= 1, got 'x'"),
        (["--resume", "."], "is no folder of a submitted run"),
        (["film.toml", "film.toml", "--yes"], "must differ"),
        (
            ["film.toml", "--after", ".", "--yes"],
            "--after: must be a job's id or the folder of a submitted run",
        ),
    ],
)
def test_a_submission_that_cannot_work_is_refused(arguments: list[str], message: str, project: Path) -> None:
    done = lattice("submit", *arguments, cwd=project)
    assert done.returncode == 2 and message in done.stderr
    assert not (project / "runs" / "film" / "legs.jsonl").exists()


def test_a_study_asks_with_its_core_hours_before_it_floods_a_queue(project: Path) -> None:
    (project / "wide.toml").write_text(FILM)
    (project / "sites").mkdir()
    (project / "sites" / "big.toml").write_text('scheduler = "slurm"\ncores_per_node = 4\nlegs = 2\n')
    options = ("film.toml", "wide.toml", "--site", "big", "--time", "2h", "--ranks", "4")
    done = lattice("submit", *options, cwd=project)
    assert done.returncode == 2
    assert (
        "2 runs, 4 at once, each on big: 4 rank(s) on 1 node(s), 2:00:00 a leg, at most 2 leg(s)"
        in done.stdout
    )
    assert "at most 32 core hours" in done.stdout and "--yes" in done.stderr
    assert not (project / "runs").exists()


@pytest.mark.long
def test_the_members_of_a_study_run_a_few_at_once_and_one_that_fails_stops_no_other(project: Path) -> None:
    for name, steps in (("good", 40), ("bad", 1), ("other", 40)):
        (project / f"{name}.toml").write_text(FILM.replace("= 1000", f"= {steps}"))
    done = lattice("submit", "good.toml", "bad.toml", "other.toml", "--at-once", "1", "--yes", cwd=project)
    submitted(done)
    folders = [project / "runs" / name for name in ("good", "bad", "other")]
    wait_for(
        lambda: all(ended(folder)() for folder in folders) and events(folders[-1], "ended"), 90, "not ended"
    )
    assert [view_run(folder).outcome for folder in folders] == ["converged", "not converged", "converged"]
    assert "newton steps" in view_run(folders[1]).reason.lower()
    spans = [(events(f, "began")[0]["time"], events(f, "ended")[0]["time"]) for f in folders]
    assert spans[0][1] <= spans[1][0] and spans[1][1] <= spans[2][0]
    assert len(find_runs(project / "runs")) == 3


def test_a_job_waits_for_the_one_before_it(tmp_path: Path) -> None:
    first = subprocess.Popen(["sleep", "30"])
    write_ticket(tmp_path, ticket(Site(scheduler="local"), command=("laws",), ranks=(1,)))
    leg = subprocess.Popen(
        [sys.executable, "-m", "lattice", "leg", str(tmp_path)], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
        env=environment({"LATTICE_AFTER": job_of(first.pid)}),
    )  # fmt: skip
    time.sleep(2.0)
    assert leg.poll() is None and events(tmp_path, "began") == []
    first.kill()
    first.wait()
    leg.wait(30)
    assert len(events(tmp_path, "began")) == 1


def test_another_process_with_the_same_number_is_not_the_job() -> None:
    process = subprocess.Popen(["sleep", "30"])
    try:
        job = job_of(process.pid)
        number = job.partition(".")[0]
        assert (LOCAL.jobs([job]) or {})[job].state == "running"
        assert (LOCAL.jobs([f"{number}.1"]) or {})[f"{number}.1"].state == "ended"
    finally:
        process.kill()
        process.wait()
    assert (LOCAL.jobs([job]) or {})[job].state == "ended"


def test_a_run_that_ended_without_a_word_is_lost_and_says_how_to_go_on(tmp_path: Path) -> None:
    write_ticket(tmp_path, ticket(Site(scheduler="local")))
    log = LegLog(tmp_path)
    log.append("submitted", leg=1, job="999999999.1")
    found = view_run(tmp_path)
    assert found.outcome == "lost" and "has never begun" in found.reason
    log.append("began", leg=1, job="999999999.1")
    (tmp_path / "steps.jsonl").write_text('{"step": 3, "residual_rms": 1e-4, "seconds": 9.0}\n')
    found = view_run(tmp_path)
    assert found.outcome == "lost" and "`lattice submit --resume` goes on" in found.reason
    assert found.step == 3 and not found.active


def test_each_scheduler_is_asked_once_for_all_runs_and_may_stay_silent(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    calls = tmp_path / "calls"
    fake = tmp_path / "bin"
    fake.mkdir()
    (fake / "squeue").write_text(
        f'#!/bin/sh\necho "$@" >>{calls}\n[ -e {tmp_path}/down ] && exit 1\necho "7|RUNNING|None|1:00|2:00:00|x"\necho "8|PENDING|Priority|0:00|2:00:00|2030-01-01T00:00:00"\n'
    )
    (fake / "squeue").chmod(0o755)
    monkeypatch.setenv("PATH", f"{fake}:{os.environ['PATH']}")
    site = Site(scheduler="slurm", cores_per_node=4)
    for job in ("7", "8", "9"):
        (tmp_path / "runs" / job).mkdir(parents=True)
        write_ticket(tmp_path / "runs" / job, ticket(site))
        LegLog(tmp_path / "runs" / job).append("submitted", leg=1, job=job)
    views = view_runs(find_runs(tmp_path / "runs"))
    assert [found.outcome for found in views] == ["running", "waiting", "lost"]
    assert views[1].queued == "PENDING (Priority), starts 2030-01-01T00:00:00"
    assert len(calls.read_text().splitlines()) == 1
    (tmp_path / "down").touch()
    views = view_runs(find_runs(tmp_path / "runs"))
    assert [found.outcome for found in views] == ["unknown"] * 3
    assert "the scheduler gives no answer" in views[0].reason


QSUB = """#!/bin/bash
# Runs a script as the scheduler would: in the background, with its own environment and no terminal.
while [ $# -gt 1 ]; do shift; done
number=$(($(cat {folder}/last 2>/dev/null || echo 0) + 1))
echo "$number" >{folder}/last
range=$(sed -n 's/^#PBS -J 0-\\([0-9]*\\).*/\\1/p' "$1")
if [ -n "$range" ]; then
    for place in $(seq 0 "$range"); do
        PBS_JOBID="$number[$place].server" PBS_ARRAY_INDEX=$place setsid bash "$1" >/dev/null 2>&1 </dev/null &
    done
    echo "$number[].server"
else
    PBS_JOBID="$number.server" setsid bash "$1" >/dev/null 2>&1 </dev/null &
    echo "$number.server"
fi
"""
QSTAT = """#!/bin/bash
echo '{"Jobs": {"1.server": {"job_state": "R", "resources_used": {"walltime": "00:01:05"}}}}'
"""


@pytest.mark.long
def test_pbs_scripts_run_a_job_over_several_legs_under_a_stub_of_qsub(project: Path) -> None:
    commands = project / "bin"
    commands.mkdir()
    for name, text in (("qsub", QSUB.replace("{folder}", str(project))), ("qstat", QSTAT)):
        (commands / name).write_text(text)
        (commands / name).chmod(0o755)
    (project / "sites").mkdir()
    (project / "sites" / "here.toml").write_text('scheduler = "pbs"\ncores_per_node = 4\nwarning = "4s"\n')
    env = {"PATH": f"{commands}:{os.environ['PATH']}"}
    folder = project / "run"
    options = ("--site", "here", "--out", "run", "--ranks", "2,1", "--time", "16s", "--yes")
    assert submitted(lattice("submit", "film.toml", *options, *HALVED, cwd=project, env=env)) == "1.server"
    wait_for(
        lambda: (
            (folder / "summary.json").exists()
            and events(folder, "ended")[-1:]
            and events(folder, "ended")[-1]["code"] == 0
        ),
        120,
        "not converged",
    )
    jobs = [event["job"] for event in events(folder, "submitted")]
    assert jobs == [f"{number}.server" for number in range(1, len(jobs) + 1)] and len(jobs) >= 2
    assert [event["ranks"] for event in events(folder, "began")][:2] == [2, 1]
    assert {event["reason"] for event in events(folder, "ended")[:-1]} == {
        "stopped by the end of the wall clock"
    }


@pytest.mark.long
def test_a_campaign_becomes_an_array_and_its_members_go_on_one_by_one(project: Path) -> None:
    (project / "many.toml").write_text('job = "film.toml"\n[[vary]]\nstart.seed = [133, 134]\n')
    dry = lattice("submit", "many.toml", "--dry-run", cwd=project)
    assert "leg" in dry.stdout and "--study" in dry.stdout and not (project / "runs").exists()
    submitted(lattice("submit", "many.toml", "--at-once", "1", "--yes", cwd=project))
    runs = find_runs(project / "runs")
    assert len(runs) == 2
    second = runs[1]
    done = lattice("cancel", second, cwd=project)
    assert done.returncode == 0, done.stderr
    wait_for(lambda: not any(found.active for found in view_runs(runs)), 90, "not ended")
    assert view_run(runs[0]).outcome == "converged" and view_run(second).outcome in (
        "cancelled",
        "interrupted",
    )
    submitted(lattice("submit", "many.toml", "--yes", cwd=project))
    wait_for(ended(second), 90, "not ended")
    assert view_run(second).outcome in ("converged", "not converged")
    assert len(events(runs[0], "began")) == 1, "what has ended is not run again"


@pytest.mark.long
def test_a_run_waits_for_all_legs_of_the_one_before_it(project: Path) -> None:
    first, second = project / "first", project / "second"
    pace = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.3")
    submitted(
        lattice("submit", "film.toml", "--out", "first", "--time", "12s", "--legs", "9", *pace, cwd=project)
    )
    submitted(lattice("submit", "film.toml", "--out", "second", "--after", "first", cwd=project))
    wait_for(lambda: not view_run(second).active and events(second, "ended"), 150, "not ended")
    legs = len(events(first, "began"))
    assert legs >= 2 and view_run(first).outcome == view_run(second).outcome == "converged"
    assert events(second, "began")[0]["time"] >= events(first, "ended")[-1]["time"]
    assert len(events(second, "began")) == 1


def test_a_run_that_ends_while_its_scheduler_is_asked_is_not_called_lost(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    write_ticket(tmp_path, ticket(Site(scheduler="local")))
    log = LegLog(tmp_path)
    log.append("began", leg=1, job="999999999.1")

    def jobs(self: object, ids: list[str]) -> dict[str, QueuedJob]:
        (tmp_path / "summary.json").write_text('{"outcome": "converged", "reason": "done"}')
        log.append("ended", leg=1, code=0)
        return {job: QueuedJob("ended", "ended") for job in ids}

    monkeypatch.setattr(type(LOCAL), "jobs", jobs)
    assert view_run(tmp_path).outcome == "converged"
