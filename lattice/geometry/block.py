"""The part of the lattice one rank owns."""

from __future__ import annotations

from dataclasses import dataclass

from lattice.geometry.lattice import Lattice


@dataclass(frozen=True)
class Block:
    """Half-open ranges of levels, rows and columns owned by one rank.

    Parameters
    ----------
    t0, t1, y0, y1, x0, x1 : int
        Owned are levels `t0 <= n < t1`, rows `y0 <= j < y1`, columns `x0 <= i < x1`.
    """

    t0: int
    t1: int
    y0: int
    y1: int
    x0: int
    x1: int

    @property
    def slices(self) -> tuple[slice, slice, slice]:
        """The block as slices of a whole field's first three axes."""
        return (slice(self.t0, self.t1), slice(self.y0, self.y1), slice(self.x0, self.x1))

    @property
    def shape(self) -> tuple[int, int, int]:
        """Owned nodes as (levels, rows, columns)."""
        return (self.t1 - self.t0, self.y1 - self.y0, self.x1 - self.x0)

    @classmethod
    def whole(cls, lattice: Lattice) -> Block:
        """The block of a single rank: the whole lattice."""
        return cls(0, lattice.nt, 0, lattice.ny, 0, lattice.nx)
