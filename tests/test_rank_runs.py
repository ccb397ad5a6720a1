"""The runner of parallel tests: it reports what went wrong, in time, and leaves nothing running."""

from __future__ import annotations

import time
from pathlib import Path

import pytest

from tests.mpi import RanksFailed, is_running, run_module, run_ranks


def test_all_ranks_run_the_script(ranks: int) -> None:
    script = """
        import sys
        from mpi4py import MPI
        print(f"{MPI.COMM_WORLD.rank} of {MPI.COMM_WORLD.size}: {sys.argv[1:]}")
        """
    lines = run_ranks(ranks, script, "two words").stdout.splitlines()
    assert sorted(lines) == [f"{rank} of {ranks}: ['two words']" for rank in range(ranks)]


def test_a_file_and_a_module_run(tmp_path: Path) -> None:
    path = tmp_path / "in a folder with spaces.py"
    path.write_text("print('here')", encoding="utf-8")
    assert run_ranks(2, path).stdout == "here\nhere\n"
    assert run_module(1, "platform").stdout.startswith("Linux")


def test_petsc_runs_on_several_ranks() -> None:
    script = """
        from petsc4py import PETSc
        v = PETSc.Vec().createMPI(7)
        v.set(2.0)
        print(v.sum())
        """
    assert run_ranks(3, script).stdout == "14.0\n" * 3


def test_the_exit_code_is_returned() -> None:
    assert run_ranks(2, "import sys; sys.exit(4)", check=False).returncode == 4
    with pytest.raises(RanksFailed, match="exit code 4"):
        run_ranks(2, "import sys; sys.exit(4)")


def test_one_failing_rank_ends_the_run_with_its_message() -> None:
    script = """
        from mpi4py import MPI
        if MPI.COMM_WORLD.rank == 1:
            raise ValueError("rank 1 is unwell")
        MPI.COMM_WORLD.barrier()
        """
    with pytest.raises(RanksFailed, match="rank 1 is unwell"):
        run_ranks(2, script, timeout=20)


def test_a_hanging_run_ends_in_time_and_shows_where() -> None:
    script = """
        from mpi4py import MPI
        def wait_for_nobody():
            MPI.COMM_WORLD.recv(source=0)
        wait_for_nobody()
        """
    started = time.monotonic()
    with pytest.raises(RanksFailed, match=r"did not end within 3 s(.|\n)*wait_for_nobody"):
        run_ranks(2, script, timeout=3)
    assert time.monotonic() - started < 20


def test_no_process_is_left_behind(tmp_path: Path) -> None:
    script = """
        import faulthandler, os, pathlib, signal, sys, time
        faulthandler.cancel_dump_traceback_later()
        signal.signal(signal.SIGTERM, signal.SIG_IGN)
        pathlib.Path(sys.argv[1], str(os.getpid())).touch()
        time.sleep(600)
        """
    with pytest.raises(RanksFailed):
        run_ranks(2, script, tmp_path, timeout=1)
    pids = [int(path.name) for path in tmp_path.iterdir()]
    assert len(pids) == 2
    assert [pid for pid in pids if is_running(pid)] == []
