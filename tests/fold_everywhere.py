"""Compare systems of a subspace with those of the whole lattice; rank 0 prints relative differences as JSON."""

from __future__ import annotations

import json
import sys
from typing import Any

from lattice import environment

environment.prepare()

import numpy as np
from mpi4py import MPI

from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.geometry.subspace import HalfPeriod, Subspace
from lattice.laws.catalogue import read_law
from lattice.solve.petsc import start_petsc
from lattice.system.assembly import AssembledJacobian
from lattice.system.system import System
from tests.problems import law_of, random_field, values_of

LINE = Lattice(12, 1, 44, 1, 4, 4)
SHEET = Lattice(8, 12, 16, 2, 2, 2, 2)
CASES: dict[str, tuple[str, Lattice, Subspace]] = {
    "odd": ("kuramoto-sivashinsky", LINE, Subspace(mirror_x=(-1,))),
    "odd and steady": ("kuramoto-sivashinsky", Lattice(1, 1, 44), Subspace(mirror_x=(-1,))),
    "half a length on": ("kuramoto-sivashinsky", LINE, Subspace(half_period=HalfPeriod((1,), shift_x=True))),
    "mirrored later": ("kuramoto-sivashinsky", LINE, Subspace(half_period=HalfPeriod((-1,), mirror_x=True))),
    "odd, half a length on": (
        "kuramoto-sivashinsky",
        LINE,
        Subspace(mirror_x=(-1,), half_period=HalfPeriod((1,), shift_x=True)),
    ),
    "turned": ("ginzburg-landau", LINE, Subspace(mirror_x=(1, 1), half_period=HalfPeriod((-1, -1)))),
    "even in x and y": (
        "kuramoto-sivashinsky-2d",
        SHEET,
        Subspace((1,), (1,), HalfPeriod((1,), shift_y=True)),
    ),
    "constrained": ("unforced", SHEET, Subspace(mirror_x=(-1, -1))),
    "constrained, later": ("kolmogorov", SHEET, Subspace(half_period=HalfPeriod((1, 1), shift_x=True))),
}  # fmt: skip


UNFORCED = ("om_t + psi_y*om_x - psi_x*om_y = a*lap(om)", "om + lap(psi) = 0")


class Pair:
    """A system of a subspace and one of the whole lattice, about the same random field."""

    def __init__(self, name: str, comm: Any) -> None:
        self.name, self.comm = name, comm
        law_name, lattice, subspace = CASES[name]
        own = read_law("own", UNFORCED, ("om", "psi"), {"a": 0.7}, 2)
        law = own if law_name == "unforced" else law_of(law_name)
        values = values_of(law) | {
            "drift_x": 0.0,
            "drift_y": 0.0,
            "source_om": 0.0,
            "dispersion": 0.0,
            "source_u": 0.0,
        }
        self.part = System(law, lattice, values, (), {}, comm, subspace=subspace)
        self.whole = System(law, lattice, values, (), {}, comm)
        self.law, self.lattice = law, lattice

    def field(self, seed: int) -> tuple[Any, Any]:
        """Return one random field of the subspace as unknowns of both systems."""
        field = random_field(self.law, self.lattice, seed)
        x = self.part.vector()
        self.part.store(
            x,
            self.part.project(field[self.part.whole_blocks.block.slices]).reshape(-1),
            self.border(self.part),
        )
        return x, self.unfolded(x)

    def border(self, system: System) -> Any:
        return np.zeros(len(system.unknowns))

    def unfolded(self, x: Any) -> Any:
        """Return unknowns of the part as unknowns of the whole system."""
        owned = self.part.whole_field(x)
        y = self.whole.vector()
        if self.part.whole_blocks.block != self.whole.blocks.block:
            owned = self.gathered(owned)[self.whole.blocks.block.slices]
        self.whole.store(y, np.ascontiguousarray(owned).reshape(-1), self.border(self.whole))
        return y

    def gathered(self, owned: Any) -> Any:
        whole = np.empty((*self.lattice.shape, len(self.law.components)))
        for block, part in self.comm.allgather((self.part.whole_blocks.block, owned)):
            whole[block.slices] = part
        return whole

    def difference(self, found: Any, wanted: Any) -> float:
        """Return how far unknowns of the part are from those of the whole system, scalars left out."""
        a = self.whole.field_of(self.unfolded(found))
        b = self.whole.field_of(wanted)
        return self.ratio(np.abs(a - b).max(), np.abs(b).max())

    def ratio(self, apart: float, size: float) -> float:
        """Return the largest difference over the largest value, of all ranks."""
        return float(self.comm.allreduce(float(apart), MPI.MAX) / self.comm.allreduce(float(size), MPI.MAX))

    def differences(self) -> dict[str, float]:
        (x, y), (v, w) = self.field(1), self.field(2)
        part, whole = self.part, self.whole
        a, b = part.vector(), whole.vector()
        found = {}
        for system, at in ((part, x), (whole, y)):
            system.set_reference(at)
            system.linearise(at)
        for kind in ("residual", "tangent", "adjoint"):
            first, second = (x, y) if kind == "residual" else (v, w)
            getattr(part, kind)(first, a)
            getattr(whole, kind)(second, b)
            found[kind] = self.difference(a, b)
        found["matrix"] = self.matrix(v)
        return found

    def matrix(self, v: Any) -> float:
        """Return how far the assembled Jacobian is from the tangent; gauge components are left out."""
        system = self.part
        assembled = AssembledJacobian(system.operator)
        field, product, out = (system.blocks.vector() for _ in range(3))
        system.blocks.owned(field)[...] = system.field_of(v)
        assembled.update().mult(field, product)
        system.operator.tangent(field, out)
        apart = system.blocks.owned(product) - system.blocks.owned(out)
        for component in system.operator.gauge:
            place = system.law.components.index(component)
            mean = system.operator.level_means(field, place)[:, None, None]
            apart[..., place] -= mean - 1e-7 * system.blocks.owned(field)[..., place]
        return self.ratio(np.abs(apart).max(), np.abs(system.blocks.owned(out)).max())


def main() -> None:
    """Print all differences."""
    start_petsc([])
    comm = MPI.COMM_WORLD
    found = {}
    for name in sys.argv[1:] or CASES:
        try:
            pair = Pair(name, comm)
        except InputError as error:  # too many ranks for the lattice
            assert error.key == "ranks", error
        else:
            found[name] = pair.differences()
    if comm.rank == 0:
        print(json.dumps(found, indent=1))


if __name__ == "__main__":
    main()
