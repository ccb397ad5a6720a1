"""Sizing: counts are those of the matrices themselves, factors grow as theory says, figures are never quiet."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from mpi4py import MPI

from lattice.batch.site import Site
from lattice.cli.main import main
from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.job.reader import load_job
from lattice.laws.catalogue import load_law
from lattice.sizing import analysis
from lattice.sizing.calibration import (
    LINES,
    Calibration,
    Line,
    Speeds,
    calibration_path,
    load_calibration,
    save_calibration,
)
from lattice.sizing.estimate import estimate
from lattice.sizing.factors import growth
from lattice.sizing.figures import Assumptions, Estimate
from lattice.sizing.fit import fit_speeds
from lattice.sizing.layouts import candidates, cheapest, compare, lay_out, warnings_of
from lattice.sizing.measure import Sample
from lattice.sizing.problem import problem_of
from lattice.sizing.sample import linearise_at_waves
from lattice.solve.direct import Direct
from lattice.solve.petsc import start_petsc
from lattice.system.system import System
from tests.batch import ROOT
from tests.solving import scalars

FILM, SHEET = "kuramoto-sivashinsky", "film-2d"
JOB = ROOT / "jobs" / "film-first.toml"
NEWTON = Assumptions(stages=("newton",))


@pytest.fixture(autouse=True)
def numpy_kernels(monkeypatch: pytest.MonkeyPatch) -> None:
    # That compiled loops equal these is shown in test_kernels.
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


def system_of(name: str, lattice: Lattice) -> tuple[System, dict[str, float], list[str]]:
    law = load_law(name)
    lengths = {f"length_{a}": 0.5 * getattr(lattice, f"n{a}") for a in "xy"[: law.dimensions]}
    values = scalars(law, **{**lengths, "period": 0.35 * lattice.nt})
    start_petsc([])
    free = ["period", "drift_x"]
    return System(law, lattice, values, free, {}, MPI.COMM_WORLD), values, free


@pytest.mark.parametrize(
    ("name", "lattice"), [(FILM, Lattice(20, 1, 24)), (SHEET, Lattice(10, 8, 9, dimensions=2))]
)
def test_counts_and_factors_are_those_of_the_matrix(name: str, lattice: Lattice) -> None:
    """The analysis against PETSc's matrix and MUMPS's factorisation of it."""
    system, values, free = system_of(name, lattice)
    problem = problem_of(system.law, lattice, free, values)
    x = system.vector()
    linearise_at_waves(system, x)
    direct = Direct(system)
    direct.update()
    factor = direct._lu._ksp.getPC().getFactorMatrix()
    found = analysis.analyse(system.law, lattice, values, free, MPI.COMM_WORLD)
    assert problem.numbers == system.blocks.size == found.unknowns
    assert problem.scalars == len(system.unknowns)
    assert problem.nonzeros == found.nonzeros
    assert problem.halo == system.operator.scheme.halo_x
    # INFOG(29): entries in the factors, INFOG(22): megabytes used, of the factorisation itself.
    assert found.entries == pytest.approx(factor.getMumpsInfog(29), rel=0.02)
    assert factor.getMumpsInfog(22) <= found.megabytes <= 1.3 * factor.getMumpsInfog(22) + 2
    for item in (direct, x, system):
        item.destroy()


def test_factors_of_a_large_lattice_are_foretold_from_smaller_ones() -> None:
    """Growth of nested dissection (George 1973) between analyses, against the analysis of the larger lattice."""
    law = load_law(FILM)
    start_petsc([])
    values = scalars(law, period=20.0, length_x=20.0)

    def analysed(n: int) -> analysis.Factors:
        return analysis.analyse(law, Lattice(n, 1, n), values, ["period"], MPI.COMM_WORLD)

    small, middle, large = (analysed(n) for n in (36, 72, 144))
    found = growth(small, middle, large.unknowns, 2)
    # The ordering that is chosen changes with the size; its factors scatter by as much.
    assert found.entries == pytest.approx(large.entries, rel=0.2)
    assert found.flops == pytest.approx(large.flops, rel=0.4)
    assert found.megabytes > 0.9 * large.megabytes


def test_a_lattice_too_large_to_analyse_is_cut_down(monkeypatch: pytest.MonkeyPatch) -> None:
    law = load_law(FILM)
    start_petsc([])
    values, lattice = scalars(law, period=20.0, length_x=20.0), Lattice(96, 1, 64)
    whole = analysis.analyse(law, lattice, values, ["period"], MPI.COMM_WORLD)
    monkeypatch.setattr(analysis, "MOST_NONZEROS", 60_000)
    grown = analysis.analyse(law, lattice, values, ["period"], MPI.COMM_WORLD)
    assert grown.origin == "growth"
    assert 0.9 <= grown.megabytes / whole.megabytes <= 1.4


def test_lines_are_found_again_from_samples() -> None:
    lines = {name: (1e-4 * (k + 1), 1e-8 * (k + 1)) for k, name in enumerate(LINES)}
    samples = [Sample(name, n, a + b * n) for name, (a, b) in lines.items() for n in (1e3, 1e4, 1e5)]
    samples = [
        replace(s, flops=s.amount**1.5, seconds=s.seconds + 1e-10 * s.amount**1.5)
        if s.name == "factor"
        else s
        for s in samples
    ]
    speeds, error = fit_speeds(1, (2.0, 3.0), samples)
    assert error < 1e-6
    assert speeds.flop == pytest.approx(1e-10, rel=1e-4)
    found = [getattr(speeds, name) for name in LINES]
    np.testing.assert_allclose([[f.constant, f.each] for f in found], list(lines.values()), rtol=1e-4)


def calibration(*counts: int) -> Calibration:
    """Return a made-up machine on which twice the ranks factorise 1.5 times as fast."""
    speeds = [
        Speeds(n, 2.0, 3.0, flop=1e-10 / n**0.585, **{name: Line(1e-4, 1e-8) for name in LINES})
        for n in counts
    ]
    return Calibration(
        "made-up", "none", 4, "2026-01-01T00:00:00+00:00", {}, tuple(speeds), Line(1e-4, 1e-8), 240.0, 60.0, 0.1, 50.0
    )  # fmt: skip


def test_a_calibration_is_kept_and_a_damaged_one_refused(tmp_path: Path) -> None:
    path = calibration_path("a/b", {"XDG_CONFIG_HOME": str(tmp_path)})
    assert path.parent == tmp_path / "lattice" / "calibrations"
    assert load_calibration(path) is None
    save_calibration(calibration(1, 2), path)
    assert load_calibration(path) == calibration(1, 2)
    path.write_text(path.read_text().replace('"schema": 1', '"schema": 0'))
    with pytest.raises(InputError, match="make it anew with `lattice size --calibrate`"):
        load_calibration(path)


def test_more_ranks_than_measured_follow_the_measured_gain() -> None:
    speeds = calibration(1, 2).on(8)
    assert speeds.flop == pytest.approx(1e-10 / 8**0.585, rel=1e-3)
    assert speeds.tangent.each == 1e-8  # its amount is that of one rank
    assert speeds.tangent.constant > 1e-4


def sized(ranks: int, counts: tuple[int, ...] = (1, 2), **values: str) -> Estimate:
    job = load_job(JOB, [f"{key}={value}" for key, value in values.items()])
    return estimate(job, ranks, calibration(*counts), None, NEWTON)


def test_without_a_calibration_there_is_memory_only() -> None:
    found = estimate(load_job(JOB), 2, None, None, NEWTON)
    assert found.seconds is found.core_hours is found.longest_step is None
    assert found.rank_mb == pytest.approx(sum(found.legs[0].memory_mb.values()))
    assert set(found.legs[0].memory_mb) >= {"program", "fields", "Krylov basis", "matrix", "LU"}


def test_every_stage_counts_and_assumptions_are_said() -> None:
    job = load_job(JOB)
    found = estimate(job, 1, None, None, Assumptions(steps=7, stages=("newton", "refine")))
    assert [leg.nodes for leg in found.legs] == [(84, 1, 64), (118, 1, 90), (166, 1, 126)]
    assert found.rank_mb == found.legs[-1].rank_mb
    assert any(text.startswith("newton: 7 steps") for text in found.assumptions)
    assert len(estimate(job, 1, None, None, NEWTON).legs) == 1


def test_site_limits_are_held_against_the_figures() -> None:
    tight = Site(scheduler="slurm", cores_per_node=4, memory_per_node_gb=0.6, whole_nodes=True, time=3600)
    layouts = compare(sized, candidates(6, tight), tight, None)
    assert [layout.estimate.ranks for layout in layouts] == [1, 2, 4]
    assert [layout.fits for layout in layouts] == [True, True, False]
    assert "ranks on a node need" in layouts[-1].obstacles[0].replace("rank(s)", "ranks")
    best = cheapest(layouts)
    # Whole nodes are paid for: two ranks on one cost less than one.
    assert best is not None
    assert best.estimate.ranks == 2
    assert best.core_hours == pytest.approx(4 * best.estimate.seconds / 3600)


def test_an_allocation_is_not_wasted_in_silence() -> None:
    site = Site(scheduler="slurm", cores_per_node=64, time=3600, queues={"test": {"max_nodes": 1}})
    machine = calibration(1, 2)

    def said(ranks: int, seconds: int) -> str:
        layout = lay_out(sized(ranks), site, None)
        half = sized(ranks // 2) if ranks > 1 else None
        return " ".join(warnings_of(layout, half, site, seconds, machine))

    assert said(1, 3600) == ""
    assert "too short for one step" in said(1, 4)
    assert "more ranks than useful: 1344 unknowns a rank" in said(4, 3600)
    assert "extrapolated from 1, 2" in said(4, 3600)
    small = site.model_copy(update={"cores_per_node": 2})
    assert "queue test takes at most 1 nodes" in " ".join(lay_out(sized(4), small, None).obstacles)


def test_the_command_tells_what_it_does_not_know(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("XDG_CONFIG_HOME", str(tmp_path))
    command = ["size", str(JOB), "--quick", "--ranks", "2", "--stages", "newton"]
    assert main(command) == 0
    text = capsys.readouterr().out
    assert "no calibration of this machine: memory only" in text
    assert "size by growth laws alone" in text
    save_calibration(calibration(1), calibration_path())
    assert main([*command, "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["calibration"]["host"] == "made-up"
    assert record["layouts"][0]["estimate"]["seconds"] > 0
    assert any("extrapolated" in warning for warning in record["warnings"])
    assert main(["size", str(JOB), "--quick", "--ranks", "5000"]) == 2
    assert "the largest count that works" in capsys.readouterr().err
