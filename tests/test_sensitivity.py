"""Smallest singular values and the discretisation error to first order, against dense linear algebra."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from scipy.linalg import svdvals

from lattice.check.fourier import Fourier
from lattice.check.residuals import measure_residuals
from lattice.check.sensitivity import Inverse, discretisation_error, smallest_singular_values, start_vector
from lattice.check.subject import open_subject
from lattice.job.schema import CoarseSection, SolveSection
from tests.checking import FILM, odd_film, store, travelling_wave


def dense(system, x) -> np.ndarray:
    """Return the bordered Jacobian column by column."""
    system.linearise(x)
    columns, unit, out = [], x.duplicate(), x.duplicate()
    for k in range(x.getSize()):
        unit.set(0.0)
        unit.setValue(k, 1.0)
        unit.assemble()
        system.tangent(unit, out)
        columns.append(out.getArray().copy())
    return np.array(columns).T


@pytest.fixture(scope="module")
def subject(tmp_path_factory):
    from mpi4py import MPI

    lattice, state = odd_film(17.631043132046, 36, 28)
    path = store(tmp_path_factory.mktemp("odd") / "s.h5", FILM, lattice, state, ("period", "drift_x"))
    return open_subject(path, MPI.COMM_SELF)


@pytest.mark.parametrize("preconditioner", ["direct", "coarse"])
def test_smallest_singular_values_are_those_of_the_dense_matrix(subject, preconditioner):
    exact = np.sort(svdvals(dense(subject.system, subject.x)))
    fourier = Fourier(subject.law, subject.system.blocks, subject.owned, subject.values)
    residuals, wrong = measure_residuals(subject, fourier)
    options = SolveSection(preconditioner=preconditioner, coarse=CoarseSection(nt=24, nx=18))
    inverse = Inverse(subject, options, lambda text: None)
    correction = discretisation_error(subject, inverse, wrong)
    start = start_vector(subject, correction.owned)
    found = smallest_singular_values(inverse, residuals.rms, start)
    if preconditioner == "direct":
        assert found.settled
        assert found.smallest[0] == pytest.approx(exact[0], rel=0.03)
    else:
        # One step of an iteration with loose solves: an upper bound, and said to be one.
        assert not found.settled
        assert 0.95 * exact[0] <= found.smallest[0] <= 3.0 * exact[0]
    assert found.error_bound >= residuals.rms / exact[0] * 0.95
    start.destroy()
    inverse.destroy()
    fourier.destroy()


@pytest.mark.parametrize("order", [2, 4, 6])
def test_the_correction_finds_the_discretisation_error_to_first_order(tmp_path, order):
    # |c| = 0.2263360073 at L = 11.5429484715: independent recomputation, see test_certificates.
    from mpi4py import MPI

    nx = {2: 64, 4: 40, 6: 32}[order]
    lattice, wave = travelling_wave(nx, 11.5429484715, 0.2263360073, order)
    subject = open_subject(store(tmp_path / "w.h5", FILM, lattice, wave, ("drift_x",)), MPI.COMM_SELF)
    fourier = Fourier(subject.law, subject.system.blocks, subject.owned, subject.values)
    _, wrong = measure_residuals(subject, fourier)
    inverse = Inverse(subject, SimpleNamespace(preconditioner="direct"), lambda text: None)
    found = discretisation_error(subject, inverse, wrong)
    error = abs(wave.values["drift_x"]) - 0.2263360073
    left = abs(found.values["drift_x"]) - 0.2263360073
    assert abs(left) < 0.1 * abs(error)
    inverse.destroy()
    fourier.destroy()
    subject.destroy()
