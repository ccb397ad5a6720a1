"""Equations back to the notation they are read from."""

from __future__ import annotations

from typing import Any

import sympy
from sympy.printing.str import StrPrinter

from lattice.laws.law import Equation


class _NotationPrinter(StrPrinter):  # type: ignore[misc]
    def _print_Deriv(self, expression: sympy.Expr) -> str:
        inner, a, b = expression.args
        subscript = "x" * int(a) + "y" * int(b)
        head = self._print(inner)
        return f"{head}_{subscript}" if inner.is_Symbol else f"({head})_{subscript}"

    def _print_Exp1(self, expression: Any) -> str:
        return "exp(1)"


def write_expression(expression: sympy.Expr) -> str:
    """Return `expression` in the notation; `read_expression` gives it back.

    Examples
    --------
    >>> from lattice.laws.law import Deriv, symbol
    >>> u = symbol("u")
    >>> write_expression(Deriv(u**2, 1, 0) / 2 + Deriv(u, 2, 2))
    'u_xxyy + (u**2)_x/2'
    """
    return str(_NotationPrinter().doprint(expression))


def write_equation(equation: Equation) -> str:
    """Return an equation as the lattice solves it, products in conservative form."""
    if not equation.evolving:
        return f"{write_expression(equation.expression)} = 0"
    rate = sympy.Symbol(f"{equation.component}_t")
    text = write_expression(equation.expression)
    return f"{rate} {'- ' + text[1:] if text.startswith('-') else '+ ' + text} = 0"
