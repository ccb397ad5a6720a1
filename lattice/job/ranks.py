"""Whether a job's lattice can be spread over a number of ranks."""

from __future__ import annotations

from typing import TYPE_CHECKING

from lattice.errors import InputError

if TYPE_CHECKING:
    from lattice.job.schema import Job


def check_ranks(job: Job, ranks: int) -> None:
    """Refuse a rank count that leaves some rank a block narrower than the halo.

    Raises
    ------
    InputError
        With the largest rank count that works.
    """
    if ranks == 1:
        return
    from lattice.geometry.blocks import largest_rank_count, process_grid
    from lattice.kernels.forms import adjoint_form, residual_form
    from lattice.kernels.scheme import make_scheme

    lattice, law = job.make_lattice(), job.make_law()
    scheme = make_scheme(lattice, [residual_form(law), adjoint_form(law)])
    halo = max(scheme.halo_t, scheme.halo_y, scheme.halo_x)
    if process_grid(ranks, lattice, halo) is not None:
        return
    most = largest_rank_count(lattice, halo)
    fewer = next(count for count in range(min(ranks, most), 0, -1) if process_grid(count, lattice, halo))
    size = " x ".join(str(n) for n in lattice.shape if n > 1)
    raise InputError(
        f"must leave every rank a block at least as wide as its halo of {halo} nodes, got {ranks} ranks for"
        f" {size} nodes; the largest count that works is {most}"
        + ("" if fewer == most else f", the next below {ranks} is {fewer}"),
        key="--ranks",
    )
