"""Cautions about a lattice too coarse for the waves that the law lets grow."""

from __future__ import annotations

from math import pi
from typing import TYPE_CHECKING

from lattice.job.unknowns import axes

if TYPE_CHECKING:
    from lattice.job.schema import Job

ERROR_CONSTANT = {2: 6, 4: 30, 6: 140, 8: 630}
"""The central first difference of order p has the relative error `(k h)**p / constant` for small k h;
the next term of its Taylor series, 1/3!, 4/5!, 36/7!, 576/9!."""
LARGEST_ERROR = 0.03
FINER = 4
"""The law is looked at on this many times the lattice's nodes, to see what the lattice leaves out."""


def resolution_cautions(job: Job) -> tuple[str, ...]:
    """Return a caution for every axis on which the shortest growing wave is badly resolved.

    Growing means linear growth about the zero state. A law that cannot be judged so gives none.
    """
    return tuple(filter(None, (_caution(job, axis) for axis in axes(job.make_law()))))


def relative_error(wavenumber: float, spacing: float, order: int) -> float:
    """Return the leading relative error of the first difference of a wave.

    Examples
    --------
    >>> round(relative_error(1.0, 0.5, 4), 6)
    0.002083
    """
    return (wavenumber * spacing) ** order / ERROR_CONSTANT[order]


def _caution(job: Job, axis: str) -> str:
    lattice, values = job.make_lattice(), job.make_values()
    nodes = lattice.nx if axis == "x" else lattice.ny
    order = lattice.order_x if axis == "x" else lattice.order_y
    length = values[f"length_{axis}"]
    edge = shortest_growing(job, axis)
    error = relative_error(edge, length / nodes, order)
    if error <= LARGEST_ERROR:
        return ""
    enough = (LARGEST_ERROR * ERROR_CONSTANT[order]) ** (1 / order)
    wanted = int(edge * length / enough) + 1
    return (
        f"lattice.n{axis} = {nodes} is coarse: waves as short as {2 * pi / edge:.3g} grow, and order {order}"
        f" with spacing {length / nodes:.3g} gets their slope wrong by {min(error, 1.0):.0%};"
        f" n{axis} = {wanted} or more keeps it below {LARGEST_ERROR:.0%}"
    )


def shortest_growing(job: Job, axis: str) -> float:
    """Return the largest wavenumber along an axis that grows, 0 where none does or it cannot be told."""
    import numpy as np

    from lattice.errors import InputError
    from lattice.starts.operator import SpectralOperator

    lattice, values = job.make_lattice(), job.make_values()
    counts = {"x": lattice.nx, "y": lattice.ny}
    counts = {name: FINER * count if name == axis else min(count, 8) for name, count in counts.items()}
    shape = (counts["y"] if lattice.dimensions == 2 else 1, counts["x"])
    try:
        operator = SpectralOperator(
            job.make_law(), shape, (values.get("length_y", 1.0), values["length_x"]), values
        )
    except InputError:
        return 0.0
    growing = operator.growth_rates() > 0.0
    place = 1 if axis == "x" else 0
    numbers = np.abs(np.fft.fftfreq(shape[place], 1.0 / shape[place]))[: growing.shape[place]]
    present = growing.any(axis=1 - place)
    return float(numbers[present].max(initial=0.0)) * 2 * pi / values[f"length_{axis}"]
