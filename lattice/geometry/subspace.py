"""Subspaces of fields that a symmetry leaves unchanged: which nodes carry them, which carry other nodes.

A mirror keeps fields with `u(-x) = signs*u(x)`; a half period those with `u(t + T/2) = S u(t)`, where S
shifts by half a length, mirrors, or changes signs. Every symmetry halves the nodes that a lattice carries.
Mirrors lie halfway between the last node and the first, so that no node is its own image.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.lattice import Lattice

Indices = NDArray[np.int64]
Signs = tuple[int, ...]


@dataclass(frozen=True)
class HalfPeriod:
    """What a field is half a period later: `u(t + T/2, y, x) = signs * u(t, y', x')`.

    Parameters
    ----------
    signs : tuple of int
        One per component, 1 or -1.
    shift_y, shift_x : bool
        Whether y' = y + Ly/2, x' = x + Lx/2.
    mirror_y, mirror_x : bool
        Whether y' = -y, x' = -x, about the mirror.
    """

    signs: Signs
    shift_y: bool = False
    shift_x: bool = False
    mirror_y: bool = False
    mirror_x: bool = False


@dataclass(frozen=True)
class Subspace:
    """The symmetries that all fields of a subspace have.

    Parameters
    ----------
    mirror_x, mirror_y : tuple of int, optional
        Signs of the components under `x -> -x` (`y -> -y`); None without that symmetry.
    half_period : HalfPeriod, optional
        What the field is half a period later.
    """

    mirror_x: Signs | None = None
    mirror_y: Signs | None = None
    half_period: HalfPeriod | None = None

    @property
    def shares(self) -> tuple[int, int, int]:
        """By how much the nodes along t, y and x are fewer: 1 or 2."""
        present = (self.half_period, self.mirror_y, self.mirror_x)
        return tuple(1 if p is None else 2 for p in present)  # type: ignore[return-value]

    @property
    def order(self) -> int:
        """The number of images of a node."""
        return int(np.prod(self.shares))

    @property
    def signs(self) -> tuple[Signs, ...]:
        """The signs of every symmetry."""
        half = self.half_period.signs if self.half_period else None
        return tuple(s for s in (self.mirror_x, self.mirror_y, half) if s is not None)

    def mirrors(self, axis: str) -> bool:
        """Tell whether any symmetry mirrors an axis, so that no shift or drift along it is left."""
        half = self.half_period
        return getattr(self, f"mirror_{axis}") is not None or (
            half is not None and bool(getattr(half, f"mirror_{axis}"))
        )

    def part(self, whole: Lattice) -> Lattice:
        """Return the lattice of the nodes that carry the subspace's fields: the first ones of the whole.

        Raises
        ------
        InputError
            If an axis that is halved or shifted by half has an odd number of nodes.
        """
        half = self.half_period
        shifted = (False, half is not None and half.shift_y, half is not None and half.shift_x)
        for name, share, moved in zip(("nt", "ny", "nx"), self.shares, shifted, strict=True):
            if (share == 2 or moved) and getattr(whole, name) % 2:
                raise InputError(
                    f"must be even for this solve.subspace, got {name} = {getattr(whole, name)}; add one",
                    key=f"lattice.{name}",
                )
        nt, ny, nx = (n // share for n, share in zip(whole.shape, self.shares, strict=True))
        return replace(whole, nt=nt, ny=ny, nx=nx)

    def images(
        self, whole: Lattice, components: int, t: Indices, y: Indices, x: Indices
    ) -> tuple[Indices, Indices, Indices, NDArray[np.float64]]:
        """Return the nodes that carry the values of given nodes, and the signs to give these.

        Parameters
        ----------
        whole : Lattice
            The whole lattice.
        components : int
        t, y, x : ndarray
            Node numbers, also beyond the lattice's ends; they are broadcast.

        Returns
        -------
        t, y, x : ndarray
            Node numbers within the part.
        signs : ndarray, shape (..., components)
        """
        t, y, x = (np.array(a) for a in np.broadcast_arrays(t, y, x))
        signs = np.ones((*t.shape, components))
        half, share = self.half_period, self.shares[0]
        if half:
            later = (t // (whole.nt // share)) % 2 == 1
            y, x = (
                _moved(y, later, whole.ny, half.mirror_y, half.shift_y),
                _moved(x, later, whole.nx, half.mirror_x, half.shift_x),
            )
            signs[later] *= half.signs
        t, y, x = t % (whole.nt // share), y % whole.ny, x % whole.nx
        if self.mirror_y is not None:
            y = _mirrored(y, whole.ny, signs, self.mirror_y)
        if self.mirror_x is not None:
            x = _mirrored(x, whole.nx, signs, self.mirror_x)
        return t, y, x, signs


def _moved(index: Indices, where: NDArray[np.bool_], nodes: int, mirror: bool, shift: bool) -> Indices:
    found = np.where(where & mirror, -1 - index, index)
    return np.asarray(found + np.where(where & shift, nodes // 2, 0))


def _mirrored(index: Indices, nodes: int, signs: NDArray[np.float64], by: Signs) -> Indices:
    """Return the images of nodes in the second half, whose signs are changed in place."""
    beyond = index >= nodes // 2
    signs[beyond] *= by
    return np.where(beyond, nodes - 1 - index, index)
