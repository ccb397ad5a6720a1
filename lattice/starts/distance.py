"""How far a composed field is from a state: its residual on its own lattice, in all and by region."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.options import Report

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]

LISTED = 24
"""Most regions that are told one by one."""


@dataclass(frozen=True)
class Region:
    """A part of the lattice by its name, and the half-open range of nodes on each axis (t, y, x)."""

    name: str
    block: Block


def residual_field(
    law: Law, lattice: Lattice, values: Mapping[str, float], owned: Real, block: Block, comm: MPI.Intracomm
) -> Real | None:
    """Return this rank's part of the residual of a field; None where the blocks are not the solver's own.

    Collective.
    """
    from mpi4py import MPI

    from lattice.kernels.forms import frame_names
    from lattice.system.operator import FieldOperator

    operator = FieldOperator(law, lattice, comm)
    own = comm.allreduce(operator.blocks.block == block, op=MPI.LAND)
    if not own:
        operator.destroy()
        return None
    field, out = operator.blocks.vector(), operator.blocks.vector()
    operator.blocks.owned(field)[...] = owned
    filled = {**dict.fromkeys(frame_names(law), 0.0), "period": 1.0, **law.defaults, **values}
    for component in law.components:
        filled.setdefault(f"source_{component}", 0.0)
    operator.residual(field, filled, out)
    residual: Real = operator.blocks.owned(out).copy()
    field.destroy()
    out.destroy()
    operator.destroy()
    return residual


def root_mean_squares(
    residual: Real, block: Block, regions: Sequence[Region], comm: MPI.Intracomm
) -> tuple[float, list[float]]:
    """Return the root mean square of a field over the lattice, and over each region. Collective."""
    sums = np.zeros((len(regions) + 1, 2))
    sums[0] = (residual * residual).sum(), residual.size
    for row, region in enumerate(regions, start=1):
        part = residual[_common(block, region.block)]
        sums[row] = (part * part).sum(), part.size
    total = np.empty_like(sums)
    comm.Allreduce(sums, total)
    found = np.sqrt(total[:, 0] / np.maximum(total[:, 1], 1.0))
    return float(found[0]), [float(value) for value in found[1:]]


def report_residual(
    kind: str,
    law: Law,
    lattice: Lattice,
    values: Mapping[str, float],
    owned: Real,
    block: Block,
    comm: MPI.Intracomm,
    report: Report,
    regions: Sequence[Region] = (),
) -> float:
    """Report how far a field is from a state, and return its residual_rms; NaN if it is not known.

    Collective.
    """
    residual = residual_field(law, lattice, values, owned, block, comm)
    if residual is None:
        return float("nan")
    whole, parts = root_mean_squares(residual, block, regions, comm)
    report(f"{kind}: composed, not solved: residual_rms {whole:.3e}")
    for region, size in list(zip(regions, parts, strict=True))[:LISTED]:
        report(f"{kind}:   {region.name}: residual_rms {size:.3e}")
    if len(regions) > LISTED:
        report(f"{kind}:   and {len(regions) - LISTED} more, at most {max(parts):.3e}")
    return whole


def _common(block: Block, region: Block) -> tuple[slice, slice, slice]:
    """Return the part of a region inside a block, as slices of the block's own array."""
    pairs = zip(
        (block.t0, block.y0, block.x0),
        (block.t1, block.y1, block.x1),
        (region.t0, region.y0, region.x0),
        (region.t1, region.y1, region.x1),
        strict=True,
    )
    t, y, x = (slice(max(lo, a) - lo, max(min(hi, b), max(lo, a)) - lo) for lo, hi, a, b in pairs)
    return t, y, x
