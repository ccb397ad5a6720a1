"""Solves in invariant subspaces: the same states at a half or a quarter of the unknowns.

The periodic film states of test_validated_states, whose existence among odd functions has been proved, are odd
and repeat half a period later, half a length on. Periods are an independent recomputation, not published.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice.classify.centring import centred
from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.geometry.subspace import HalfPeriod, Subspace
from lattice.job.reader import load_job
from lattice.job.schema import SolveSection
from lattice.laws.catalogue import load_law
from lattice.solve.newton import Newton
from lattice.solve.petsc import start_petsc
from lattice.solve.registry import make_preconditioner
from lattice.solve.stop import StopFlag
from lattice.starts.stepper import Stepper
from lattice.system.system import System
from tests.mpi import ROOT, run_ranks
from tests.solving import Real, limit, nodes, observed_order, residual, scalars
from tests.test_validated_states import COUNTS, KNOWN, LAW, Known, first_return, march

ODD = Subspace(mirror_x=(-1,))
LATER = Subspace(half_period=HalfPeriod((1,), shift_x=True))
BOTH = Subspace(mirror_x=(-1,), half_period=LATER.half_period)
# u(x) -> u(x + L/2) = -u(-x - L/2): about another mirror, L/4 away, half a period is a reflection.
MIRRORED = Subspace(half_period=HalfPeriod((-1,), mirror_x=True))


@dataclass(frozen=True)
class Found:
    """A solve in a subspace: the whole field, the period, how many numbers were solved for, the free scalars."""

    field: Real
    period: float
    numbers: int
    free: tuple[str, ...]


@cache
def window(known: Known) -> tuple[Stepper, Real, float]:
    """Return a march on the odd attractor, with the time to its return."""
    stepper, spectrum = march(known)
    return stepper, spectrum, first_return(stepper, spectrum)


@cache
def solved(known: Known, nt: int, subspace: Subspace | None) -> Found:
    from mpi4py import MPI

    start_petsc([])
    stepper, spectrum, period = window(known)
    nx = nt * 7 // 9
    moments = [stepper.to_spectrum(field) for field in stepper.march(spectrum, nodes(nt, period))]
    start = np.array([stepper.to_field(moment, (1, nx)) for moment in moments])
    law, lattice = load_law(LAW), Lattice(nt, 1, nx, order_t=6, order_x=6)
    held = subspace if subspace is not None and subspace.mirrors("x") else None
    free = ("period",) if held else ("period", "drift_x")
    values = scalars(law, length_x=known.length, period=period)
    system = System(law, lattice, values, free, {}, MPI.COMM_SELF, subspace=subspace)
    # Where the state lies between the nodes changes the lattice's period by 3e-7: always the same place.
    start, apart = centred(law, held or ODD, start, system.whole_blocks)
    assert apart < 0.02  # the march has come that close to the state
    options = SolveSection(residual_rms=1e-11)
    made = make_preconditioner("auto", system, options)
    newton = Newton(system, made, options, StopFlag(MPI.COMM_SELF), lambda step, x: None)
    x = system.vector()
    system.pack(system.project(start), {}, x)
    system.set_reference(x)
    assert newton.solve(x).converged
    names = tuple(u.name for u in system.unknowns)
    found = Found(system.whole_field(x), system.values_of(x)["period"], system.blocks.size, names)
    newton.destroy()
    x.destroy()
    system.destroy()
    return found


@pytest.mark.parametrize("known", KNOWN, ids=lambda known: f"nu={known.nu}")
def test_odd_states_have_their_periods_at_half_the_unknowns(known):
    found = [solved(known, nt, ODD) for nt in COUNTS]
    assert [f.numbers for f in found] == [nt * (nt * 7 // 9) // 2 for nt in COUNTS]
    assert found[0].free == ("period",)  # no drift, no source: both break the symmetry
    periods = [f.period for f in found]
    # As on the whole lattice: errors of sixth order, and the limit is the recomputed period.
    assert observed_order(COUNTS, [p - known.period for p in periods]) == pytest.approx(6.0, abs=0.3)
    assert limit(COUNTS, periods, 6) == pytest.approx(known.period, abs=1e-5)


@pytest.mark.parametrize(
    ("subspace", "share"),
    [(ODD, 2), (LATER, 2), (BOTH, 4), (MIRRORED, 2)],
    ids=["odd", "later", "both", "mirrored"],
)
def test_state_of_a_subspace_is_the_one_of_the_whole_lattice(subspace, share):
    known, nt = KNOWN[1], COUNTS[0]
    whole, found = solved(known, nt, None), solved(known, nt, subspace)
    assert found.numbers * share == whole.numbers
    # The same equations: Newton's last residual, 1e-11, moves the period by less than that over the slowest
    # rate, 0.01.
    assert found.period == pytest.approx(whole.period, abs=1e-9)
    # The unfolded field solves the equations of the whole lattice.
    left = residual(
        LAW,
        Lattice(nt, 1, nt * 7 // 9, order_t=6, order_x=6),
        found.field,
        length_x=known.length,
        period=found.period,
    )
    assert np.sqrt((left**2).mean()) < 1e-10


def test_fields_have_the_symmetries_exactly():
    u = solved(KNOWN[1], COUNTS[0], BOTH).field[:, 0, :, 0]
    nt, nx = u.shape
    assert np.array_equal(u[:, ::-1], -u)  # the mirror is half a node before the first
    assert np.array_equal(np.roll(u, nt // 2, axis=0), np.roll(u, nx // 2, axis=1))


@pytest.mark.parametrize(
    "ranks", [1, 3, pytest.param(2, marks=pytest.mark.long), pytest.param(5, marks=pytest.mark.long)]
)
def test_folded_operators_are_the_whole_ones_on_symmetric_fields(ranks):
    # Reference: residual, tangent, adjoint on the whole lattice about unfolded random fields; NumPy slices.
    done = run_ranks(ranks, Path(ROOT, "tests", "fold_everywhere.py"), env={"LATTICE_KERNELS": "numpy"})
    found: dict[str, dict[str, float]] = json.loads(done.stdout)
    assert len(found) == 9 if ranks == 1 else len(found) >= 3
    worst = {f"{case}: {kind}": d for case, kinds in found.items() for kind, d in kinds.items() if d > 1e-13}
    assert not worst


def test_a_subspace_the_law_lacks_is_refused(tmp_path):
    from mpi4py import MPI

    start_petsc([])
    law = load_law(LAW)
    values = scalars(law, length_x=17.0, period=10.0, dispersion=0.5)
    with pytest.raises(InputError, match="x -> -x"):  # u_xxx is even where the others are odd
        System(law, Lattice(16, 1, 24), values, ("period",), {}, MPI.COMM_SELF, subspace=ODD)
    with pytest.raises(InputError, match=r"signs \[-1\]"):
        even = Subspace(mirror_x=(1,))
        System(
            law,
            Lattice(16, 1, 24),
            {**values, "dispersion": 0.0},
            ("period",),
            {},
            MPI.COMM_SELF,
            subspace=even,
        )


JOB = """
[law]
name = "kuramoto-sivashinsky"
[box]
period = 17.7
length_x = 17.6
[lattice]
nt = 36
nx = 28
[solve.subspace]
mirror_x = "law"
half_period = ["shift_x"]
[start]
kind = "march"
"""


def job(tmp_path: Path, *overrides: str) -> Any:
    path = tmp_path / "odd.toml"
    path.write_text(JOB)
    return load_job(path, list(overrides))


def test_a_job_names_its_subspace_in_words(tmp_path):
    found = job(tmp_path)
    assert found.make_subspace() == BOTH
    assert found.solve.free == ("period",)


@pytest.mark.parametrize(
    ("override", "message"),
    [
        ("lattice.nx=27", "must be even"),
        ("lattice.nt=35", "must be even"),
        ("box.drift_x=0.5", "drift_x must be 0"),
        ("solve.preconditioner=coarse", "must be 'direct'"),
        ("solve.free=['period', 'drift_x']", "holds it at 0"),
        ("solve.subspace.mirror_x=even", r"signs \[-1\]"),
        ("solve.subspace.half_period=['shift_y']", "no such axis"),
        ("solve.mean={u = 0.5}", "must be 0"),
    ],
)
def test_a_job_that_does_not_fit_its_subspace_is_refused(tmp_path, override, message):
    with pytest.raises(InputError, match=message):
        job(tmp_path, override)
