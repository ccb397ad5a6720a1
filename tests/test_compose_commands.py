"""The commands excerpt, mosaic and recurrences: what they write, say and refuse."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from mpi4py import MPI

from lattice.cli.main import main
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.job.reader import load_job
from lattice.laws.catalogue import load_law, read_law
from lattice.store.statefile import open_state, read_whole, write_state
from lattice.store.statemeta import StateMeta
from tests.test_composing import waves

STATE = {"period": 10.0, "length_x": 16.0, "drift_x": -0.2, "source_u": 0.0}


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """An empty current folder with a run in runs/film."""
    monkeypatch.chdir(tmp_path)
    run = tmp_path / "runs" / "film"
    run.mkdir(parents=True)
    law, grid = load_law("kuramoto-sivashinsky"), Lattice(20, 1, 32)
    meta = StateMeta.of_law(law, grid, {**STATE, "dispersion": 0.4}, outcome="converged")
    write_state(run / "state.h5", waves((20, 1, 32)), Block.whole(grid), meta, MPI.COMM_SELF)
    return tmp_path


@pytest.fixture
def undrawn(monkeypatch: pytest.MonkeyPatch) -> None:
    """Leave out the pictures, which take seconds and have a test of their own."""
    monkeypatch.setattr("lattice.show.pictures.plot_state", lambda state, out: out)
    monkeypatch.setattr("lattice.show.returns.plot_returns", lambda *given: given[-1])


def test_an_excerpt_is_written_drawn_and_ready_to_be_solved(folder, capsys):
    assert main(["excerpt", "runs/film", "--t", "0:8", "--x", "4:16", "--out", "piece.h5"]) == 0
    said = capsys.readouterr().out
    assert "excerpt: t 0 to 8 of 10, x 4 to 16 of 16" in said
    assert "next: lattice solve piece.toml" in said.splitlines()
    assert Path("piece.png").stat().st_size > 1000
    state = open_state("piece.h5")
    assert state.meta.outcome == "composed, not solved"
    assert state.meta.residual_rms > 0.01
    assert state.field.shape == (16, 1, 24, 1)
    job = load_job("piece.toml")
    assert (job.box.period, job.box.length_x, job.box.drift_x) == (8.0, 12.0, -0.2)
    assert job.law.parameters["dispersion"] == 0.4
    assert job.start.file == str(folder / "runs" / "film" / "state.h5")
    assert (job.start.t, job.start.x) == ((0.0, 8.0), (4.0, 16.0))
    assert job.make_lattice() == state.meta.lattice


def test_excerpts_of_excerpts_replace_each_other_but_nothing_else(folder, undrawn, capsys):
    def cut(*more: str) -> int:
        return main(["excerpt", "runs/film", "--x", "0:8", *more])

    assert cut("--out", "a.h5") == 0
    assert cut("--out", "a.h5", "--nx", "20") == 0
    assert read_whole("a.h5").shape[2] == 20
    assert main(["excerpt", "a.h5", "--t", "2:6", "--out", "b.h5"]) == 0
    capsys.readouterr()
    assert cut("--out", "runs/film/state.h5") == 2
    assert "exists and is no composed field; choose another --out, or --force" in capsys.readouterr().err
    Path("c.toml").write_text("mine = 1")
    assert cut("--out", "c.h5") == 2
    assert "c.toml: is in the place of the job file to be written" in capsys.readouterr().err
    assert Path("c.toml").read_text() == "mine = 1"


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (["--t", "5", "--out", "a.h5"], "--t: must be FROM:TO with FROM < TO, got '5'; such as --t 0:20"),
        (["--x", "9:3", "--out", "a.h5"], "--x: must be FROM:TO with FROM < TO, got '9:3'"),
        (["--y", "0:1", "--out", "a.h5"], "start.y must be left out"),
        (["--blend", "1", "--out", "a.h5"], "--blend: must be from 0 to below 1, got '1'"),
        (["--coarsen", "no", "--out", "a.h5"], "--coarsen: must be a number from 0.1 to 10, got 'no'"),
        (["--out", "a.nc"], "--out: must end in .h5, got 'a.nc'"),
        (["--out", "none/a.h5"], "must lie in an existing folder"),
    ],
)
def test_unusable_excerpts_are_refused(folder, capsys, arguments, says):
    assert main(["excerpt", "runs/film", *arguments]) == 2
    assert says in capsys.readouterr().err


def test_a_mosaic_from_the_shell_and_from_a_job_file_are_one(folder, undrawn, capsys):
    assert (
        main(["mosaic", "a=runs/film", "--row", "a a", "--out", "b.h5", "--coarsen", "1.6", "--nt", "18"])
        == 0
    )
    assert read_whole("b.h5").shape == (18, 1, 40, 1)
    members = ["a=runs/film", "b=runs/film,shift_x=3,shift_t=2.5"]
    assert main(["mosaic", *members, "--row", "a b", "--row", "b a", "--out", "four.h5"]) == 0
    said = capsys.readouterr().out
    assert "mosaic:   b (row 1, column 2): residual_rms" in said
    assert "next: lattice solve four.toml" in said
    four = open_state("four.h5")
    assert four.field.shape == (40, 1, 64, 1)
    assert four.meta.values["drift_x"] == pytest.approx(-0.2)
    assert load_job("four.toml").start.members["b"].shift_t == 2.5
    Path("layout.toml").write_text(
        """
        law.name = "kuramoto-sivashinsky"
        lattice = { nt = 40, nx = 64 }
        [start]
        kind = "mosaic"
        rows = ["a b", "b a"]
        [start.members]
        a = { file = "runs/film" }
        b = { file = "runs/film/state.h5", shift_x = 3.0, shift_t = 2.5 }
        """
    )
    job = load_job("layout.toml")
    assert (job.box.period, job.box.length_x) == (20.0, 32.0)
    assert main(["mosaic", "layout.toml", "--out", "layout.h5"]) == 0
    assert "next: lattice solve layout.toml" in capsys.readouterr().out
    assert np.array_equal(read_whole("layout.h5"), four.field)


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (["a=runs/film"], '--row: is needed: the names of members along x, such as --row "a b"'),
        (["a=runs/none", "--row", "a"], "runs/none: no such state file"),
        (["runs/film", "b=runs/film", "--row", "b"], "a member must be NAME=STATE, got 'runs/film'"),
        (["a=runs/film,repeat_x=0", "--row", "a"], "a: repeat_x must be an integer >= 1, got '0'"),
        (["a=runs/film,size=3", "--row", "a"], "a: must be one of repeat_t"),
        (["a=runs/film,reflect=x", "--row", "a"], "start.members.a.reflect must be a symmetry of law"),
        (["a=runs/film", "--row", "a b"], "and lacks 'b'"),
    ],
)
def test_unusable_mosaics_are_refused(folder, capsys, arguments, says):
    assert main(["mosaic", *arguments, "--out", "a.h5"]) == 2
    assert says in capsys.readouterr().err


def test_an_own_law_goes_into_the_job_file(folder, undrawn, capsys):
    law, grid = read_law("own", ("u_t = a*u + u_xx",), ("u",), {"a": 0.25}, 1), Lattice(20, 1, 32)
    meta = StateMeta.of_law(law, grid, {**STATE, "a": 0.25}, outcome="converged")
    write_state("own.h5", waves((20, 1, 32)), Block.whole(grid), meta, MPI.COMM_SELF)
    assert main(["excerpt", "own.h5", "--t", "1:9", "--out", "cut.h5"]) == 0
    job = load_job("cut.toml")
    assert job.make_law().text == law.text
    assert job.law.parameter_values() == {"a": 0.25}


RECURRENCES = """
law.name = "kuramoto-sivashinsky"
box = { period = 9.0, length_x = 17.63 }
lattice = { nt = 24, nx = 24 }
start = { kind = "recurrence", spin_up = 100.0, march_time = 40.0, dt = 0.2 }
"""


def test_recurrences_are_listed_drawn_and_given_to_scripts(folder, request, capsys):
    Path("film.toml").write_text(RECURRENCES)
    assert main(["recurrences", "film.toml", "--count", "2"]) == 0
    first = capsys.readouterr()
    lines = first.out.splitlines()
    assert lines[0].split() == ["number", "distance", "time", "period", "reflection"]
    assert lines[1].split()[0] == "1"
    assert lines[-1] == "next: lattice solve film.toml --set start.pick=1"
    assert "picture: film-recurrences.png" in first.err
    assert Path("film-recurrences.png").stat().st_size > 1000
    request.getfixturevalue("undrawn")
    assert main(["recurrences", "film.toml", "--json", "--out", "map.png"]) == 0
    listed = json.loads(capsys.readouterr().out)
    assert listed[0]["pick"] == 1
    assert f"{listed[0]['period']:.5g}" in lines[1]


def test_recurrences_of_another_start_are_refused(folder, capsys):
    Path("film.toml").write_text(RECURRENCES)
    assert main(["recurrences", "film.toml", "--set", 'start={ kind = "march" }']) == 2
    assert "start.kind: must be 'recurrence', got 'march'; such as --set start=" in capsys.readouterr().err
    assert main(["recurrences", "film.toml", "--set", "start.longest=200.0"]) == 2
    assert "start.march_time: must exceed the longest period looked for, 200" in capsys.readouterr().err
