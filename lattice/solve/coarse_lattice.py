"""Choosing the coarse lattice and the smoother of the two-level preconditioner, with the reason.

The coarse lattice must carry the state's active modes, and everything beyond it must be ruled by the
constant-coefficient part of the tangent, which is all the spectral smoother inverts. Where no lattice
coarser than the fine one achieves the second (advection outweighs dissipation on the fine scales), the
smoother is slabs.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.kernels.scheme import widest
from lattice.spectral.transform import Transform
from lattice.system.constant_part import ConstantPart

if TYPE_CHECKING:
    from lattice.system.system import System

TAIL = 1e-6
"""Largest share of the state's energy beyond the coarse lattice. On turbulent fields of the film law it
gives a spacing of 1.0 in x, on which prototypes of the scheme needed the fewest iterations."""
RULED = 0.35
"""Largest ratio of fluctuating coefficients to the constant part beyond the coarse lattice; gives 0.7 in
t on the same fields."""
FEWEST_LEVELS = 8
"""Fewest levels that slabs of time levels can share."""
LEAST_GAIN = 1.5
"""Fewest fine unknowns per coarse one for which two levels are worth their set-up."""


@dataclass(frozen=True)
class Choice:
    """A coarse lattice, a smoother ("spectral" or "slabs"), and the reason in words."""

    lattice: Lattice
    smoother: str
    reason: str


def choose(system: System, transform: Transform, constant: ConstantPart, options: Any) -> Choice:
    """Return the coarse lattice and smoother for a system about its point of linearisation.

    Collective.

    Parameters
    ----------
    system : System
    transform : Transform
        Of the system's blocks.
    constant : ConstantPart
        Up to date.
    options : object
        The job's coarse section: nt, ny, nx (None: chosen here), order, smoother.

    Raises
    ------
    InputError
        If the fine lattice is itself too coarse for two levels.
    """
    fine = system.lattice
    ratio_x, ruled = _ruling_wavenumber(system, constant)
    smoother = options.smoother if options.smoother != "auto" else ("spectral" if ruled else "slabs")
    if smoother == "slabs" and fine.nt < FEWEST_LEVELS:
        if options.smoother == "slabs":
            raise InputError(
                f"must be 'auto' or 'spectral' below {FEWEST_LEVELS} levels, which slabs cannot share,"
                f" got 'slabs' and lattice.nt = {fine.nt}; raise lattice.nt or change it",
                key="solve.coarse.smoother",
            )
        smoother = "spectral"
    order = options.order or (8 if system.law.dimensions == 1 or smoother == "slabs" else 6)
    tails = _axis_tails(system, transform)
    counts = {}
    for name, nodes in (("nt", fine.nt), ("ny", fine.ny), ("nx", fine.nx)):
        asked = getattr(options, name)
        if nodes == 1:
            counts[name] = 1
        elif asked is not None:
            counts[name] = min(asked, nodes)
        else:
            counts[name] = _axis_count(name, nodes, tails[name], smoother, system, constant, ratio_x)
    order_t = min(6, max(fine.order_t, 4))
    least = _least_nodes(system, order)
    for name, needed in (("nt", max(least[0], order_t)), ("nx", least[1]), ("ny", least[1])):
        if counts[name] > 1:
            counts[name] = min(getattr(fine, name), max(counts[name], needed))
    coarse = replace(
        fine, nt=counts["nt"], ny=counts["ny"], nx=counts["nx"], order_t=order_t, order_x=order, order_y=order
    )
    gain = fine.nodes / coarse.nodes
    if gain < LEAST_GAIN:
        raise InputError(
            f"must be 'direct' here: the coarse lattice that carries this state's modes, {_text(coarse)}, is"
            f" hardly coarser than the lattice itself, {_text(fine)}; refine the lattice, give"
            " solve.coarse.nt and nx, or use 'direct'",
            key="solve.preconditioner",
        )
    beyond = max(_beyond(tails[name], n) for name, n in counts.items() if name in tails)
    why = (
        "beyond it the constant-coefficient part rules"
        if ruled
        else "at the lattice's largest wavenumber fluctuating coefficients are still"
        f" {ratio_x:.2g} of the constant part"
    )
    return Choice(
        coarse,
        smoother,
        f"coarse lattice {_text(coarse)} of order {order} for {_text(fine)}: {beyond:.1g} of the energy lies"
        f" beyond its waves; smoother {smoother}: {why}",
    )


def _beyond(tail: NDArray[np.float64], nodes: int) -> float:
    """Return the share of energy beyond what a number of nodes carries."""
    return float(tail[min((nodes - 1) // 2 + 1, tail.size - 1)])


def _text(lattice: Lattice) -> str:
    return " x ".join(str(n) for n in lattice.shape if n > 1)


def _least_nodes(system: System, order: int) -> tuple[int, int]:
    """Return the fewest levels, and nodes in space, with which an order's halo fits and it can be assembled.

    The halo is as wide in time as in space.
    """
    forms = system.operator.forms
    halo = max(widest([forms[name] for name in ("residual", "tangent", "adjoint")], order, order))
    return halo, max(halo, 2 * max(widest([forms["tangent"]], order, order)) + 1)


def _axis_tails(system: System, transform: Transform) -> dict[str, NDArray[np.float64]]:
    """Return for every axis the share of energy in modes of a number or higher. Collective."""
    field = system.blocks.vector()
    system.operator.copy_point(field)
    spectrum = np.abs(transform.forward(field)) ** 2
    field.destroy()
    modes = transform.modes()
    twice = np.where(modes[-1] > 0, 2.0, 1.0)[..., None]
    names = [("nt", "ny", "nx")[axis] for axis in system.blocks.axes]
    tails = {}
    for axis, (name, nodes) in enumerate(zip(names, transform.shape, strict=True)):
        number = np.broadcast_to(np.abs(modes[axis]), spectrum.shape[:-1]).reshape(-1)
        energy = (spectrum * twice).reshape(number.size, -1)
        sums = np.array([np.bincount(number, e, nodes // 2 + 2) for e in energy.T])
        total = system.comm.allreduce(sums)
        share = total / np.maximum(total.sum(axis=1, keepdims=True), 1e-300)
        tails[name] = np.cumsum(share[:, ::-1], axis=1)[:, ::-1].max(axis=0)
    return tails


def _axis_count(
    name: str,
    nodes: int,
    tail: NDArray[np.float64],
    smoother: str,
    system: System,
    constant: ConstantPart,
    ratio_x: float,
) -> int:
    """Return the coarse nodes of one axis: even, at most the fine ones."""
    active = int(np.argmax(tail < TAIL)) if (tail < TAIL).any() else nodes // 2
    if smoother == "slabs":
        return max(4, 2 * -(-nodes // 4))
    if name == "nt":
        frequency = _ruling_frequency(system, constant)
        needed = int(np.ceil(frequency * system.operator.values["period"] / (2.0 * np.pi)))
    else:
        length = system.operator.values[f"length_{name[1]}"]
        needed = int(np.ceil(_wave_where_ruled(system, constant) * length / (2.0 * np.pi)))
    return min(nodes, 2 * max(active, needed, 2))


def _ratios(
    system: System, constant: ConstantPart
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return wavenumbers up to the lattice's largest, the fluctuating part and the constant part there."""
    spacing = system.operator.geometry(system.operator.values).dx
    waves = np.linspace(0.0, np.pi / spacing, 400)[1:]
    fluctuating = np.array([constant.fluctuating_size(k) for k in waves])
    steady = np.array([constant.constant_size(k) for k in waves])
    return waves, fluctuating, steady


def _ruling_wavenumber(system: System, constant: ConstantPart) -> tuple[float, bool]:
    """Return the ratio of fluctuating to constant part at the largest wavenumber, and whether it is small."""
    _, fluctuating, steady = _ratios(system, constant)
    ratio = float(fluctuating[-1] / max(steady[-1], 1e-300))
    return ratio, ratio <= RULED


def _wave_where_ruled(system: System, constant: ConstantPart) -> float:
    """Return the wavenumber beyond which the constant part rules."""
    waves, fluctuating, steady = _ratios(system, constant)
    above = np.nonzero(fluctuating > RULED * np.maximum(steady, 1e-300))[0]
    return float(waves[above[-1]]) if above.size else 0.0


def _ruling_frequency(system: System, constant: ConstantPart) -> float:
    """Return the frequency beyond which time differences and the constant part rule at every wavenumber."""
    _, fluctuating, steady = _ratios(system, constant)
    needed = (fluctuating / RULED) ** 2 - steady**2
    return float(np.sqrt(max(0.0, needed.max())))
