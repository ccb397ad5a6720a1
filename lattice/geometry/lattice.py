"""The space-time lattice: how many nodes on each periodic axis, and the order of the differences."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Lattice:
    """Nodes and orders of a space-time lattice that is periodic in every axis.

    Parameters
    ----------
    nt, ny, nx : int
        Nodes in time, y and x. `nt = 1`: a steady state or travelling wave; `ny = 1` in one
        space dimension.
    dimensions : int
        Space dimensions, 1 or 2.
    order_t : int
        Order of the staggered time differences: 2, 4 or 6.
    order_x, order_y : int
        Order of the central space differences: 2, 4, 6 or 8.

    Examples
    --------
    >>> Lattice(nt=64, ny=1, nx=48).shape
    (64, 1, 48)
    """

    nt: int
    ny: int
    nx: int
    dimensions: int = 1
    order_t: int = 4
    order_x: int = 4
    order_y: int = 4

    @property
    def shape(self) -> tuple[int, int, int]:
        """Nodes as (nt, ny, nx)."""
        return (self.nt, self.ny, self.nx)

    @property
    def nodes(self) -> int:
        """Number of space-time nodes."""
        return self.nt * self.ny * self.nx
