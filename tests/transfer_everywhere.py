"""Run on each rank: transforms, transfers and two-level preconditioners; prints one JSON object.

Arguments: a folder in which the preconditioned vectors are left; "levels" if there are to be any.
"""

from __future__ import annotations

import json
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
from lattice.solve.petsc import start_petsc
from lattice.spectral.transfer import Transfer
from lattice.spectral.transform import Transform
from tests.levels import random_system, two_level
from tests.problems import TURN, Array, random_direction

COMM = MPI.COMM_WORLD
EVOLVING = (True, False)
# Fine and coarse nodes: ratios that are no integers, uneven parts, even counts (which have Nyquist modes).
PAIRS = {
    "time and x": (Lattice(24, 1, 23), Lattice(15, 1, 14)),
    "time, y and x": (Lattice(13, 9, 14, 2), Lattice(10, 8, 9, 2)),
    "blocks along y": (Lattice(8, 14, 10, 2), Lattice(6, 10, 10, 2)),
    "blocks along x": (Lattice(6, 1, 60), Lattice(5, 1, 32)),
    "y and x": (Lattice(1, 21, 17, 2), Lattice(1, 12, 13, 2)),
}
LEVELS = {
    "kuramoto-sivashinsky": (Lattice(21, 1, 14, 1, 4, 2), Lattice(15, 1, 11, 1, 2, 4)),
    "kolmogorov": (Lattice(20, 8, 10, 2, 2, 2, 2), Lattice(11, 6, 7, 2, 2, 2, 2)),
}


def worst(number: float) -> float:
    """Return the largest number of all ranks."""
    return float(COMM.allreduce(number, op=MPI.MAX))


def waves(lattice: Lattice, coarse: Lattice, shift: float, component: int) -> Array:
    """Return a sum of random waves that both lattices carry, `shift` steps later in time."""
    rng = np.random.default_rng(7 + component)
    axes = [np.arange(n) / n for n in lattice.shape]
    axes[0] = (np.arange(lattice.nt) + shift) / lattice.nt
    t, y, x = np.meshgrid(*axes, indexing="ij")
    total = np.zeros(lattice.shape)
    for _ in range(12):
        m = [rng.integers(-((n - 1) // 2), (n - 1) // 2 + 1) for n in coarse.shape]
        total += rng.normal() * np.cos(TURN * (m[0] * t + m[1] * y + m[2] * x) + rng.uniform(0.0, TURN))
    return total


def band_limited(lattice: Lattice, coarse: Lattice, rows: bool) -> Array:
    """Return a whole field of both components; rows of evolving ones lie half a step early."""
    half = -0.5 if rows and lattice.nt > 1 else 0.0
    return np.stack([waves(lattice, coarse, half * e, c) for c, e in enumerate(EVOLVING)], axis=-1)


class Level:
    """A lattice's blocks and transform, and vectors filled from whole fields."""

    def __init__(self, lattice: Lattice) -> None:
        self.blocks = Blocks(lattice, len(EVOLVING), 1, COMM)
        self.transform = Transform(self.blocks)

    def vector(self, whole: Array | None = None) -> Any:
        vector = self.blocks.vector()
        if whole is not None:
            self.blocks.owned(vector)[...] = whole[self.blocks.block.slices]
        return vector

    def error(self, vector: Any, whole: Array) -> float:
        return worst(float(np.abs(self.blocks.owned(vector) - whole[self.blocks.block.slices]).max()))


def check_transform(level: Level) -> dict[str, float]:
    """Return the errors of a spectrum and of the field made from it, and whether anything was moved."""
    shape = (*level.blocks.lattice.shape, len(EVOLVING))
    whole = np.random.default_rng(1).normal(size=shape)
    axes = level.blocks.axes
    wanted = np.fft.rfftn(whole, axes=axes, norm="forward").reshape(*_halved(level), len(EVOLVING))
    field, back = level.vector(whole), level.vector()
    spectrum = level.transform.forward(field).copy()
    kept = spectrum.copy()
    level.transform.backward(spectrum, back)
    return {
        "spectrum": worst(float(np.abs(spectrum - wanted[level.transform.spectral_slices]).max())),
        "field": level.error(back, whole),
        "spectrum changed": worst(float(np.abs(spectrum - kept).max())),
        "moved": worst(float(level.transform._mover._scatter is not None)),
    }


def _halved(level: Level) -> tuple[int, ...]:
    return (*level.transform.shape[:-1], level.transform.shape[-1] // 2 + 1)


def check_transfer(fine: Lattice, coarse: Lattice) -> dict[str, float]:
    """Return the errors of restriction and prolongation, and how far they are from transposes."""
    large, small = Level(fine), Level(coarse)
    evolving = tuple(e and fine.nt > 1 for e in EVOLVING)
    transfer = Transfer(large.transform, small.transform, evolving)
    found = {f"transform {k}": v for k, v in check_transform(large).items()}
    for rows in (False, True):
        above, below = band_limited(fine, coarse, rows), band_limited(coarse, coarse, rows)
        up, down = large.vector(above), small.vector(below)
        out_up, out_down = large.vector(), small.vector()
        transfer.restrict(up, out_down, rows)
        transfer.prolong(down, out_up, rows)
        kind = "rows" if rows else "field"
        found[f"restricted {kind}"] = small.error(out_down, below)
        found[f"prolonged {kind}"] = large.error(out_up, above)
        rng = np.random.default_rng(3)
        up = large.vector(rng.normal(size=above.shape))
        down = small.vector(rng.normal(size=below.shape))
        transfer.restrict(up, out_down, rows)
        transfer.prolong(down, out_up, rows)
        means = out_down.dot(down) / coarse.nodes, up.dot(out_up) / fine.nodes
        found[f"transposes {kind}"] = abs(means[0] - means[1])
    found["least product"] = abs(means[0])
    found |= check_nyquist(large, small, transfer)
    return found


def check_nyquist(large: Level, small: Level, transfer: Transfer) -> dict[str, float]:
    """Return the largest number left of the coarse lattice's Nyquist waves, which cannot be shifted."""
    sizes = {"restricted Nyquist": 0.0, "prolonged Nyquist": 0.0}
    for axis in small.blocks.axes:
        nodes = small.blocks.lattice.shape[axis]
        if nodes % 2:
            continue
        fields = []
        for level in (large, small):
            count = level.blocks.lattice.shape[axis]
            shape = [1, 1, 1, 1]
            shape[axis] = count
            wave = np.cos(np.pi * nodes * np.arange(count) / count).reshape(shape)
            fields.append(level.vector(wave + np.zeros((*level.blocks.lattice.shape, len(EVOLVING)))))
        up, down = fields
        out_up, out_down = large.vector(), small.vector()
        transfer.restrict(up, out_down, True)
        transfer.prolong(down, out_up, True)
        for key, out in (("restricted Nyquist", out_down), ("prolonged Nyquist", out_up)):
            out.abs()
            sizes[key] = max(sizes[key], out.max()[1])
    return sizes


def check_preconditioner(name: str, smoother: str, folder: Path) -> dict[str, float]:
    """Leave B r and B^T r in the folder; return how far B^T is from the transpose."""
    fine, coarse = LEVELS[name]
    system = random_system(name, fine, COMM)
    made = two_level(system, coarse, smoother, slabs=5, slab_overlap=1)
    r, w = random_direction(system, 5), random_direction(system, 6)
    along, back = system.vector(), system.vector()
    made.apply(r, along)
    made.apply_transpose(w, back)
    size = w.norm() * along.norm() + back.norm() * r.norm()
    adjoint = abs(w.dot(along) - back.dot(r)) / size
    for kind, vector in (("forward", along), ("transpose", back)):
        border = system.border_of(vector)
        parts = COMM.gather((system.blocks.block.slices, system.field_of(vector)))
        whole = np.full((*fine.shape, system.blocks.components), np.nan)
        for slices, owned in parts or []:
            whole[slices] = owned
        if COMM.rank == 0:
            flat = np.concatenate([whole.reshape(-1), border])
            np.save(folder / f"{name}-{smoother}-{kind}-{COMM.size}.npy", flat)
    made.destroy()
    system.destroy()
    return {"adjoint": adjoint}


def check_fewer_lu_ranks() -> float:
    """Return how far coarse LUs on some of the ranks are from one on all, and so their transposes."""
    fine, coarse = LEVELS["kuramoto-sivashinsky"]
    system = random_system("kuramoto-sivashinsky", fine, COMM)
    r, found = random_direction(system, 5), []
    for ranks in (None, 1, 2):
        made = two_level(system, coarse, lu_ranks=ranks)
        made.update()  # again: factors are replaced
        forward, back = system.vector(), system.vector()
        made.apply(r, forward)
        made.apply_transpose(r, back)
        found.append((forward, back))
        made.destroy()
    off = 0.0
    for some in found[1:]:
        for vector, whole in zip(some, found[0], strict=True):
            size = whole.norm()
            vector.axpy(-1.0, whole)
            off = max(off, vector.norm() / size)
    system.destroy()
    return off


def refusal() -> str:
    """Return what transforms that these ranks cannot share are refused with."""
    blocks = Blocks(Lattice(1, 1, 40), 1, 1, COMM)
    try:
        Transform(blocks).destroy()
    except LatticeError as error:
        return str(error)
    return ""


def main(folder: Path, levels: bool) -> None:
    start_petsc([])
    found = {
        "pairs": {name: check_transfer(*pair) for name, pair in PAIRS.items()},
        "levels": {
            f"{name} {smoother}": check_preconditioner(name, smoother, folder)
            for name in (LEVELS if levels else ())
            for smoother in ("spectral", "slabs")
        },
        "refusal": refusal(),
        "fewer LU ranks": check_fewer_lu_ranks() if levels else 0.0,
    }
    if COMM.rank == 0:
        print(json.dumps(found))


main(Path(sys.argv[1]), sys.argv[2:] == ["levels"])
