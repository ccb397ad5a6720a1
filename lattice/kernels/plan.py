"""Plan a kernel: what is computed once per node into a buffer before its differences are taken.

A derivative of a composite expression, a mixed derivative with a wide stencil and a function of the
fields each get a buffer of their own, `Stored`, on as many halo rows and columns as its readers reach.
The expressions left contain derivatives of plain symbols and of products of two symbols only.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

import sympy

from lattice.geometry.stencils import half_width
from lattice.kernels.scheme import Scheme, space_stencil
from lattice.laws.law import Deriv

Reach = tuple[int, int]
ROOT_EXPONENTS = (sympy.Rational(1, 2), sympy.Rational(-1, 2))


@dataclass(frozen=True)
class Stored:
    """An expression kept in a buffer.

    Parameters
    ----------
    symbol : sympy.Symbol
        What stands for it in the expressions that read it.
    expression : sympy.Expr
        In fields and other buffers.
    depth : int
        One more than that of the deepest buffer it reads.
    """

    symbol: sympy.Symbol
    expression: sympy.Expr
    depth: int


@dataclass
class Plan:
    """The buffers and remaining expressions of a form.

    Parameters
    ----------
    scheme : Scheme
    fields : frozenset of sympy.Symbol
        Every component of the input fields.
    """

    scheme: Scheme
    fields: frozenset[sympy.Symbol]
    stored: list[Stored] = field(default_factory=list)

    def lower(self, expression: sympy.Expr) -> sympy.Expr:
        """Return an expression with buffers in place of what is to be stored."""
        if not expression.args or not self.moving(expression):
            return expression
        if isinstance(expression, Deriv):
            return self._derivative(*expression.args)
        lowered = expression.func(*(self.lower(a) for a in expression.args))
        return self._store(lowered) if _needs_library(lowered) else lowered

    def moving(self, expression: sympy.Expr) -> bool:
        """Return whether an expression depends on the fields."""
        known = self.fields.union(s.symbol for s in self.stored)
        return bool(expression.has(Deriv) or expression.free_symbols & known)

    def extents(self, expressions: Iterable[sympy.Expr]) -> dict[sympy.Symbol, Reach]:
        """Return on how many halo rows and columns every symbol is read by the final expressions."""
        extents: dict[sympy.Symbol, Reach] = {}
        for expression in expressions:
            self._widen(extents, expression, (0, 0))
        for stored in reversed(self.stored):
            self._widen(extents, stored.expression, extents[stored.symbol])
        return extents

    def _widen(self, extents: dict[sympy.Symbol, Reach], expression: sympy.Expr, own: Reach) -> None:
        for symbol, (rows, columns) in self.reaches(expression).items():
            known = extents.get(symbol, (0, 0))
            extents[symbol] = (max(known[0], own[0] + rows), max(known[1], own[1] + columns))

    def reaches(self, expression: sympy.Expr) -> dict[sympy.Symbol, Reach]:
        """Return how many rows and columns an expression reaches in every symbol it contains."""
        if expression.is_Symbol:
            return {expression: (0, 0)}
        rows = columns = 0
        args = expression.args
        if isinstance(expression, Deriv):
            columns = half_width(int(args[1]), self.scheme.order_x)
            rows = half_width(int(args[2]), self.scheme.order_y)
            args = args[:1]
        found: dict[sympy.Symbol, Reach] = {}
        for arg in args:
            for symbol, (y, x) in self.reaches(arg).items():
                known = found.get(symbol, (0, 0))
                found[symbol] = (max(known[0], y + rows), max(known[1], x + columns))
        return found

    def _derivative(self, inner: sympy.Expr, a: sympy.Expr, b: sympy.Expr) -> sympy.Expr:
        inner = self.lower(inner)
        if not self._plain(inner):
            inner = self._store(inner)
        if a > 0 and b > 0 and self._wide(int(a), int(b)):
            inner, a = self._store(Deriv(inner, a, 0)), sympy.Integer(0)
        return Deriv(inner, a, b)

    def _plain(self, expression: sympy.Expr) -> bool:
        """Return whether an expression is a symbol or a product of two, cheaper to repeat than to store."""
        powers = expression.as_powers_dict()
        symbols = all(f.is_Symbol and self.moving(f) for f in powers)
        return symbols and all(p.is_Integer for p in powers.values()) and 0 < sum(powers.values()) <= 2

    def _wide(self, a: int, b: int) -> bool:
        """Return whether a mixed difference is cheaper as one along x, stored, and one along y."""
        points = len(space_stencil(a, b, self.scheme.order_x, self.scheme.order_y))
        along_x = len(space_stencil(a, 0, self.scheme.order_x, self.scheme.order_y))
        return 2 * points > 3 * (along_x + points // along_x)

    def _store(self, expression: sympy.Expr) -> sympy.Symbol:
        for stored in self.stored:
            if stored.expression == expression:
                return stored.symbol
        depth = 1 + max((s.depth for s in self.stored if expression.has(s.symbol)), default=0)
        symbol = sympy.Symbol(f"@stored.{len(self.stored)}", real=True)
        self.stored.append(Stored(symbol, expression, depth))
        return symbol


def _needs_library(expression: sympy.Expr) -> bool:
    """Return whether a node calls a library, which keeps the loop it stands in from being vectorised."""
    if expression.is_Pow:
        exponent = expression.exp
        return not (exponent in ROOT_EXPONENTS or (exponent.is_Integer and abs(exponent) <= 8))
    return not (expression.is_Add or expression.is_Mul)
