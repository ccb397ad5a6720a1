"""Run folders: one run at a time, files that are whole whenever somebody looks."""

from __future__ import annotations

import errno
import json
import os
import signal
import subprocess
import sys
from dataclasses import asdict, replace
from pathlib import Path

import pytest

from lattice.errors import InputError, LatticeError
from lattice.geometry.lattice import Lattice
from lattice.store.lock import Holder, read_holder
from lattice.store.runfolder import RunFolder, Summary, read_steps, read_summary
from lattice.store.versions import versions
from tests.mpi import ROOT, run_ranks

SUMMARY = Summary(
    outcome="converged",
    reason="residual 3.0e-11 is below 1e-10",
    law="kuramoto-sivashinsky",
    lattice=Lattice(nt=32, ny=1, nx=48),
    unknowns=1538,
    residual_rms=3.0e-11,
    residual_max=2.0e-10,
    scalars={"period": 10.25, "length_x": 22.0, "drift_x": 0.0},
    mean_square=1.5,
    newton_steps=6,
    linear_iterations=40,
    seconds={"start": 0.5, "newton": 2.0},
    ranks=2,
    peak_memory_mb=310.0,
    versions={"python": "3"},
)

HOLD = """
import sys, time
from mpi4py import MPI
from lattice.store.runfolder import RunFolder
folder = RunFolder(sys.argv[1], MPI.COMM_SELF)
folder.claim()
print("claimed", flush=True)
time.sleep(60)
"""


def run_folder(path: Path) -> RunFolder:
    from mpi4py import MPI

    return RunFolder(path, MPI.COMM_SELF)


def hold_elsewhere(path: Path) -> subprocess.Popen[str]:
    """Start a process that claims a folder, and return once it has."""
    process = subprocess.Popen(
        [sys.executable, "-c", HOLD, path],
        stdout=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "claimed\n"
    return process


def end(process: subprocess.Popen[str]) -> None:
    process.send_signal(signal.SIGKILL)
    process.communicate()


def test_a_run_leaves_the_files_it_promises(tmp_path: Path) -> None:
    with run_folder(tmp_path / "new" / "run") as folder:
        folder.begin('[law]\nname = "own"\n')
        folder.append_step({"step": 0, "residual_rms": 0.5})
        folder.append_step({"step": 1, "residual_rms": float("nan")})
        folder.write_summary(SUMMARY)
        assert read_steps(folder.steps) == [
            {"step": 0, "residual_rms": 0.5},
            {"step": 1, "residual_rms": None},
        ]
        assert folder.job.read_text() == '[law]\nname = "own"\n'
    left = {p.name for p in folder.path.iterdir()}
    assert left == {"job.toml", "steps.jsonl", "summary.json"}


def test_the_summary_has_the_promised_keys(tmp_path: Path) -> None:
    with run_folder(tmp_path) as folder:
        folder.write_summary(SUMMARY)
        found = read_summary(folder.summary)
    assert list(found) == [
        "outcome",
        "reason",
        "law",
        "lattice",
        "unknowns",
        "residual_rms",
        "residual_max",
        "scalars",
        "mean_square",
        "newton_steps",
        "linear_iterations",
        "seconds",
        "ranks",
        "peak_memory_mb",
        "versions",
        "classification",
        "stage",
        "stages",
    ]
    assert found["lattice"] == {"nt": 32, "nx": 48, "order_t": 4, "order_x": 4}
    expected = asdict(SUMMARY)
    assert {k: v for k, v in found.items() if k != "lattice"} == {
        k: v for k, v in expected.items() if k != "lattice"
    }


def test_numbers_that_are_not_finite_stay_valid_json(tmp_path: Path) -> None:
    with run_folder(tmp_path) as folder:
        folder.write_summary(replace(SUMMARY, residual_rms=float("inf"), mean_square=float("nan")))
        text = folder.summary.read_text()
    assert "NaN" not in text and "Infinity" not in text
    assert json.loads(text)["residual_rms"] is None


def test_a_new_run_removes_what_would_mislead_and_a_resumed_one_keeps_it(tmp_path: Path) -> None:
    with run_folder(tmp_path) as folder:
        folder.begin("first = 1\n")
        folder.append_step({"step": 0})
        folder.write_summary(SUMMARY)
        folder.picture.touch()
        folder.state.touch()
        folder.begin("first = 1\n", resume=True)
        assert read_steps(folder.steps) == [{"step": 0}] and folder.picture.exists()
        assert not folder.summary.exists(), "a run has no outcome until it ends"
        folder.begin("second = 2\n")
        assert {p.name for p in tmp_path.iterdir()} == {"job.toml", "state.h5", "run.lock"}


def test_a_second_run_is_refused_with_a_remedy(tmp_path: Path) -> None:
    with run_folder(tmp_path), pytest.raises(LatticeError) as caught:
        run_folder(tmp_path).claim()
    message = str(caught.value)
    assert f"in use by a run on {os.uname().nodename} (process {os.getpid()}, since 20" in message
    assert "--out" in message and "run.lock" in message
    run_folder(tmp_path).claim()


def test_a_run_of_another_process_is_refused_until_it_dies(tmp_path: Path) -> None:
    process = hold_elsewhere(tmp_path)
    try:
        with pytest.raises(LatticeError, match=f"in use by .*process {process.pid}"):
            run_folder(tmp_path).claim()
    finally:
        end(process)
    assert (tmp_path / "run.lock").exists(), "a killed run removes nothing"
    with run_folder(tmp_path):
        holder = read_holder(tmp_path / "run.lock")
        assert holder is not None and holder.process == os.getpid()


def test_a_lock_of_another_machine_counts_unless_the_scheduler_job_is_the_same(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    other = Holder("another-machine", 1, "2030-01-01T00:00:00+00:00", scheduler_job="77")
    (tmp_path / "run.lock").write_text(json.dumps(asdict(other)))
    with pytest.raises(LatticeError, match="a run on another-machine .* remove .*run.lock"):
        run_folder(tmp_path).claim()
    monkeypatch.setenv("SLURM_JOB_ID", "77")
    with run_folder(tmp_path):
        pass
    assert not (tmp_path / "run.lock").exists()


@pytest.mark.parametrize("content", ["", "nonsense", "[1, 2]", '{"host": "x"}'])
def test_a_broken_lock_file_of_no_living_run_is_taken_over(content: str, tmp_path: Path) -> None:
    (tmp_path / "run.lock").write_text(content)
    with run_folder(tmp_path):
        assert read_holder(tmp_path / "run.lock") is not None


def test_only_one_of_many_claims_at_once_succeeds(tmp_path: Path) -> None:
    """Ranks of one MPI job stand for independent runs, each on itself alone, that start together."""
    script = """
        import sys
        from mpi4py import MPI
        from lattice.errors import LatticeError
        from lattice.store.runfolder import RunFolder
        comm, won = MPI.COMM_WORLD, []
        for trial in range(20):
            folder = RunFolder(f"{sys.argv[1]}/{trial}", MPI.COMM_SELF)
            comm.Barrier()
            try:
                folder.claim()
                won.append(1)
            except LatticeError:
                won.append(0)
            comm.Barrier()
            folder.release()
        wins = comm.gather(won)
        if comm.rank == 0:
            print({sum(trial) for trial in zip(*wins)})
        """
    assert run_ranks(3, script, tmp_path).stdout.strip() == "{1}"


def test_a_refusal_reaches_all_ranks(tmp_path: Path) -> None:
    script = """
        import sys
        from mpi4py import MPI
        from lattice.errors import LatticeError
        from lattice.store.runfolder import RunFolder
        comm = MPI.COMM_WORLD
        ends = []
        for path in sys.argv[1:]:
            try:
                RunFolder(path, comm).claim()
                ends.append("claimed")
            except LatticeError as error:
                ends.append("refused" if "in use" in str(error) or "cannot use folder" in str(error) else str(error))
        ends = comm.gather(ends)
        if comm.rank == 0:
            print(ends)
        """
    (tmp_path / "file").touch()
    process = hold_elsewhere(tmp_path / "held")
    try:
        said = run_ranks(2, script, tmp_path / "held", tmp_path / "file", tmp_path / "free").stdout
    finally:
        end(process)
    assert said.strip() == str([["refused", "refused", "claimed"]] * 2)


def test_a_step_that_a_crash_cut_short_harms_no_other(tmp_path: Path) -> None:
    with run_folder(tmp_path) as folder:
        folder.append_step({"step": 0})
        with folder.steps.open("a") as file:
            file.write('{"step": 1, "resid')
        assert read_steps(folder.steps) == [{"step": 0}]
        folder.append_step({"step": 1})
        assert read_steps(folder.steps) == [{"step": 0}, {"step": 1}]


def test_a_summary_is_never_half_written(tmp_path: Path) -> None:
    script = """
        import resource, sys
        from mpi4py import MPI
        from lattice.errors import LatticeError
        from lattice.store.runfolder import RunFolder
        from tests.test_run_folder import SUMMARY
        from dataclasses import replace
        folder = RunFolder(sys.argv[1], MPI.COMM_SELF)
        folder.write_summary(SUMMARY)
        resource.setrlimit(resource.RLIMIT_FSIZE, (200, 200))
        try:
            folder.write_summary(replace(SUMMARY, outcome="x" * 1000))
        except LatticeError as error:
            print(error)
        """
    said = run_ranks(1, script, tmp_path).stdout
    assert said.startswith("cannot write") and "File too large" in said
    assert read_summary(tmp_path / "summary.json")["outcome"] == "converged"
    assert [p.name for p in tmp_path.iterdir()] == ["summary.json"]


def test_a_missing_or_foreign_summary_is_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="No such file"):
        read_summary(tmp_path / "summary.json")
    (tmp_path / "summary.json").write_text("outcome: converged")
    with pytest.raises(InputError, match="is not the summary of a run"):
        read_summary(tmp_path / "summary.json")


def test_versions_name_what_a_run_stands_on() -> None:
    found = versions()
    assert {"lattice", "python", "numpy", "h5py", "hdf5", "mpi4py", "mpi", "petsc"} <= set(found)
    assert found["python"] == sys.version.split()[0]
    assert all(isinstance(value, str) and value for value in found.values())


def test_peak_memory_is_summed_over_ranks() -> None:
    script = """
        import numpy as np
        from mpi4py import MPI
        from lattice.store.runfolder import peak_memory_mb
        comm = MPI.COMM_WORLD
        before = peak_memory_mb(comm)
        held = np.ones(12_500_000 if comm.rank else 25_000_000)
        after = peak_memory_mb(comm)
        if comm.rank == 0:
            print(before, after)
        """
    before, after = map(float, run_ranks(2, script).stdout.split())
    # 200 MB on one rank and 100 MB on the other, give or take what the allocator had left or needs.
    assert 280.0 < after - before < 330.0


def test_without_file_locks_the_process_id_decides(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def no_locks(descriptor: int, operation: int) -> None:
        raise OSError(errno.ENOLCK, "No locks available")

    monkeypatch.setattr("lattice.store.lock.fcntl.flock", no_locks)
    here = os.uname().nodename
    dead = subprocess.Popen([sys.executable, "-c", ""])
    dead.wait()
    (tmp_path / "run.lock").write_text(json.dumps(asdict(Holder(here, dead.pid, "2030"))))
    with run_folder(tmp_path), pytest.raises(LatticeError, match="in use"):
        run_folder(tmp_path).claim()
