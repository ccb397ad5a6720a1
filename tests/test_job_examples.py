"""Every job file at hand loads; each, solved from the command line, meets its own residual."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from lattice.job.reader import load_job
from tests.mpi import ROOT, run_module

JOBS = sorted((ROOT / "jobs").glob("*.toml"))
QUICK = ["own-law"]
"""Solved in every test run; the others take a minute or more on a busy machine with nothing compiled yet."""


def names(paths: list[Path]) -> list[str]:
    return [path.stem for path in paths]


def test_the_jobs_promised_in_the_readme_are_there() -> None:
    promised = {"film-first", "film-2d", "own-law", "shear-2d", "waves-2d"}
    assert promised <= set(names(JOBS))


@pytest.mark.parametrize("path", JOBS, ids=names(JOBS))
def test_a_job_loads_and_its_head_says_what_it_is(path: Path) -> None:
    job = load_job(path, [])
    lattice = job.make_lattice()
    assert job.make_law().dimensions == lattice.dimensions
    head = path.read_text(encoding="utf-8").split("\n\n")[0].splitlines()
    assert len(head) >= 3
    assert all(line.startswith("# ") for line in head)


@pytest.mark.parametrize(
    "path",
    [p if p.stem in QUICK else pytest.param(p, marks=pytest.mark.long) for p in JOBS],
    ids=names(JOBS),
)
@pytest.mark.timeout(900)
def test_a_job_meets_its_residual_on_two_ranks(path: Path, tmp_path: Path) -> None:
    job = load_job(path, [])
    options = ["--out", str(tmp_path / "run"), "--set", "output.picture=false"]
    completed = run_module(2, "lattice", "solve", path, *options, timeout=850.0)
    summary = json.loads((tmp_path / "run" / "summary.json").read_text(encoding="utf-8"))
    assert summary["outcome"] == "converged", completed.stdout
    assert summary["ranks"] == 2
    assert summary["residual_rms"] <= job.solve.residual_rms
    # Zero solves many a law, too.
    assert summary["mean_square"] > 0.1
