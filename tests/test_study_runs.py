"""Points measured under the launcher: rows with exact counts, resumed, submitted through a site."""

from __future__ import annotations

import json
import time
from pathlib import Path

import pytest
from mpi4py import MPI

from lattice.cli.main import main
from lattice.solve.petsc import start_petsc
from lattice.study.counters import counter_library
from lattice.study.measure import measure as run_measure
from lattice.study.reader import read_study
from lattice.study.report import write_report
from lattice.study.rows import append_rows, describe_host, describe_point, read_rows
from tests.test_study_files import JOB

STUDY = """
[study]
kind = "strong"
ranks = [2]
repeats = 1
warm_ups = 0
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("study")
    kept = "\n".join(line for line in JOB.splitlines() if not line.startswith("[job.solve"))
    job = kept.replace("nt = 50\nnx = 40", '[job.solve]\npreconditioner = "coarse"\nlinear_rtol = 1e-4')
    (folder / "two.toml").write_text(STUDY + job)
    assert main(["study", str(folder / "two.toml"), "--out", str(folder / "out")]) == 0
    return folder


def test_a_point_is_measured_once_and_reported(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (row,) = read_rows(folder / "out")
    assert (row["ranks"], row["grid"], row["converged"]) == (2, [2, 1, 1], False)
    assert row["iterations"] == sum(row["iterations_by_step"]) > 0
    assert row["memory_mb"]["peak"]["min"] > row["memory_mb"]["left"]["min"] > 50.0
    assert (folder / "out" / "report.html").is_file()
    assert main(["study", str(folder / "two.toml"), "--out", str(folder / "out")]) == 0
    assert "measured before" in capsys.readouterr().out
    assert len(read_rows(folder / "out")) == 1


def test_phases_are_disjoint_and_add_up(folder: Path) -> None:
    (row,) = read_rows(folder / "out")
    parts = sum(s["mean"] for name, s in row["seconds"].items() if name != "whole")
    assert parts == pytest.approx(row["seconds"]["whole"]["mean"], rel=1e-9)
    assert {"halo", "FFT", "tangent", "residual", "coarse set-up", "coarse solve"} <= set(row["seconds"])
    # Per iteration the two-level preconditioner takes six transforms: two down, two up, two to smooth.
    assert row["calls"]["FFT"] >= 6 * row["calls"]["coarse solve"]
    assert row["lu"]["own_entries"]["max"] <= row["lu"]["entries"]


@pytest.mark.skipif(counter_library()[0] is None, reason="needs mpicc with MPI's headers")
def test_messages_are_counted_exactly(folder: Path) -> None:
    (row,) = read_rows(folder / "out")
    assert row["counts_mpi"]
    # Two ranks share the time axis: an exchange sends one message or, up and down apart, two.
    exchanges, messages = row["calls"]["halo"], row["messages"]["halo"]["max"]
    assert exchanges <= messages <= 2.2 * exchanges
    # A transform of two axes transposes once: one message to the one other rank, and nothing else.
    assert row["messages"]["FFT"]["max"] == row["calls"]["FFT"]
    assert row["messages"]["tangent"]["max"] == row["bytes"]["tangent"]["max"] == 0.0
    assert row["seconds"]["whole"]["max"] >= row["mpi_seconds"]["whole"]["max"] > 0.0


def test_every_point_becomes_a_job_of_a_site(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    site = folder / "cluster.toml"
    site.write_text('scheduler = "slurm"\ncores_per_node = 4\ntime = "10m"\nlauncher = "srun"\n')
    common = ["--site", str(site), "--out", str(folder / "other"), "--dry-run"]
    assert main(["study", str(folder / "two.toml"), "--ranks", "1,2,8", *common]) == 0
    told = capsys.readouterr().out
    assert told.count("#!/bin/bash") == 3
    places = [told.index(f"--ntasks={n}\n") if f"--ntasks={n}\n" in told else -1 for n in (1, 2, 8)]
    assert places == sorted(places)
    assert not (folder / "other" / "rows.jsonl").exists()


def test_a_submission_asks_where_nobody_says_yes(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    arguments = ["study", str(folder / "two.toml"), "--site", "local", "--out", str(folder / "third")]
    assert main(arguments) == 2
    assert "--yes" in capsys.readouterr().err


def test_a_report_of_a_run_shares_the_parts(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    run = tmp_path / "film"
    run.mkdir()
    summary = {
        "outcome": "not converged", "reason": "no convergence after 2 Newton steps", "law": "kuramoto-sivashinsky",
        "scalars": {"period": 35.0}, "residual_rms": 1e-3, "unknowns": 8003, "ranks": 2, "newton_steps": 2,
        "linear_iterations": 20, "seconds": {"total": 3.0}, "peak_memory_mb": 500.0, "versions": {"lattice": "0"},
    }  # fmt: skip
    (run / "summary.json").write_text(json.dumps(summary))
    steps = [
        {"step": k, "stage": "newton", "residual_rms": 10.0**-k, "scalars": {"period": 35.0 - 0.1 * k},
         "linear_iterations": 9, "seconds": 1.0 * k}
        for k in range(3)
    ]  # fmt: skip
    (run / "steps.jsonl").write_text("".join(json.dumps(step) + "\n" for step in steps))
    (run / "job.toml").write_text('[law]\nname = "kuramoto-sivashinsky"\n')
    assert main(["report", str(run)]) == 0
    text = (run / "report.html").read_text(encoding="utf-8")
    for part in ("Not converged", "core hours", "1.000e-02", "period from 35 to 34.8", "[law]"):
        assert part in text
    assert main(["report", str(run), "--markdown"]) == 0
    assert "figures/residual.svg" in (run / "report.md").read_text(encoding="utf-8")
    assert (run / "figures" / "residual.svg").is_file()
    capsys.readouterr()


def test_a_report_of_nothing_is_refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["report", str(tmp_path)]) == 2
    assert "holds neither summary.json nor state.h5" in capsys.readouterr().err


@pytest.mark.long
def test_points_run_as_jobs_of_this_machine_one_after_another(folder: Path) -> None:
    arguments = ["study", str(folder / "two.toml"), "--site", "local", "--out", str(folder / "jobs"), "--yes"]
    assert main([*arguments, "--ranks", "1,2"]) == 0
    deadline = time.monotonic() + 240.0
    while len(read_rows(folder / "jobs")) < 2 and time.monotonic() < deadline:
        time.sleep(1.0)
    assert [row["ranks"] for row in read_rows(folder / "jobs")] == [1, 2]
    assert (
        main(["study", str(folder / "two.toml"), "--ranks", "1,2", "--out", str(folder / "jobs"), "--report"])
        == 0
    )


@pytest.mark.parametrize(
    ("measure", "phases"),
    [
        ("kernels", {"halo", "FFT", "residual", "tangent"}),
        ("files", {"write", "read"}),
        ("solve", {"coarse solve"}),
    ],
)
def test_every_measure_has_its_phases(folder: Path, tmp_path: Path, measure: str, phases: set[str]) -> None:
    file = tmp_path / "one.toml"
    text = (folder / "two.toml").read_text().replace("ranks = [2]", f'ranks = [1]\nmeasure = "{measure}"')
    file.write_text(text.replace("linear_rtol = 1e-4", "linear_rtol = 1e-2\nnewton_steps = 1"))
    study = read_study(file, str(tmp_path))
    start_petsc([])
    (row,) = run_measure(study.points[0], study.section, MPI.COMM_SELF, 1)
    assert phases <= set(row["seconds"])
    assert ("iterations" in row) == (measure == "solve")
    described = (
        describe_point(study, study.points[0], 1, False) | describe_host() | {"command": "lattice study"}
    )
    append_rows(study.folder, [described | row])
    assert [path.name for path in write_report([study])] == ["report.html", "report.md"]
    assert list(tmp_path.glob("**/state.h5")) == []
