"""Run on each rank: blocks, products and solves, compared with the whole arrays; prints one JSON object.

Arguments: a folder with `film.npy`, the start of the periodic solve, in which solved states are left.
"""

from __future__ import annotations

import json
import os
import sys
from pathlib import Path
from typing import Any

from lattice import environment

environment.prepare()

import numpy as np
from mpi4py import MPI

from lattice.errors import LatticeError
from lattice.geometry.blocks import Blocks
from lattice.geometry.lattice import Lattice
from lattice.job.schema import PatchesSection, SolveSection
from lattice.solve.newton import Newton
from lattice.solve.petsc import start_petsc
from lattice.solve.registry import make_preconditioner
from lattice.solve.stop import StopFlag
from lattice.system.assembly import GAUGE_PIN, AssembledJacobian
from lattice.system.system import System
from tests.compute_cases import PRODUCTS, SOLVES
from tests.problems import (
    Array,
    evaluate,
    free_of,
    law_of,
    random_direction,
    random_field,
    random_unknowns,
    values_of,
)

COMM = MPI.COMM_WORLD
LATTICES = {
    "time and x": (Lattice(17, 1, 16), 3),
    "x": (Lattice(1, 1, 23), 3),
    "time, y and x": (Lattice(20, 9, 13, 2), 4),
    "y and x": (Lattice(1, 21, 17, 2), 4),
    "no wider than the halo": (Lattice(20, 4, 4, 2), 4),
}


def worst(number: float) -> float:
    """Return the largest number of all ranks."""
    return float(COMM.allreduce(number, op=MPI.MAX))


def check_blocks() -> dict[str, Any]:
    """Return for every lattice how often each node is owned, and the errors of the halo and coordinates."""
    found: dict[str, Any] = {}
    for name, (lattice, halo) in LATTICES.items():
        blocks = Blocks(lattice, 2, halo, COMM)
        whole = np.random.default_rng(1).normal(size=(*lattice.shape, 2))
        counts = np.zeros(lattice.shape, dtype=int)
        for block in COMM.allgather(blocks.block):
            counts[block.slices] += 1
        field, padded = blocks.vector(), blocks.padded_vector()
        blocks.owned(field)[...] = whole[blocks.block.slices]
        blocks.exchange(field, padded)
        wide = np.pad(whole, [*((h, h) for h in blocks.halos), (0, 0)], mode="wrap")
        mine = tuple(
            slice(s.start, s.stop + 2 * h) for s, h in zip(blocks.block.slices, blocks.halos, strict=True)
        )
        xs = (np.arange(mine[2].start, mine[2].stop) - blocks.halos[2]) * (3.0 / lattice.nx)
        found[name] = {
            "owned": [int(counts.min()), int(counts.max())],
            "ranks": int(np.prod(blocks.grid)),
            "halo": worst(float(np.abs(blocks.padded(padded) - wide[mine]).max())),
            "coordinates": worst(float(np.abs(blocks.coordinates(3.0, 2) - xs).max())),
            "narrowest": -int(
                worst(-min(n for n, h in zip(blocks.block.shape, blocks.halos, strict=True) if h))
            ),
        }
        for vector in (field, padded):
            vector.destroy()
        blocks.destroy()
    return found


def check_products(name: str, lattice: Lattice) -> dict[str, float]:
    """Return the errors of residual, tangent, adjoint and matrix against the whole arrays on one rank."""
    law = law_of(name)
    values = values_of(law)
    system = System(law, lattice, values, free_of(law, lattice, usual=True), {}, COMM)
    mine = system.blocks.block.slices
    u, v, w = (random_field(law, lattice, seed) for seed in (1, 2, 3))
    wanted = {
        "residual": evaluate(name, "residual", lattice, values, u),
        "tangent": evaluate(name, "tangent", lattice, values, u, v),
        "adjoint": evaluate(name, "adjoint", lattice, values, u, w),
    }
    for kind, field in (("residual", u), ("tangent", v), ("adjoint", w)):
        for component in law.symmetries.gauge:
            c = law.components.index(component)
            wanted[kind][..., c] -= field[..., c].mean(axis=(1, 2), keepdims=True)
    operator = system.operator
    x, y = system.blocks.vector(), system.blocks.vector()
    found = {"levels on more ranks than one": float(system.blocks.grid[0] < COMM.size)}

    def compare(kind: str, whole: Array) -> None:
        error = float(np.abs(system.blocks.owned(y) - whole[mine]).max())
        found[kind] = worst(error) / float(np.abs(whole).max())

    system.blocks.owned(x)[...] = u[mine]
    operator.residual(x, values, y)
    compare("residual", wanted["residual"])
    operator.linearise(x, values)
    system.blocks.owned(x)[...] = v[mine]
    operator.tangent(x, y)
    compare("tangent", wanted["tangent"])
    assembled = AssembledJacobian(operator)
    assembled.update().mult(x, y)
    for component in law.symmetries.gauge:
        c = law.components.index(component)
        pinned = v[..., c].mean(axis=(1, 2), keepdims=True) - GAUGE_PIN * v[..., c]
        wanted["tangent"][..., c] += pinned
    compare("matrix", wanted["tangent"])
    system.blocks.owned(x)[...] = w[mine]
    operator.adjoint(x, y)
    compare("adjoint", wanted["adjoint"])
    assembled.destroy()
    found |= check_borders(system)
    for vector in (x, y):
        vector.destroy()
    system.destroy()
    return found


def check_borders(system: System) -> dict[str, float]:
    """Return how far bordered products are from each other's transposes, and their borders' numbers."""
    x, v, w = random_unknowns(system, 4), random_direction(system, 5), random_direction(system, 6)
    along, back = system.vector(), system.vector()
    system.set_reference(x)
    system.linearise(x)
    system.tangent(v, along)
    system.adjoint(w, back)
    size = w.norm() * along.norm() + back.norm() * v.norm()
    found = {"bordered adjoint": abs(w.dot(along) - back.dot(v)) / size}
    for kind, vector in (("row", along), ("column", back)):
        border = system.border_of(vector)
        spread = np.abs(np.array(COMM.allgather(border)) - border).max()
        found[f"{kind} spread"] = worst(float(spread))
        found |= {f"{kind} {k}": float(number) for k, number in enumerate(border)}
    for vector in (x, v, w, along, back):
        vector.destroy()
    return found


def solve(folder: Path, case: str, preconditioner: str) -> dict[str, Any]:
    """Solve one of two cases and leave the whole state in the folder."""
    law_name, lattice, free, given, start = CASES[case](folder)
    law = law_of(law_name)
    # Kernels of another order, for a lattice as small as this one, are not worth compiling.
    os.environ["LATTICE_KERNELS"] = "numpy" if case == "shear" else "numba"
    options = SolveSection(
        residual_rms=1e-12,
        preconditioner=preconditioner,
        linear_rtol=1e-6,
        patches=PatchesSection(nt=lattice.nt // 2, overlap=lattice.nt // 8 + 1),
    )
    system = System(law, lattice, {**values_of(law), **given}, free, {}, COMM)
    made = make_preconditioner(preconditioner, system, options)
    newton = Newton(system, made, options, StopFlag(COMM), lambda step, x: None)
    x = system.vector()
    system.pack(start[system.blocks.block.slices], {}, x)
    system.set_reference(x)
    result = newton.solve(x)
    transposed = adjoint_error(system, made)
    gathered = COMM.gather((system.blocks.block.slices, system.field_of(x)))
    values = system.values_of(x)
    if COMM.rank == 0:
        whole = np.full_like(start, np.nan)
        for slices, owned in gathered or []:
            whole[slices] = owned
        np.save(folder / f"{case}-{preconditioner}-{COMM.size}.npy", whole)
    newton.destroy()
    x.destroy()
    system.destroy()
    return {
        "converged": result.converged,
        "adjoint": transposed,
        "reason": result.reason,
        "residuals": [step.residual_rms for step in result.steps],
        "iterations": [step.linear_iterations for step in result.steps],
        "values": values,
        "alike": len({(len(result.steps), str(values)) for values in COMM.allgather(values)}) == 1,
    }


def adjoint_error(system: System, made: Any) -> float:
    """Return how far <w, P r> is from <P^T w, r>, relative to the norms."""
    r, w = random_direction(system, 8), random_direction(system, 9)
    along, back = system.vector(), system.vector()
    made.apply(r, along)
    made.apply_transpose(w, back)
    error = abs(w.dot(along) - back.dot(r)) / (w.norm() * along.norm() + back.norm() * r.norm())
    for vector in (r, w, along, back):
        vector.destroy()
    return float(error)


def film_case(folder: Path) -> tuple[str, Lattice, tuple[str, ...], dict[str, float], Array]:
    start = np.load(folder / "film.npy")
    given = {"period": 17.67, "length_x": 17.631, "drift_x": 0.0, "source_u": 0.0, "dispersion": 0.0}
    lattice = Lattice(start.shape[0], 1, start.shape[2])
    return "kuramoto-sivashinsky", lattice, ("period", "drift_x"), given, start


def shear_case(folder: Path) -> tuple[str, Lattice, tuple[str, ...], dict[str, float], Array]:
    lattice = Lattice(10, 6, 7, 2, 2, 2, 2)
    start = random_field(law_of("kolmogorov"), lattice, 8, 0.1)
    given = {"Re": 3.0, "n": 1.0, "length_x": 4.0, "period": 4.0, "drift_x": 0.0, "source_om": 0.0}
    return "kolmogorov", lattice, (), given, start


CASES = {"film": film_case, "shear": shear_case}


def refusal() -> str:
    """Return what a lattice that these ranks cannot share is refused with."""
    try:
        Blocks(Lattice(4, 1, 5), 1, 3, COMM).destroy()
    except LatticeError as error:
        return str(error)
    return ""


def main(folder: Path) -> None:
    start_petsc([])
    found = {
        "blocks": check_blocks(),
        "refusal": refusal(),
        "products": {case: check_products(*problem) for case, problem in PRODUCTS.items()},
        "solves": {name: solve(folder, *name.split()) for name in SOLVES},
    }
    if COMM.rank == 0:
        print(json.dumps(found))


main(Path(sys.argv[1]))
