"""Faults: killed ranks, full disks, damaged files, jumping clocks. Nothing is lost but the work since the last state."""

from __future__ import annotations

import contextlib
import json
import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from lattice.batch.watch import view_run
from lattice.store.aftermath import Before
from lattice.store.statefile import read_meta
from tests.batch import FILM, HALVED, environment, events, lattice, submitted
from tests.cluster import wait_for

# A tenth of Newton's step at a time: a run of some two hundred steps.
SLOW = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.1")


@pytest.fixture
def project(tmp_path: Path) -> Path:
    (tmp_path / "film.toml").write_text(FILM)
    return tmp_path


def start(project: Path, pace: tuple[str, ...]) -> subprocess.Popen[bytes]:
    command = [sys.executable, "-m", "lattice", "solve", "film.toml", "--out", "run", "--resume"]
    return subprocess.Popen(
        [*command, "--ranks", "2", *pace], cwd=project, env=environment(),
        stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, stdin=subprocess.DEVNULL,
    )  # fmt: skip


def ranks_of(process: int) -> list[int]:
    """Return the ranks among the descendants of a process."""
    return [
        one for one in descendants(process) if b"OMPI_COMM_WORLD_RANK=" in _read(Path(f"/proc/{one}/environ"))
    ]


def descendants(process: int) -> list[int]:
    found = []
    for child in _read(Path(f"/proc/{process}/task/{process}/children")).split():
        found += [int(child), *descendants(int(child))]
    return found


def _read(path: Path) -> bytes:
    with contextlib.suppress(OSError):
        return path.read_bytes()
    return b""


def entries(folder: Path) -> list[dict[str, Any]]:
    path = folder / "steps.jsonl"
    lines = path.read_text().splitlines() if path.exists() else []
    return [json.loads(line) for line in lines if line.endswith("}")]


def kill_one_rank_after(project: Path, seconds: float, chance: random.Random, pace: tuple[str, ...]) -> None:
    """Kill a rank of a run that goes on from the folder's state, and judge what it leaves."""
    folder = project / "run"
    before = len(read_meta(folder / "state.h5").history) if (folder / "state.h5").exists() else 0
    process = start(project, pace)
    deadline = time.monotonic() + seconds
    while time.monotonic() < deadline and process.poll() is None:
        time.sleep(0.02)
    while process.poll() is None and not (alive := ranks_of(process.pid)):
        time.sleep(0.02)
    if process.poll() is not None:
        assert process.returncode == 0
        return
    os.kill(chance.choice(alive), signal.SIGKILL)
    code = process.wait(60)
    if code == 0:
        return  # it had converged meanwhile
    assert code == 70
    assert_state_is_no_older_than_a_step(folder, before)


def assert_state_is_no_older_than_a_step(folder: Path, before: int) -> None:
    told = entries(folder)
    if (folder / "state.h5").exists():
        kept = len(read_meta(folder / "state.h5").history)
        assert kept >= max(before, len(told) - 1), "a state is older than the last step"
    else:
        assert len(told) <= 1 and before == 0
    if (folder / "summary.json").exists():
        summary = json.loads((folder / "summary.json").read_text())
        assert (summary["outcome"], summary["lost"]) == ("failed", True)
        assert "SIGKILL" in summary["reason"]
    assert view_run(folder).outcome in ("failed", "lost", "empty")


def survive_kills(project: Path, kills: int, seed: int, pace: tuple[str, ...]) -> None:
    chance = random.Random(seed)
    for _ in range(kills):
        kill_one_rank_after(project, chance.uniform(0.0, 6.0), chance, pace)
    process = start(project, pace)
    assert process.wait(200) == 0
    steps = [entry["step"] for entry in entries(project / "run")]
    assert steps == list(range(len(steps))), "the steps of all starts read as one run"
    assert json.loads((project / "run" / "summary.json").read_text())["outcome"] == "converged"


@pytest.mark.long
def test_a_run_survives_the_kill_of_a_rank_at_any_instant(project: Path) -> None:
    survive_kills(project, kills=2, seed=5, pace=HALVED)


@pytest.mark.long
def test_a_run_survives_thirty_kills(project: Path) -> None:
    survive_kills(project, kills=30, seed=2, pace=SLOW)


@pytest.mark.long
def test_a_submitted_run_goes_on_by_itself_when_a_rank_is_killed(project: Path) -> None:
    folder = project / "run"
    job = submitted(lattice("submit", "film.toml", "--out", "run", "--ranks", "2", *SLOW, cwd=project))
    wait_for(lambda: len(entries(folder)) > 3, 90, "no steps")
    os.kill(ranks_of(int(job.partition(".")[0]))[0], signal.SIGKILL)
    wait_for(lambda: len(events(folder, "began")) == 2, 60, "does not go on")
    (first,) = events(folder, "ended")
    assert "SIGKILL" in first["reason"] and first["new_steps"] >= 3
    wait_for(lambda: not view_run(folder).active, 200, "not ended")
    assert view_run(folder).outcome == "converged"


@pytest.mark.long
def test_a_node_that_dies_leaves_a_run_that_goes_on_when_told(project: Path) -> None:
    folder = project / "run"
    job = int(
        submitted(
            lattice("submit", "film.toml", "--out", "run", "--ranks", "2", *SLOW, cwd=project)
        ).partition(".")[0]
    )
    wait_for(lambda: len(entries(folder)) > 3, 90, "no steps")
    for process in [job, *descendants(job)]:
        with contextlib.suppress(ProcessLookupError):
            os.kill(process, signal.SIGKILL)
    wait_for(lambda: view_run(folder).outcome == "lost", 30, "not known to be lost")
    assert "`lattice submit --resume` goes on" in view_run(folder).reason
    assert not (folder / "summary.json").exists()
    assert_state_is_no_older_than_a_step(folder, 0)
    submitted(lattice("submit", "--resume", "run", "--ranks", "1", cwd=project))
    wait_for(lambda: not view_run(folder).active, 200, "not ended")
    assert view_run(folder).outcome == "converged"


LONG_STEP = """
import sys
from lattice.cli import launch
from lattice.cli.main import main
launch.STOP_GRACE = 0.2  # of 25 s, so that a step need not take longer than that
sys.exit(main(sys.argv[1:]))
"""


@pytest.mark.long
def test_a_termination_within_a_long_step_ends_with_code_4_and_says_so(project: Path) -> None:
    large = FILM.replace("nt = 84, nx = 64", "nt = 420, nx = 320").replace(
        "length_x = 22.0", "length_x = 110.0"
    )
    (project / "large.toml").write_text(large)
    folder = project / "run"
    process = subprocess.Popen(
        [sys.executable, "-c", LONG_STEP, "solve", "large.toml", "--ranks", "2", "--out", "run"],
        cwd=project, env=environment(), stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    wait_for(lambda: (folder / "state.h5").exists(), 150, "no state")
    time.sleep(2.0)  # the factorisation after the first state has begun, and takes several seconds
    process.send_signal(signal.SIGTERM)
    _, told = process.communicate(timeout=60)
    assert process.returncode == 4, told
    summary = json.loads((folder / "summary.json").read_text())
    assert summary["outcome"] == "interrupted" and summary["residual_rms"] > 0
    assert summary["reason"].startswith("stopped by SIGTERM within a step; the state of step ")
    assert "stopped by SIGTERM within a step" in told


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """Mount a file system that holds one state, but not two."""
    if os.geteuid() != 0:
        pytest.skip("mounting a small file system needs root")
    folder = tmp_path / "small"
    folder.mkdir()
    done = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=128k", "tmpfs", str(folder)],
        capture_output=True,
        text=True,
        check=False,
    )
    if done.returncode != 0:
        pytest.skip(f"no tmpfs can be mounted here: {done.stderr.strip()}")
    yield folder
    subprocess.run(["umount", "-l", str(folder)], check=True)


def remount(folder: Path, options: str) -> None:
    subprocess.run(["mount", "-o", f"remount,{options}", str(folder)], check=True)


@pytest.mark.long
def test_a_full_disk_costs_no_state_and_is_told(small_disk: Path, project: Path) -> None:
    folder = small_disk / "run"
    options = ("solve", "film.toml", "--out", folder, "--ranks", "2", "--resume")
    done = lattice(*options, cwd=project, timeout=120)
    assert done.returncode == 70 and "no space left" in done.stderr
    kept = len(read_meta(folder / "state.h5").history)
    assert kept >= 1 and len(entries(folder)) <= kept + 1
    summary = json.loads((folder / "summary.json").read_text())
    assert summary["outcome"] == "failed" and "no space left" in summary["reason"]
    assert not list(folder.glob("*.partial")), "half a file fills the disk for good"
    remount(small_disk, "size=10m")
    done = lattice(*options, cwd=project, timeout=120)
    assert done.returncode == 0, done.stderr
    assert read_meta(folder / "state.h5").outcome == "converged"

    remount(small_disk, "ro")
    refused = lattice("solve", "film.toml", "--out", folder, "--force", cwd=project)
    assert refused.returncode in (2, 70) and "no permission to write" in refused.stderr
    assert "converged" in lattice("runs", small_disk, cwd=project).stdout
    refused = lattice("submit", "film.toml", "--out", folder, "--force", cwd=project)
    assert refused.returncode == 2 and "Read-only file system" in refused.stderr


@pytest.mark.long
def test_a_damaged_state_stops_no_run(project: Path) -> None:
    folder = project / "run"
    assert (
        lattice("solve", "film.toml", "--out", "run", "--set", "solve.newton_steps=2", cwd=project).returncode
        == 3
    )
    state = folder / "state.h5"
    os.truncate(state, state.stat().st_size // 2)
    assert view_run(folder).outcome == "not converged"
    done = lattice("solve", "film.toml", "--out", "run", "--resume", cwd=project, timeout=120)
    assert done.returncode == 0, done.stderr
    assert read_meta(state).outcome == "converged"


def test_what_a_run_has_written_is_known_even_if_the_clock_was_set_back(tmp_path: Path) -> None:
    state = tmp_path / "state.h5"
    state.write_bytes(b"old")
    os.utime(state, (2e9, 2e9))
    before = Before.of(tmp_path)
    assert not before.wrote_state()
    (tmp_path / "new").write_bytes(b"new")
    os.utime(tmp_path / "new", (1e9, 1e9))
    (tmp_path / "new").replace(state)
    assert before.wrote_state()


@pytest.mark.long
def test_a_pause_of_all_processes_loses_nothing(project: Path) -> None:
    process = start(project, HALVED)
    wait_for(lambda: len(entries(project / "run")) > 2, 90, "no steps")
    paused = [process.pid, *descendants(process.pid)]
    for one in paused:
        os.kill(one, signal.SIGSTOP)
    time.sleep(5.0)
    for one in reversed(paused):
        os.kill(one, signal.SIGCONT)
    assert process.wait(120) == 0
    steps = [entry["step"] for entry in entries(project / "run")]
    assert steps == list(range(len(steps)))
