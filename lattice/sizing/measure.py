"""The pieces of work of a solve, timed on small lattices in one and two space dimensions.

Collective: run on as many ranks as are to be known. Every time is the best of some repeats, so that what
else the machine does counts as little as possible.
"""

from __future__ import annotations

import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.sizing.problem import Problem, problem_of
from lattice.sizing.sample import linearise_at_waves
from lattice.solve.direct import Direct
from lattice.solve.smoothers import inverse_blocks
from lattice.spectral.transform import Transform
from lattice.store.statefile import write_state
from lattice.store.statemeta import StateMeta
from lattice.system.constant_part import ConstantPart
from lattice.system.system import System

if TYPE_CHECKING:
    from mpi4py import MPI

CASES = (
    ("kuramoto-sivashinsky", (40, 1, 32)),
    ("kuramoto-sivashinsky", (160, 1, 120)),
    ("kuramoto-sivashinsky", (320, 1, 240)),
    ("film-2d", (14, 11, 11)),
    ("film-2d", (24, 18, 18)),
)
DX, DT = 0.5, 0.35
REPEATS = 3
MANY = 5
"""Calls of what is too quick to be timed alone."""
LU_FROM, LU_TO = 1000, 20_000
"""Numbers of fields whose Jacobian is factorised: larger ones take too long for a calibration."""


@dataclass(frozen=True)
class Sample:
    """One piece of work that was timed: its name (as in `Speeds`), amount, seconds, operations of an LU."""

    name: str
    amount: float
    seconds: float
    flops: float = 0.0


def measure(comm: MPI.Intracomm) -> list[Sample]:
    """Return all samples on the ranks of a communicator. Collective."""
    samples: list[Sample] = []
    for name, shape in CASES:
        samples += _measure_case(name, shape, comm)
    return samples


def _measure_case(name: str, shape: tuple[int, int, int], comm: MPI.Intracomm) -> list[Sample]:
    law = load_law(name)
    lattice = Lattice(*shape, dimensions=law.dimensions)
    axes = "xy"[: law.dimensions]
    values = {"period": shape[0] * DT, "length_x": shape[2] * DX, **law.defaults}
    values |= {"length_y": shape[1] * DX} if law.dimensions == 2 else {}
    values |= dict.fromkeys([f"drift_{a}" for a in axes] + [f"source_{c}" for c in law.components], 0.0)
    free = ["period", *(f"drift_{a}" for a in axes)]
    system = System(law, lattice, values, free, {}, comm)
    problem = problem_of(law, lattice, free, values)
    x = system.vector()
    linearise_at_waves(system, x)
    case = _Case(system, problem, x, comm)
    samples = [*case.products(), *case.transforms(), case.written(values)]
    if LU_FROM <= problem.numbers <= LU_TO:
        samples += case.factorised()
    x.destroy()
    system.destroy()
    return samples


class _Case:
    """One system whose work is timed."""

    def __init__(self, system: System, problem: Problem, x: Any, comm: MPI.Intracomm) -> None:
        self.system, self.problem, self.x, self.comm = system, problem, x, comm
        self.owned = problem.owned(comm.size)

    def _best(self, work: Callable[[], object], repeats: int = REPEATS) -> float:
        """Return the least seconds of a call, of the slowest rank."""
        from mpi4py import MPI

        best = float("inf")
        for _ in range(repeats):
            self.comm.Barrier()
            began = time.perf_counter()
            work()
            best = min(best, self.comm.allreduce(time.perf_counter() - began, op=MPI.MAX))
        return best

    def products(self) -> list[Sample]:
        """Time products with the Jacobian and vector operations."""
        system, y = self.system, self.system.vector()
        system.tangent(self.x, y)  # builds the kernel

        def products() -> None:
            for _ in range(MANY):
                system.tangent(self.x, y)

        def vectors() -> None:
            for _ in range(MANY):
                y.axpy(1e-9 * self.x.dot(y), self.x)

        tangent, vector = self._best(products) / MANY, self._best(vectors) / MANY
        y.destroy()
        operations = self.owned / self.problem.components * self.problem.flops_per_node
        return [Sample("tangent", operations, tangent), Sample("vector", self.owned, vector)]

    def transforms(self) -> list[Sample]:
        """Time a Fourier transform and back, and the constant part's symbol and inverse."""
        Transform(self.system.blocks).destroy()  # the first one loads the library
        self.comm.Barrier()
        began = time.perf_counter()
        transform = Transform(self.system.blocks)
        planned = self.comm.allreduce(time.perf_counter() - began) / self.comm.size
        constant = ConstantPart(self.system.operator)
        field = self.system.blocks.vector()

        def both() -> None:
            transform.backward(transform.forward(field), field)

        def symbols() -> None:
            constant.update()
            inverse_blocks(constant.symbol(transform, 1.0))

        both()
        pair, symbol = self._best(both), self._best(symbols, 2)
        field.destroy()
        transform.destroy()
        return [
            Sample("transform", self.owned, pair),
            Sample("plan", self.owned, planned),
            Sample("symbol", self.owned, symbol),
        ]

    def factorised(self) -> list[Sample]:
        """Time assembly, analysis, factorisation and solution of the Jacobian."""
        system, direct = self.system, Direct(self.system)
        first = self._best(direct.update, 1)  # analysis included
        assembly = self._best(direct._assembled.update)
        again = self._best(direct.update, 2)
        field, out = system.blocks.vector(), system.blocks.vector()
        system.operator.copy_point(field)
        solve = self._best(lambda: direct.apply(field, out))
        factor = direct._lu._ksp.getPC().getFactorMatrix()
        entries = float(factor.getMumpsInfog(29) if direct._lu.package == "mumps" else 0)
        flops = float(factor.getMumpsRinfog(3)) if entries else 0.0
        for item in (field, out, direct):
            item.destroy()
        if not entries:
            return []
        nonzeros = self.problem.nonzeros
        return [
            Sample("assembly", nonzeros / self.comm.size, assembly),
            Sample("factor", entries, max(again - assembly, 1e-5), flops),
            Sample("analysis", nonzeros, max(first - again, 1e-5)),
            Sample("solve", entries, solve),
        ]

    def written(self, values: dict[str, float]) -> Sample:
        """Time a state file."""
        system = self.system
        meta = StateMeta.of_law(
            system.law,
            system.lattice,
            system.values_of(self.x),
            free=tuple(u.name for u in system.unknowns),
            residual_rms=1.0,
            residual_max=1.0,
            mean_square=1.0,
            outcome="running",
            history=(),
            versions={},
            job_text="",
            classification={},
            progress={},
        )
        folder = self.comm.bcast(tempfile.mkdtemp(prefix="lattice-size-") if self.comm.rank == 0 else None)
        path = Path(folder) / "state.h5"
        owned, block = system.field_of(self.x), system.blocks.block
        seconds = self._best(lambda: write_state(path, owned, block, meta, self.comm))
        if self.comm.rank == 0:
            path.unlink(missing_ok=True)
            path.parent.rmdir()
        return Sample("write", self.problem.numbers, seconds)


def measure_march() -> list[Sample]:
    """Return samples of one step of the march, on one rank."""
    import numpy as np

    from lattice.starts.noise import random_spectrum
    from lattice.starts.stepper import Stepper

    samples = []
    for name, shape in (
        ("kuramoto-sivashinsky", (1, 64)),
        ("kuramoto-sivashinsky", (1, 512)),
        ("film-2d", (18, 18)),
        ("film-2d", (64, 64)),
    ):
        law = load_law(name)
        values = {**law.defaults, "length_x": shape[1] * DX, "length_y": shape[0] * DX}
        stepper = Stepper(law, shape, (shape[0] * DX, shape[1] * DX), values, 0.05)
        spectrum = random_spectrum(stepper.operator, 1, 0.1)
        best = float("inf")
        for _ in range(REPEATS):
            began = time.perf_counter()
            for _ in range(20):
                spectrum = stepper.step(spectrum)
            best = min(best, (time.perf_counter() - began) / 20)
        assert np.isfinite(spectrum).all()
        samples.append(Sample("march", float(np.prod(shape) * len(law.components)), best))
    return samples
