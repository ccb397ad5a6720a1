"""The command line: exit codes, messages, start-up time, closed pipes."""

from __future__ import annotations

import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from lattice import environment
from lattice.cli import exits
from lattice.cli.main import COMMANDS, main, make_parser, split_at_dashes
from lattice.errors import InputError, LatticeError, RemoteFailure
from tests.mpi import run_module, run_ranks

ROOT = Path(__file__).resolve().parents[1]

FILM = """
[law]
name = "kuramoto-sivashinsky"

[box]
period = 20.0
length_x = 22.0

[lattice]
nt = 40
nx = 48

[start]
kind = "march"
"""
ALONE = {
    name: value
    for name, value in os.environ.items()
    if not name.startswith(("OMPI_", "PMI", "SLURM_", "PMIX_", *environment.THREAD_COUNTS))
} | {"PYTHONPATH": str(ROOT)}


def lattice(*arguments: str, cwd: Path = ROOT, timeout: float = 60.0) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "lattice", *arguments],
        capture_output=True,
        text=True,
        timeout=timeout,
        cwd=cwd,
        env=ALONE,
    )


@pytest.fixture
def job(tmp_path: Path) -> Path:
    path = tmp_path / "film.toml"
    path.write_text(FILM, encoding="utf-8")
    return path


def test_help_appears_within_half_a_second() -> None:
    seconds = []
    for _ in range(5):
        start = time.perf_counter()
        done = lattice("--help")
        seconds.append(time.perf_counter() - start)
        assert done.returncode == 0
    assert min(seconds) < 0.5
    assert all(name in done.stdout for name in COMMANDS)
    assert "exit codes" in done.stdout


@pytest.mark.parametrize("arguments", [["--help"], ["solve", "--help"], ["info"], ["no-such-command"]])
def test_reading_the_command_line_loads_no_heavy_library(arguments: list[str]) -> None:
    script = (
        "import sys\n"
        "from lattice.cli.main import main\n"
        "try:\n    main(sys.argv[1:])\n"
        "except SystemExit:\n    pass\n"
        "heavy = {'numpy', 'sympy', 'scipy', 'petsc4py', 'mpi4py', 'h5py', 'pydantic', 'numba'}\n"
        "print('loaded', sorted(heavy & set(sys.modules)))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script, *arguments], capture_output=True, text=True, timeout=60, env=ALONE
    )
    assert "loaded []" in done.stdout


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_explains_itself(command: str) -> None:
    done = lattice(command, "--help")
    assert done.returncode == 0
    assert COMMANDS[command].capitalize()[:20] in done.stdout
    assert done.stderr == ""


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        ([], "COMMAND"),
        (["slove"], "invalid choice: 'slove'"),
        (["solve"], "JOB"),
        (["solve", "none.toml"], "error: none.toml: no such job file"),
        (["solve", "film.toml", "--ranks", "0"], "--ranks: must be an integer >= 1, got '0'"),
        (["solve", "film.toml", "--ranks", "two"], "--ranks: must be an integer >= 1, got 'two'"),
        (["solve", "film.toml", "--set", "lattice.nx"], "--set: must be written section.key=value"),
        (["solve", "film.toml", "--set", "lattice.nx=4"], "lattice.nx: must be >= 8 for order 4, got nx = 4"),
        (["solve", "film.toml", "--ranks", "5000"], "--ranks: must leave every rank a block"),
        (
            ["solve", "film.toml", "--ranks", "2", "--launcher", "no-such-launcher"],
            "no-such-launcher is not found",
        ),
        (["solve", "film.toml", "--out", "film.toml"], "cannot be a folder: film.toml is a file"),
        (["solve", "film.toml", "--", "log_view"], "PETSc options must start with a dash, got 'log_view'"),
        (["solve", "film.toml", "--turbo"], "unrecognized arguments: --turbo"),
        (["info", "none.h5"], "error: none.h5: no such state file"),
        (["info", "."], "holds no state.h5"),
        (["plot", "none.h5"], "error: none.h5: no such state file"),
        (["plot", "film.toml", "--out", "nowhere/a.png"], "must lie in an existing folder"),
        (["plot", "none.h5", "--cut", "z=1"], "--cut: must be t, x or y = a number, got 'z=1'"),
        (["plot", "none.h5", "--cut", "t"], "--cut: must be t, x or y = a number, got 't'"),
        (["plot", "none.h5", "--cut", "t=nan"], "--cut: must be t, x or y = a number, got 't=nan'"),
        (["plot", "none.h5", "--cut", "t=1", "--cut", "t=2"], "--cut: must hold each axis once, got t twice"),
        (["plot", "none.h5", "--size", "8"], "--size: must be width x height in inches"),
        (["plot", "none.h5", "--size", "8x1e9"], "--size: must be width x height in inches"),
        (["plot", "film.toml", "--out", "."], "is a folder, the name of a file is wanted"),
        (["laws", "kuramoto-sivashinski"], "(did you mean 'kuramoto-sivashinsky'?)"),
        (["laws", "--", "-log_view"], "only solve and submit take options for PETSc, got -log_view"),
    ],
)
def test_bad_input_is_refused_with_exit_code_2(
    job: Path,
    arguments: list[str],
    said: str,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(job.parent)
    try:
        code: object = main(arguments)
    except SystemExit as end:  # from argparse
        code = end.code
    out, err = capsys.readouterr()
    assert code == exits.REFUSED == 2
    assert said in err
    assert "Traceback" not in err
    assert out == ""


@pytest.mark.parametrize(
    "arguments", [["solve", "none.toml"], ["solve"], ["info", "none.h5"], ["laws", "none"]]
)
def test_the_process_ends_with_that_exit_code(arguments: list[str], tmp_path: Path) -> None:
    done = lattice(*arguments, cwd=tmp_path)
    assert done.returncode == exits.REFUSED
    assert "none" in done.stderr or "JOB" in done.stderr
    assert done.stdout == ""


def test_a_job_without_its_law_is_refused_before_a_folder_is_made(job: Path) -> None:
    done = lattice("solve", "film.toml", "--set", "law.name=film-3d", "--out", "run", cwd=job.parent)
    assert done.returncode == exits.REFUSED
    assert "film.toml with --set: law.name: must be a shipped law, got 'film-3d'" in done.stderr
    assert not (job.parent / "run").exists()


def test_several_problems_are_told_together(job: Path) -> None:
    done = lattice("solve", "film.toml", "--set", "lattice.nx=4", "--set", "lattice.nt=2", cwd=job.parent)
    assert done.returncode == exits.REFUSED
    assert done.stderr.startswith("error: ")
    assert len(done.stderr.splitlines()) == 2


def test_a_finished_run_is_not_replaced_by_accident(job: Path) -> None:
    (job.parent / "runs" / "film").mkdir(parents=True)
    (job.parent / "runs" / "film" / "state.h5").touch()
    done = lattice("solve", "film.toml", cwd=job.parent)
    assert done.returncode == exits.REFUSED
    assert "runs/film: holds an earlier run's state; choose another --out, or --force" in done.stderr


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_a_folder_without_permission_is_refused(job: Path) -> None:
    closed = job.parent / "closed"
    closed.mkdir(mode=0o500)
    done = lattice("solve", "film.toml", "--out", "closed/run", cwd=job.parent)
    assert done.returncode == exits.REFUSED
    assert "no permission to write" in done.stderr


def test_on_several_ranks_one_of_them_tells_what_is_refused(job: Path) -> None:
    done = run_module(2, "lattice", "solve", str(job), "--set", "lattice.nx=4", check=False, cwd=job.parent)
    assert done.returncode == exits.REFUSED
    assert done.stderr.count("lattice.nx: must be >= 8 for order 4") == 1
    assert not (job.parent / "runs").exists()


def test_a_rank_count_that_contradicts_the_launcher_is_refused_once(job: Path) -> None:
    done = run_module(2, "lattice", "solve", str(job), "--ranks", "3", check=False, cwd=job.parent)
    assert done.returncode == exits.REFUSED
    assert done.stderr.count("must equal the 2 rank(s) that Open MPI's mpiexec started, got 3") == 1


def test_ranks_that_do_not_see_each_other_are_refused(job: Path) -> None:
    # As where the launcher belongs to another MPI: it counts two ranks, the library sees one.
    env = ALONE | {"PMI_RANK": "0", "PMI_SIZE": "2"}
    done = subprocess.run(
        [sys.executable, "-m", "lattice", "solve", str(job)],
        capture_output=True, text=True, timeout=60, env=env, cwd=job.parent,
    )  # fmt: skip
    assert done.returncode == exits.REFUSED
    assert "started 2 ranks, but MPI sees 1: launcher and MPI library do not match" in done.stderr


@pytest.mark.parametrize("command", [["laws"], ["laws", "kolmogorov"], ["--help"]])
def test_a_reader_that_goes_away_is_no_error(command: list[str]) -> None:
    process = subprocess.Popen(
        [sys.executable, "-m", "lattice", *command],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, cwd=ROOT, env=ALONE,
    )  # fmt: skip
    assert process.stdout is not None
    assert process.stderr is not None
    process.stdout.close()
    complaint = process.stderr.read()
    process.stderr.close()
    assert process.wait(60) == exits.PIPE_CLOSED
    assert complaint == b""


def test_ctrl_c_before_the_solve_is_one_line(job: Path) -> None:
    # A job file that never ends, so that the interrupt falls into reading it.
    pipe = job.parent / "endless.toml"
    os.mkfifo(pipe)
    process = subprocess.Popen(
        [sys.executable, "-m", "lattice", "solve", str(pipe)],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=ALONE, cwd=job.parent,
    )  # fmt: skip
    with pipe.open("w"):  # opens once the other side reads
        process.send_signal(signal.SIGINT)
        out, err = process.communicate(timeout=60)
    assert (process.returncode, out, err) == (exits.STOPPED_EARLY, "", "interrupted\n")


FAKE_SOLVER = """
import sys, tomllib, types
seen = types.SimpleNamespace(calls=[])
def run_job(job, folder, comm, petsc_options, report, job_text, resume):
    assert tomllib.loads(job_text)["lattice"]["nx"] == job.lattice.nx
    seen.calls.append((job, folder, comm, petsc_options))
    report(f"solving {job.lattice.nx} into {folder} with {petsc_options}")
    return types.SimpleNamespace(exit_code=3)
sys.modules["lattice.solve.run"] = types.SimpleNamespace(run_job=run_job)
"""


def test_solve_hands_job_folder_and_petsc_options_to_the_solver(job: Path) -> None:
    options = "'--set', 'lattice.nx=64', '--out', 'here', '--', '-ksp_rtol', '1e-3'"
    script = f"{FAKE_SOLVER}\nfrom lattice.cli.main import main\nsys.exit(main(['solve', {str(job)!r}, {options}]))"
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, timeout=60, env=ALONE, cwd=job.parent
    )
    assert done.stdout == "solving 64 into here with ['-ksp_rtol', '1e-3']\n"
    assert (done.returncode, done.stderr) == (exits.NOT_CONVERGED, "")


def test_all_ranks_solve_the_same_job_and_one_reports(job: Path) -> None:
    script = f"""{FAKE_SOLVER}
from lattice.cli.main import main
code = main(["solve", {str(job)!r}, "--set", "solve.free=['period']"])
from mpi4py import MPI
jobs = MPI.COMM_WORLD.allgather(seen.calls[0][0])
assert len(jobs) == 3 and jobs[0] == jobs[1] == jobs[2], jobs
sys.exit(code)
"""
    done = run_ranks(3, script, check=False, cwd=job.parent)
    assert done.returncode == exits.NOT_CONVERGED
    assert done.stdout.count("solving 48 into runs/film with []") == 1
    assert done.stderr.count("caution: drift_x is held") == 1
    assert "Traceback" not in done.stderr


@pytest.fixture
def run_folder(tmp_path: Path) -> Path:
    """A run's folder with a state of two waves."""
    import numpy as np
    from mpi4py import MPI

    from lattice.geometry.block import Block
    from lattice.geometry.lattice import Lattice
    from lattice.laws.catalogue import load_law
    from lattice.store.statefile import write_state
    from lattice.store.statemeta import StateMeta

    law, grid = load_law("kuramoto-sivashinsky"), Lattice(nt=16, ny=1, nx=24)
    values = {"period": 17.25, "length_x": 21.5, "drift_x": 0.125, "source_u": 0.0, "dispersion": 0.0}
    t, x = np.arange(16)[:, None] / 16, np.arange(24)[None, :] / 24
    field = np.cos(2 * np.pi * (2 * x - t)) + np.sin(2 * np.pi * 3 * x)
    folder = tmp_path / "run"
    folder.mkdir()
    meta = StateMeta.of_law(law, grid, values, free=("period", "drift_x"))
    write_state(folder / "state.h5", field[:, None, :, None], Block.whole(grid), meta, MPI.COMM_SELF)
    return folder


def test_a_state_is_told_by_its_file_or_its_folder(run_folder: Path) -> None:
    by_file, by_folder = lattice("info", str(run_folder / "state.h5")), lattice("info", str(run_folder))
    assert by_file.returncode == by_folder.returncode == 0
    assert by_file.stdout == by_folder.stdout
    assert all(text in by_file.stdout for text in ("kuramoto-sivashinsky", "period", "17.25", "0.125"))


def test_a_state_is_drawn_beside_itself_or_where_asked(run_folder: Path) -> None:
    beside = lattice("plot", str(run_folder))
    other = ("--out", str(run_folder / "other.png"), "--cut", "t=3.5", "--component", "u", "--size", "7x4")
    asked = lattice("plot", str(run_folder), *other)
    assert beside.returncode == asked.returncode == 0
    for done, name in ((beside, "state.png"), (asked, "other.png")):
        assert done.stdout.strip() == str(run_folder / name)
        assert (run_folder / name).read_bytes().startswith(b"\x89PNG")


def test_laws_lists_every_shipped_law() -> None:
    from lattice.laws.catalogue import law_names

    done = lattice("laws")
    assert done.returncode == 0
    assert all(name in done.stdout for name in law_names())


def test_a_law_is_described_in_full() -> None:
    done = lattice("laws", "kolmogorov")
    assert done.returncode == 0
    assert all(word in done.stdout for word in ("Re", "om", "psi", "not homogeneous in y"))


def test_petsc_options_are_split_off_at_the_first_dashes() -> None:
    assert split_at_dashes(["solve", "a", "--", "-x", "--", "1"]) == (["solve", "a"], ["-x", "--", "1"])
    assert split_at_dashes(["solve", "a", "--"]) == (["solve", "a"], [])


def test_the_command_line_has_the_documented_options() -> None:
    text = lattice("solve", "--help").stdout
    options = set(re.findall(r"--[a-z]+", text)) - {"--help"}
    assert options == {"--ranks", "--out", "--set", "--force", "--resume", "--check", "--launcher", "--debug"}
    assert make_parser().prog == "lattice"


def test_an_unexpected_error_is_one_line_and_exit_code_70(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("lattice.cli.laws.run", _fail)
    assert main(["laws"]) == exits.FAILED == 70
    assert capsys.readouterr().err == "internal failure: ZeroDivisionError: no; --debug shows where\n"
    assert main(["laws", "--debug"]) == exits.FAILED
    assert "Traceback" in capsys.readouterr().err


def _fail(options: object) -> int:
    raise ZeroDivisionError("no")


def test_every_failure_has_its_exit_code_and_text() -> None:
    assert exits.exit_code(InputError("x")) == exits.REFUSED
    assert exits.exit_code(LatticeError("x")) == exits.FAILED
    assert exits.exit_code(KeyboardInterrupt()) == exits.STOPPED_EARLY
    assert exits.explain(InputError("must be 3", file="a.toml", key="b")) == "error: a.toml: b: must be 3"
    assert exits.explain(RemoteFailure("rank 1 failed")) == "failed: rank 1 failed"


def test_a_failure_that_petsc_has_wrapped_is_told_as_our_own() -> None:
    wrapper = type("Error", (RuntimeError,), {"__module__": "petsc4py.PETSc"})("error code 101")
    wrapper.__cause__ = InputError("must be 3")
    assert exits.explain(wrapper) == "error: must be 3"
    assert exits.exit_code(wrapper) == exits.REFUSED


def test_prepare_sets_what_is_unset_and_leaves_the_rest(tmp_path: Path) -> None:
    variables = {"OMP_NUM_THREADS": "4", "XDG_CACHE_HOME": str(tmp_path)}
    environment.set_defaults(variables)
    assert variables == {
        "XDG_CACHE_HOME": str(tmp_path),
        "OMP_NUM_THREADS": "4",
        "OPENBLAS_NUM_THREADS": "1",
        "MKL_NUM_THREADS": "1",
        "NUMBA_NUM_THREADS": "1",
        "NUMBA_CACHE_DIR": str(tmp_path / "lattice"),
    }


def test_parallel_hdf5_is_asked_for_on_several_ranks_only() -> None:
    several, one = {"PMI_RANK": "0", "PMI_SIZE": "2"}, {"PMI_RANK": "0", "PMI_SIZE": "1"}
    environment.set_defaults(several)
    environment.set_defaults(one)
    assert several["H5PY_ALWAYS_USE_MPI"] == "1"
    assert "H5PY_ALWAYS_USE_MPI" not in one


def test_the_kernel_cache_avoids_folders_that_cannot_be_used(tmp_path: Path) -> None:
    assert environment.cache_folder({"HOME": str(tmp_path)}) == tmp_path / ".cache" / "lattice"
    for home in ({}, {"HOME": ""}, {"HOME": "relative"}, {"XDG_CACHE_HOME": "relative", "HOME": "/"}):
        folder = environment.cache_folder(home)
        assert folder.is_absolute()
        assert folder.name.startswith(f"lattice-{os.getuid()}")


@pytest.mark.parametrize(
    ("variables", "launch"),
    [
        ({}, None),
        ({"OMPI_COMM_WORLD_RANK": "1", "OMPI_COMM_WORLD_SIZE": "3"}, ("Open MPI's mpiexec", 1, 3)),
        ({"PMI_RANK": "0", "PMI_SIZE": "1"}, ("MPICH's mpiexec", 0, 1)),
        ({"SLURM_PROCID": "5", "SLURM_STEP_NUM_TASKS": "8"}, ("srun", 5, 8)),
        ({"SLURM_PROCID": "0", "SLURM_NTASKS": "8"}, None),
        ({"SLURM_PROCID": "0", "SLURM_STEP_NUM_TASKS": "1"}, None),
        ({"PMI_RANK": "0", "PMI_SIZE": "many"}, None),
    ],
)
def test_a_parallel_launch_is_known_by_its_environment(
    variables: dict[str, str], launch: tuple[str, int, int] | None
) -> None:
    expected = None if launch is None else environment.Launch(*launch)
    assert environment.find_launch(variables) == expected


def test_the_newest_debian_build_is_taken(tmp_path: Path) -> None:
    for name in ("petsc3.9/amd64-real", "petsc3.18/amd64-real", "petsc3.20/amd64-complex"):
        (tmp_path / name).mkdir(parents=True)
    assert environment.newest_build(tmp_path, "petsc") == tmp_path / "petsc3.18" / "amd64-real"
    assert environment.newest_build(tmp_path, "slepc") is None
