"""Launching ranks: the launcher's command line, signals, exit codes, and failures on single ranks."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from lattice.cli import launch
from lattice.cli.launch import Launcher, find_launcher, flavour_of, launch_command
from lattice.errors import InputError
from tests.mpi import run_ranks

ROOT = Path(__file__).resolve().parents[1]

# Run as a process of its own, so that signals can be sent to it: launches argv[2:] on 2 ranks.
DRIVER = """
import os, sys
from lattice.cli import launch
launch.STOP_GRACE = float(sys.argv[1])
launch.KILL_GRACE = 2.0
command = launch.launch_command(launch.find_launcher(), 2, [sys.executable, *sys.argv[2:]])
sys.exit(launch.run_ranks(command, os.environ))
"""

# A rank that says when it runs, and ends with exit code 4 at SIGUSR1 unless it is stubborn.
RANK = """
import os, signal, sys, time
from pathlib import Path
from mpi4py import MPI
folder, stubborn = Path(sys.argv[1]), sys.argv[2] == "stubborn"
asked = []
signal.signal(signal.SIGUSR1, lambda *a: asked.append(1))
if stubborn:
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
(folder / f"rank-{MPI.COMM_WORLD.rank}").write_text(str(os.getpid()))
deadline = time.time() + 60
while time.time() < deadline and (stubborn or not asked):
    time.sleep(0.02)
MPI.COMM_WORLD.Barrier()
sys.exit(4)
"""


@pytest.fixture
def running(tmp_path: Path) -> Iterator[list[subprocess.Popen[str]]]:
    started: list[subprocess.Popen[str]] = []
    yield started
    for process in started:
        if process.poll() is None:
            process.kill()
            process.wait()


def started(
    tmp_path: Path, running: list[subprocess.Popen[str]], manner: str, grace: float = 30.0
) -> subprocess.Popen[str]:
    """Return the driver once both ranks run."""
    script = tmp_path / "rank.py"
    script.write_text(RANK, encoding="utf-8")
    process = subprocess.Popen(
        [sys.executable, "-c", DRIVER, str(grace), str(script), str(tmp_path), manner],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    running.append(process)
    wait_for(lambda: all((tmp_path / f"rank-{rank}").exists() for rank in range(2)))
    return process


def wait_for(reached: object, seconds: float = 30.0) -> None:
    deadline = time.monotonic() + seconds
    while not reached():  # type: ignore[operator]
        assert time.monotonic() < deadline, "not reached in time"
        time.sleep(0.05)


def alive(tmp_path: Path) -> list[int]:
    pids = [int((tmp_path / f"rank-{rank}").read_text()) for rank in range(2)]
    return [pid for pid in pids if Path(f"/proc/{pid}").exists() and not is_zombie(pid)]


def is_zombie(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] == "Z"
    except OSError:
        return True


@pytest.mark.parametrize("code", [0, 2, 3, 4, 70])
def test_the_ranks_exit_code_comes_back_without_noise(code: int, tmp_path: Path) -> None:
    script = tmp_path / "rank.py"
    script.write_text(f"from mpi4py import MPI\nMPI.COMM_WORLD.Barrier()\nraise SystemExit({code})\n")
    done = subprocess.run(
        [sys.executable, "-c", DRIVER, "30", str(script)], capture_output=True, text=True, timeout=60,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    assert (done.returncode, done.stdout, done.stderr) == (code, "", "")


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGUSR1, signal.SIGHUP])
def test_a_first_signal_lets_the_ranks_stop_by_themselves(
    number: signal.Signals, tmp_path: Path, running: list[subprocess.Popen[str]]
) -> None:
    process = started(tmp_path, running, "willing")
    process.send_signal(number)
    _, err = process.communicate(timeout=30)
    assert process.returncode == 4
    assert ("stopping at the next step, the state is kept" in err) == (number != signal.SIGUSR1)
    assert alive(tmp_path) == []


def test_a_terminals_ctrl_c_does_not_reach_the_ranks_directly(
    tmp_path: Path, running: list[subprocess.Popen[str]]
) -> None:
    process = started(tmp_path, running, "willing")
    sessions = {os.getsid(int((tmp_path / f"rank-{rank}").read_text())) for rank in range(2)}
    assert os.getsid(process.pid) not in sessions
    process.send_signal(signal.SIGINT)
    process.communicate(timeout=30)


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_further_signals_end_stubborn_ranks(
    number: signal.Signals, tmp_path: Path, running: list[subprocess.Popen[str]]
) -> None:
    process = started(tmp_path, running, "stubborn")
    for _ in range(3):
        process.send_signal(number)
        time.sleep(1.0)
    process.communicate(timeout=30)
    assert process.returncode not in (0, 2, 3, 4)
    wait_for(lambda: alive(tmp_path) == [])


def test_after_the_grace_stubborn_ranks_are_ended(
    tmp_path: Path, running: list[subprocess.Popen[str]]
) -> None:
    process = started(tmp_path, running, "stubborn", grace=1.0)
    process.send_signal(signal.SIGTERM)
    process.communicate(timeout=30)
    assert process.returncode not in (0, 2, 3, 4)
    wait_for(lambda: alive(tmp_path) == [])


def test_no_rank_outlives_a_killed_launch(tmp_path: Path, running: list[subprocess.Popen[str]]) -> None:
    process = started(tmp_path, running, "willing")
    process.kill()
    process.communicate(timeout=30)
    wait_for(lambda: alive(tmp_path) == [])


FILM = """
law.name = "kuramoto-sivashinsky"
box = { period = 16.3, length_x = 22.0 }
lattice = { nt = 64, nx = 64 }
start = { kind = "march", seed = 1, spin_up = 20.0 }
solve.residual_rms = 1e-30
output.picture = false
"""


def test_ctrl_c_during_a_solve_keeps_the_state_and_ends_with_code_4(
    tmp_path: Path, running: list[subprocess.Popen[str]]
) -> None:
    from lattice.store.statefile import read_meta

    (tmp_path / "film.toml").write_text(FILM, encoding="utf-8")
    process = subprocess.Popen(
        [sys.executable, "-m", "lattice", "solve", "film.toml", "--ranks", "2", "--out", "run"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        env={**os.environ, "PYTHONPATH": str(ROOT)}, cwd=tmp_path,
    )  # fmt: skip
    running.append(process)
    steps = tmp_path / "run" / "steps.jsonl"
    wait_for(lambda: steps.exists() and len(steps.read_text().splitlines()) > 1, seconds=120.0)
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 4, out + err
    assert "interrupted: stopped by Ctrl-C" in out
    assert read_meta(tmp_path / "run" / "state.h5").outcome == "interrupted"


@pytest.mark.parametrize(
    ("version", "flavour"),
    [
        ("mpiexec (OpenRTE) 4.1.4\n\nReport bugs to http://www.open-mpi.org/community/help/", "openmpi"),
        ("mpiexec (Open MPI) 5.0.3", "openmpi"),
        ("HYDRA build details:\n    Version:  5.0.2", "mpich"),
        ("Intel(R) MPI Library for Linux* OS, Version 2021.9", "mpich"),
        ("slurm 22.05.8", "slurm"),
        ("something else", "unknown"),
        ("", "unknown"),
    ],
)
def test_the_kind_of_launcher_is_known_by_its_version(version: str, flavour: str) -> None:
    # Open MPI 4.1.4, MPICH 5.0.2 and Slurm 22.05.8 were seen to print such lines; the others are from memory.
    assert flavour_of(version) == flavour


@pytest.mark.parametrize(
    ("flavour", "user", "ranks", "flags"),
    [
        ("openmpi", 1000, 2, ["--quiet"]),
        ("openmpi", 0, 2, ["--quiet", "--allow-run-as-root"]),
        ("openmpi", 1000, 3, ["--quiet", "--oversubscribe"]),
        ("mpich", 0, 3, []),
        ("slurm", 0, 2, []),
        ("unknown", 0, 2, []),
    ],
)
def test_each_kind_gets_its_own_flags(
    flavour: str, user: int, ranks: int, flags: list[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(os, "geteuid", lambda: user)
    monkeypatch.setattr(launch, "count_cores", lambda: 2)
    for name in ("SLURM_JOB_ID", "PBS_NODEFILE", "LSB_JOBID", "PE_HOSTFILE"):
        monkeypatch.delenv(name, raising=False)
    command = launch_command(Launcher(("/opt/mpiexec", "--extra"), flavour, ""), ranks, ["python", "a.py"])
    assert command == ["/opt/mpiexec", "--extra", *flags, "-n", str(ranks), "python", "a.py"]


def test_an_allocation_of_a_scheduler_is_never_called_oversubscribed(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(launch, "count_cores", lambda: 2)
    monkeypatch.setenv("SLURM_JOB_ID", "7")
    assert not launch.is_oversubscribed(64)


def test_threads_of_one_core_count_once(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for cpu, siblings in enumerate(["0,2", "1,3", "0,2", "1,3"]):
        folder = tmp_path / f"cpu{cpu}" / "topology"
        folder.mkdir(parents=True)
        (folder / "thread_siblings_list").write_text(siblings)
    monkeypatch.setattr(os, "sched_getaffinity", lambda pid: {0, 1, 2, 3})
    assert launch.count_cores(tmp_path) == 2
    assert launch.count_cores(tmp_path / "nowhere") == 4


def fake_launcher(folder: Path, version: str) -> Path:
    path = folder / "fake-mpiexec"
    path.write_text(f'#!/bin/sh\n[ "$1" = --version ] && echo \'{version}\' && exit\nshift 2\nexec "$@"\n')
    path.chmod(0o755)
    return path


def test_the_launcher_is_the_given_one_else_the_environments_else_mpiexec(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    program = fake_launcher(tmp_path, "HYDRA build details:")
    monkeypatch.setenv("LATTICE_LAUNCHER", f"{program} --from-environment")
    assert find_launcher() == Launcher((str(program), "--from-environment"), "mpich", "HYDRA build details:")
    assert find_launcher(f"{program} -a 'b c'").command == (str(program), "-a", "b c")
    monkeypatch.delenv("LATTICE_LAUNCHER")
    assert Path(find_launcher().command[0]).name == "mpiexec"


def test_a_launcher_that_is_missing_is_refused_with_the_way_to_get_one(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv("PATH", "/nowhere")
    monkeypatch.delenv("LATTICE_LAUNCHER", raising=False)
    with pytest.raises(InputError, match="mpiexec is not found; load the site's MPI module, on Debian"):
        find_launcher()


def test_any_launcher_that_runs_the_program_will_do(tmp_path: Path) -> None:
    command = launch_command(
        find_launcher(str(fake_launcher(tmp_path, "mine 1.0"))), 1, ["sh", "-c", "exit 3"]
    )
    assert launch.run_ranks(command, os.environ) == 3


def test_signal_handlers_are_put_back_after_a_launch() -> None:
    numbers = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP, signal.SIGUSR1)
    before = [signal.getsignal(number) for number in numbers]
    assert launch.run_ranks(["true"], os.environ) == 0
    assert launch.run_ranks(["sh", "-c", "kill -9 $$"], os.environ) == 128 + signal.SIGKILL
    assert [signal.getsignal(number) for number in numbers] == before


GUARDED = """
import sys, time
from mpi4py import MPI
from lattice.cli.guard import run_guarded
from lattice.errors import InputError, LatticeError, RemoteFailure
comm = MPI.COMM_WORLD
def work():
    {work}
    return 0
sys.exit(run_guarded(comm, work, debug={debug}))
"""


def guarded(work: str, ranks: int = 3, debug: bool = False) -> subprocess.CompletedProcess[str]:
    return run_ranks(ranks, GUARDED.format(work=work, debug=debug), check=False)


def test_a_healthy_run_ends_with_its_own_code() -> None:
    done = guarded("comm.Barrier(); return 3")
    assert done.returncode == 3


def test_one_failing_rank_ends_the_others_that_wait_for_it() -> None:
    done = guarded("assert comm.rank != 1, 'broken'; comm.Barrier()")
    assert done.returncode == 70
    assert (
        done.stderr.count("rank 1 of 3: internal failure: AssertionError: broken; --debug shows where") == 1
    )
    assert "Traceback" not in done.stderr


def test_one_failing_rank_ends_the_others_that_compute() -> None:
    done = guarded("assert comm.rank != 2, 'broken'; time.sleep(50)")
    assert done.returncode == 70
    assert "rank 2 of 3: internal failure: AssertionError: broken" in done.stderr


def test_debug_shows_where_a_rank_failed() -> None:
    done = guarded("assert comm.rank != 1, 'broken'; comm.Barrier()", debug=True)
    assert "Traceback" in done.stderr
    assert "rank 1 of 3: internal failure: AssertionError: broken\n" in done.stderr


def test_an_input_refused_by_all_ranks_is_told_once() -> None:
    done = guarded("raise InputError('must be 3', file='a.h5')")
    assert done.returncode == 2
    assert done.stderr.count("error: a.h5: must be 3") == 1
    assert "rank" not in done.stderr.partition("error: a.h5: must be 3")[0]


def test_ranks_that_stop_because_another_failed_leave_the_word_to_it() -> None:
    done = guarded(
        "raise LatticeError('disk full') if comm.rank == 2 else RemoteFailure('another rank failed')"
    )
    assert done.returncode == 70
    assert "rank 2 of 3: failed: disk full" in done.stderr
    assert "another rank failed" not in done.stderr


def test_an_input_refused_by_one_rank_alone_ends_all() -> None:
    done = guarded("if comm.rank == 1: raise InputError('unreadable', file='a.h5')\n    comm.Barrier()")
    assert done.returncode == 2
    assert "rank 1 of 3: error: a.h5: unreadable" in done.stderr
