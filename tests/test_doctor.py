"""`lattice doctor`: what it finds, and how it tells to get what is missing."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from lattice.cli import doctor
from lattice.cli.doctor import MISSING, OK, WARN, Finding
from lattice.cli.probes import PROBES, Answer, read_answer, run_command, run_probe

ROOT = Path(__file__).resolve().parents[1]


def examine(**variables: str) -> subprocess.CompletedProcess[str]:
    env = {**os.environ, "PYTHONPATH": str(ROOT), **variables}
    return subprocess.run(
        [sys.executable, "-m", "lattice", "doctor"],
        capture_output=True,
        text=True,
        timeout=120,
        env=env,
        cwd=ROOT,
    )


def statuses(output: str) -> dict[str, str]:
    lines = [line.split() for line in output.splitlines() if line.startswith((OK, WARN, MISSING))]
    return {words[1]: words[0] for words in lines}


def test_the_machine_that_runs_the_tests_is_healthy() -> None:
    done = examine()
    assert done.returncode == 0, done.stdout
    found = statuses(done.stdout)
    assert {"Python", "packages", "MPI", "PETSc", "SLEPc", "HDF5", "FFT", "Numba", "launcher"} <= set(found)
    assert MISSING not in found.values()
    assert done.stdout.splitlines()[-1] == "all that a solve needs is here"


def test_what_is_broken_is_told_with_its_remedy(tmp_path: Path) -> None:
    (tmp_path / "mpi4py_fft.py").write_text("raise ImportError('libfftw3.so.3: cannot open shared object')\n")
    (tmp_path / "scipy.py").write_text("raise ImportError('no scipy here')\n")
    (tmp_path / "numba.py").write_text("import os\nos.abort()\n")
    broken = {"PYTHONPATH": f"{tmp_path}{os.pathsep}{ROOT}", "OMP_NUM_THREADS": "8"}
    done = examine(PETSC_DIR="/no/such/petsc", LATTICE_LAUNCHER="no-such-launcher", **broken)
    assert done.returncode == 1
    found = statuses(done.stdout)
    assert found["PETSc"] == found["launcher"] == found["packages"] == MISSING
    assert found["FFT"] == found["Numba"] == found["threads"] == WARN
    assert "PETSC_DIR = /no/such/petsc is no folder: correct it or unset it" in done.stdout
    assert "no-such-launcher is not found" in done.stdout
    assert "not importable: scipy" in done.stdout
    assert "OMP_NUM_THREADS=8" in done.stdout
    assert "libfftw3.so.3" in done.stdout
    assert done.stdout.splitlines()[-1] == "3 thing(s) missing"


PETSC = {"version": "3.20.0", "version_numbers": [3, 20, 0], "scalar": "real", "index_bits": 64}


@pytest.mark.parametrize(
    ("changes", "status", "lu"),
    [
        ({"solvers": ["mumps", "superlu_dist"]}, OK, OK),
        ({"solvers": ["superlu_dist"]}, OK, WARN),
        ({"solvers": []}, OK, WARN),
        ({"solvers": ["mumps"], "scalar": "complex"}, MISSING, OK),
        ({"solvers": ["mumps"], "version": "3.17.4", "version_numbers": [3, 17, 4]}, MISSING, OK),
    ],
)
def test_petsc_builds_are_judged(changes: dict[str, object], status: str, lu: str) -> None:
    petsc, sparse = doctor._petsc(Answer({**PETSC, **changes}))
    assert (petsc.status, sparse.status) == (status, lu)
    assert bool(petsc.remedy) == (status != OK)
    assert bool(sparse.remedy) == (lu != OK)


def test_hdf5_without_mpi_works_with_a_remark() -> None:
    (finding,) = doctor._hdf5(Answer({"version": "3.11", "hdf5": "1.14", "mpi": False}))
    assert finding.status == WARN
    assert "through one rank" in finding.text
    assert "python3-h5py-mpi" in finding.remedy


@pytest.mark.parametrize("name", PROBES)
def test_every_library_that_fails_has_a_remedy(name: str) -> None:
    findings = list(doctor._JUDGES[name](Answer(error="ImportError: no")))
    assert findings
    assert all(finding.status in (WARN, MISSING) and finding.remedy for finding in findings)


def test_a_folder_without_room_is_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(doctor, "DISK_WANTED_GB", 1e9)
    assert doctor._space("folder", tmp_path / "new" / "run", "elsewhere").status == WARN


def test_a_remedy_stands_below_its_finding() -> None:
    assert Finding(OK, "PETSc", "3.20").line() == "ok      PETSc       3.20"
    first, second = Finding(MISSING, "PETSc", "absent", "install it").line().splitlines()
    assert first == "missing PETSc       absent"
    assert second.strip() == "-> install it"


def test_a_probe_that_crashes_hangs_or_chatters_gives_an_answer() -> None:
    assert run_command([sys.executable, "-c", "import os; os.abort()"], 30).error == "ended with code -6"
    assert run_command(["sleep", "30"], 0.2).error == "no answer within 0.2 s"
    assert run_command(["/no/such/program"], 1).error
    assert read_answer("noise\n", "first\nlast words\n", 3).error == "ended with code 3: last words"
    assert read_answer('noise\nlattice-probe {"values": {"a": 1}}\nmore\n', "", 0) == Answer({"a": 1})
    assert read_answer('lattice-probe {"error": "a\\nb"}\n', "", 0) == Answer(error="a b")


def test_packages_are_told_with_their_versions() -> None:
    import numpy

    assert run_probe("packages").values["numpy"] == numpy.__version__
