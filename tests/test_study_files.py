"""Study files: what is read, refused and grown."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from lattice.errors import InputError
from lattice.study.reader import Study, read_study
from lattice.study.rows import append_rows, is_measured, read_rows
from lattice.study.run import reason_to_stop
from tests.sources import ROOT
from tests.study_rows import row

JOB = """
[job.law]
name = "kuramoto-sivashinsky"
[job.box]
period = 35.0
length_x = 40.0
[job.lattice]
nt = 100
nx = 80
[job.start]
kind = "march"
[job.solve.coarse]
nt = 50
nx = 40
"""


def read(tmp_path: Path, section: str, job: str = JOB, **more: object) -> Study:
    file = tmp_path / "growth.toml"
    file.write_text(f"[study]\n{section}\n{job}")
    return read_study(file, str(tmp_path / "out"), **more)  # type: ignore[arg-type]


def test_a_strong_study_keeps_the_box(tmp_path: Path) -> None:
    study = read(tmp_path, 'kind = "strong"\nranks = [4, 1, 2]')
    assert [p.ranks for p in study.points] == [1, 2, 4]
    assert {(p.job.lattice.nt, p.job.lattice.nx, p.job.box.period) for p in study.points} == {(100, 80, 35.0)}
    assert len({p.digest for p in study.points}) == 3


@pytest.mark.parametrize(
    ("kind", "nt", "nx"), [("weak-area", 200, 160), ("weak-time", 400, 80), ("weak-space", 100, 320)]
)
def test_a_weak_study_grows_the_box_and_keeps_the_spacings(
    tmp_path: Path, kind: str, nt: int, nx: int
) -> None:
    first, last = read(tmp_path, f'kind = "{kind}"\nranks = [1, 4]').points
    job = last.job
    assert (job.lattice.nt, job.lattice.nx) == (nt, nx)
    assert job.box.period is not None
    assert job.box.length_x is not None
    assert job.box.period / nt == pytest.approx(35.0 / 100)
    assert job.box.length_x / nx == pytest.approx(40.0 / 80)
    assert (job.solve.coarse.nt, job.solve.coarse.nx) == (nt // 2, nx // 2)
    assert (first.growth, last.growth) == (1.0, 4.0)


def test_refinement_keeps_box_and_coarse_lattice(tmp_path: Path) -> None:
    study = read(tmp_path, 'kind = "refinement"\nranks = [1]\nfactors = [2.0, 1.0]')
    assert [p.job.lattice.nx for p in study.points] == [80, 160]
    assert {(p.job.box.length_x, p.job.solve.coarse.nx) for p in study.points} == {(40.0, 40)}


def test_nodes_are_turned_into_ranks_by_the_site(tmp_path: Path) -> None:
    study = read(tmp_path, 'kind = "strong"\nnodes = [1, 2]', ranks_per_node=4)
    assert [p.ranks for p in study.points] == [4, 8]


@pytest.mark.parametrize(
    ("section", "said"),
    [
        ('kind = "strong"\nrank = [1]', "study.rank: is not a key of [study] (did you mean 'ranks'?)"),
        ('kind = "sideways"', "study.kind"),
        ('kind = "strong"\nranks = [1]\nnodes = [1]', "give ranks or nodes, not both"),
        ('kind = "strong"\nranks = [1, 3000]', "study.ranks: must leave every rank a block"),
        ("", "study.kind"),
    ],
)
def test_a_wrong_study_is_refused_with_the_remedy(tmp_path: Path, section: str, said: str) -> None:
    with pytest.raises(InputError) as refused:
        read(tmp_path, section)
    assert said in str(refused.value)


def test_a_job_beside_the_file_is_found(tmp_path: Path) -> None:
    (tmp_path / "base.toml").write_text(JOB.replace("job.", ""))
    file = tmp_path / "strong.toml"
    file.write_text('job = "base.toml"\n[study]\nkind = "strong"\n')
    assert read_study(file).points[1].ranks == 2
    file.write_text('job = "none.toml"\n[study]\nkind = "strong"\n')
    with pytest.raises(InputError, match="existing file"):
        read_study(file)


def test_rows_count_for_the_job_they_were_measured_on_only(tmp_path: Path) -> None:
    study = read(tmp_path, 'kind = "strong"\nranks = [1, 2]\nrepeats = 2')
    point = study.points[0]
    append_rows(study.folder, [row(1, {"rest": 1.0}, digest=point.digest)] * 2)
    rows = read_rows(study.folder)
    assert is_measured(study, point, rows)
    assert not is_measured(study, study.points[1], rows)
    changed = read(tmp_path, 'kind = "strong"\nranks = [1, 2]\nrepeats = 2', JOB.replace("35.0", "36.0"))
    assert not is_measured(changed, changed.points[0], rows)


def test_larger_points_are_left_out_once_efficiency_falls_under_the_bound(tmp_path: Path) -> None:
    study = read(tmp_path, 'kind = "strong"\nranks = [1, 2, 4]\nrepeats = 1\nstop_below = 0.6')
    one, two, four = study.points
    append_rows(study.folder, [row(1, {"rest": 1.0}, digest=one.digest)])
    append_rows(study.folder, [row(2, {"rest": 0.9}, digest=two.digest)])
    assert reason_to_stop(study, two) == ""
    assert "efficiency 0.56 at 2 ranks is under stop_below" in reason_to_stop(study, four)


def test_the_projects_studies_are_read() -> None:
    files = sorted((ROOT / "scaling").glob("*.toml"))
    assert len(files) >= 4
    for file in files:
        study = read_study(file)
        assert study.points
        assert os.path.relpath(study.folder, ROOT).startswith("scaling/results")
