"""The numbers a kernel is generated and run with: orders, halo and difference weights."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import sympy

from lattice.geometry.lattice import Lattice
from lattice.geometry.stencils import central, half_width, staggered
from lattice.kernels.forms import Form
from lattice.laws.law import Deriv


@dataclass(frozen=True)
class Scheme:
    """Orders of the differences and width of the halo that padded blocks carry.

    Parameters
    ----------
    levels : int
        Levels an evolving row couples, the order in time; 1 where the lattice has one level only.
    order_x, order_y : int
        Orders of the central space differences.
    halo_t, halo_y, halo_x : int
        Padding of a block on either side of each axis.
    """

    levels: int
    order_x: int
    order_y: int
    halo_t: int
    halo_y: int
    halo_x: int

    @property
    def below(self) -> int:
        """Levels below its own that an evolving row reaches."""
        return self.levels // 2


def reach(expression: sympy.Expr, order_x: int, order_y: int) -> tuple[int, int]:
    """Return how many nodes an expression reaches in x and in y, nested derivatives added up."""
    if isinstance(expression, Deriv):
        inner, a, b = expression.args
        x, y = reach(inner, order_x, order_y)
        return x + half_width(int(a), order_x), y + half_width(int(b), order_y)
    reaches = [reach(arg, order_x, order_y) for arg in expression.args] or [(0, 0)]
    return max(x for x, _ in reaches), max(y for _, y in reaches)


def widest(forms: Iterable[Form], order_x: int, order_y: int) -> tuple[int, int]:
    """Return how many nodes the expressions of forms reach at most, in x and in y."""
    reaches = [reach(o.expression, order_x, order_y) for form in forms for o in form.outputs]
    return max(x for x, _ in reaches), max(y for _, y in reaches)


def make_scheme(lattice: Lattice, forms: Iterable[Form]) -> Scheme:
    """Return the scheme of a lattice whose halo serves all given forms.

    The halo has one width in every axis that has one, as a PETSc DMDA has.
    """
    levels = lattice.order_t if lattice.nt > 1 else 1
    width = max(levels // 2, *widest(forms, lattice.order_x, lattice.order_y))
    return Scheme(
        levels,
        lattice.order_x,
        lattice.order_y,
        width if lattice.nt > 1 else 0,
        width if lattice.dimensions == 2 else 0,
        width,
    )


def time_weights(levels: int) -> tuple[list[float], list[float]]:
    """Return difference (unit step) and interpolation weights of an evolving row, lowest level first."""
    if levels == 1:
        return [0.0], [1.0]
    return [float(w) for w in staggered(1, levels)], [float(w) for w in staggered(0, levels)]


def space_stencil(a: int, b: int, order_x: int, order_y: int) -> dict[tuple[int, int], float]:
    """Return the nonzero weights of d^(a+b)/dx^a dy^b for unit spacings, by offset (dy, dx)."""
    wx, wy = central(a, order_x), central(b, order_y)
    cx, cy = len(wx) // 2, len(wy) // 2
    return {
        (j - cy, i - cx): float(q * p)
        for j, q in enumerate(wy)
        for i, p in enumerate(wx)
        if p != 0 and q != 0
    }
