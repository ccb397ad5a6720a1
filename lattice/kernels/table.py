"""What the weight vector and the static fields of a generated kernel hold."""

from __future__ import annotations

from dataclasses import dataclass, field

import sympy

from lattice.kernels.scheme import space_stencil

Term = tuple[sympy.Expr, int, int]
Offset = tuple[int, int, int]


@dataclass(frozen=True)
class Stencil:
    """The weights of a sum of derivatives with coefficients in scalars only.

    Parameters
    ----------
    terms : tuple of (sympy.Expr, int, int)
        Coefficient and orders (a, b) in x and y.
    groups : tuple of tuple of (int, int, int)
        Offsets dy, dx and signs that share one weight, that of the group's first, whose sign is 1.
    first : int
        Index of the first group's weight.
    """

    terms: tuple[Term, ...]
    groups: tuple[tuple[Offset, ...], ...]
    first: int


@dataclass
class Table:
    """What the weight vector of a kernel holds, in order; filled by `lattice.kernels.build`.

    Parameters
    ----------
    levels : int
        The vector starts with as many weights of the time difference, then of the midpoint.
    order_x, order_y : int
        Orders of the differences.
    """

    levels: int
    order_x: int
    order_y: int
    stencils: dict[tuple[Term, ...], Stencil] = field(default_factory=dict)
    constants: dict[sympy.Expr, int] = field(default_factory=dict)
    statics: list[sympy.Expr] = field(default_factory=list)
    length: int = 0

    def __post_init__(self) -> None:
        self.length = 2 * self.levels

    def stencil(self, terms: tuple[Term, ...]) -> Stencil:
        """Return the stencil of a sum of derivatives, its weights reserved at the first call."""
        if terms not in self.stencils:
            groups = self._groups(terms)
            self.stencils[terms] = Stencil(terms, groups, self._take(len(groups)))
        return self.stencils[terms]

    def constant(self, expression: sympy.Expr) -> int:
        """Return the index of the weight that holds an expression in scalars."""
        if expression not in self.constants:
            self.constants[expression] = self._take(1)
        return self.constants[expression]

    def static(self, expression: sympy.Expr) -> int:
        """Return the index of the static field that holds an expression in coordinates and scalars."""
        if expression not in self.statics:
            self.statics.append(expression)
        return self.statics.index(expression)

    def offsets(self, terms: tuple[Term, ...]) -> list[tuple[int, int]]:
        """Return the offsets (dy, dx) of the nonzero weights, in order."""
        return sorted({o for _, a, b in terms for o in space_stencil(a, b, self.order_x, self.order_y)})

    def _groups(self, terms: tuple[Term, ...]) -> tuple[tuple[Offset, ...], ...]:
        """Return the groups of offsets; mirrored ones share a weight where all terms agree in parity."""
        offsets = self.offsets(terms)
        parities = {(a % 2, b % 2) for _, a, b in terms}
        if len(parities) > 1:
            return tuple(((dy, dx, 1),) for dy, dx in offsets)
        ((odd_x, odd_y),) = parities
        groups: dict[tuple[int, int], list[Offset]] = {}
        for dy, dx in reversed(offsets):
            sign = (-1) ** (odd_x * (dx < 0) + odd_y * (dy < 0))
            groups.setdefault((abs(dy), abs(dx)), []).append((dy, dx, sign))
        return tuple(tuple(group) for _, group in sorted(groups.items()))

    def _take(self, count: int) -> int:
        first, self.length = self.length, self.length + count
        return first
