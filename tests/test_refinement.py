"""Carrying a field between lattices keeps every wave both of them have."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.solve.petsc import start_petsc
from lattice.solve.refine import carry, refined_lattice
from lattice.system.system import System
from tests.problems import TURN, values_of


@pytest.fixture(autouse=True)
def numpy_kernels(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


def system_on(nt: int, nx: int) -> System:
    from mpi4py import MPI

    start_petsc([])
    law = load_law("kuramoto-sivashinsky")
    values = {**values_of(law), "period": 3.0, "length_x": 22.0}
    return System(law, Lattice(nt, 1, nx), values, (), {}, MPI.COMM_SELF)


def wave(lattice: Lattice) -> Any:
    t = np.arange(lattice.nt)[:, None, None, None] / lattice.nt
    x = np.arange(lattice.nx)[None, None, :, None] / lattice.nx
    return 0.3 + np.cos(TURN * (2 * x - t) + 0.4) + 0.2 * np.sin(TURN * (5 * x + 3 * t))


@pytest.mark.parametrize("counts", [(20, 28), (12, 16), (24, 16), (10, 20), (16, 20)])
def test_waves_of_both_lattices_are_carried_exactly(counts: tuple[int, int]) -> None:
    # Finer, coarser, finer in one axis only, coarser in time only, and the same lattice.
    source, target = system_on(16, 20), system_on(*counts)
    found = carry(source, wave(source.lattice), target)
    assert found == pytest.approx(wave(target.lattice), abs=1e-13)
    source.destroy()
    target.destroy()


def test_refinement_leaves_axes_of_one_node_alone() -> None:
    steady = refined_lattice(Lattice(nt=1, ny=20, nx=30, dimensions=2, order_x=6), 1.4)
    assert steady == Lattice(nt=1, ny=28, nx=42, dimensions=2, order_x=6)
