"""Which means vanish for every periodic field: those of total derivatives, found by Euler's operator.

A product of fields and derivatives is a sum of derivatives, so that its mean over a periodic box is zero,
exactly where its variational derivative with respect to every field is identically zero.

References
----------
.. [1] P. J. Olver, "Applications of Lie Groups to Differential Equations", Springer 1993, section 4.1
   (from memory).
"""

from __future__ import annotations

import sympy

from lattice.laws.law import Deriv, X, Y

Jet = tuple[sympy.Symbol, int, int]


class Jets:
    """Derivatives of the components as plain symbols, and total derivatives of expressions in them.

    Parameters
    ----------
    components : tuple of sympy.Symbol
    """

    def __init__(self, components: tuple[sympy.Symbol, ...]) -> None:
        self.components = components
        self._symbols: dict[Jet, sympy.Symbol] = {}
        self._jets: dict[sympy.Symbol, Jet] = {}

    def symbol(self, component: sympy.Symbol, a: int, b: int) -> sympy.Symbol:
        """Return the symbol of a derivative of a component."""
        key = (component, a, b)
        if key not in self._symbols:
            self._symbols[key] = sympy.Symbol(f"jet_{component.name}_{a}_{b}", real=True)
            self._jets[self._symbols[key]] = key
        return self._symbols[key]

    def flatten(self, expression: sympy.Expr) -> sympy.Expr:
        """Return an expression in jets: derivatives of products by the chain rule."""
        if expression in self.components:
            return self.symbol(expression, 0, 0)
        if isinstance(expression, Deriv):
            inner, a, b = expression.args
            return self.derivative(self.flatten(inner), int(a), int(b))
        if not expression.args:
            return expression
        return expression.func(*(self.flatten(argument) for argument in expression.args))

    def derivative(self, flat: sympy.Expr, a: int, b: int) -> sympy.Expr:
        """Return a total derivative of order a in x and b in y."""
        for axis, times in ((0, a), (1, b)):
            for _ in range(times):
                flat = self._once(flat, axis)
        return flat

    def _once(self, flat: sympy.Expr, axis: int) -> sympy.Expr:
        total = sympy.diff(flat, (X, Y)[axis])
        for symbol in sorted(flat.free_symbols & self._jets.keys(), key=str):
            component, a, b = self._jets[symbol]
            higher = self.symbol(component, a + (axis == 0), b + (axis == 1))
            total += sympy.diff(flat, symbol) * higher
        return sympy.expand(total)

    def euler(self, flat: sympy.Expr, component: sympy.Symbol) -> sympy.Expr:
        """Return the variational derivative with respect to a component."""
        total = sympy.Integer(0)
        for symbol in sorted(flat.free_symbols & self._jets.keys(), key=str):
            of, a, b = self._jets[symbol]
            if of == component:
                total += (-1) ** (a + b) * self.derivative(sympy.diff(flat, symbol), a, b)
        return sympy.expand(total)


def vanishes(expression: sympy.Expr, components: tuple[sympy.Symbol, ...]) -> bool:
    """Tell whether the mean of an expression is zero for every periodic field.

    Examples
    --------
    >>> from lattice.laws.law import symbol
    >>> u, v = symbol("u"), symbol("v")
    >>> vanishes(u**2 * Deriv(u, 1, 0), (u,)), vanishes(u * Deriv(u, 2, 0), (u,))
    (True, False)
    >>> vanishes(u * (Deriv(v, 0, 1) * Deriv(u, 1, 0) - Deriv(v, 1, 0) * Deriv(u, 0, 1)), (u, v))
    True
    """
    jets = Jets(components)
    flat = sympy.expand(jets.flatten(expression))
    if not flat.free_symbols & set(jets._jets):
        return bool(flat == 0)
    return all(jets.euler(flat, component) == 0 for component in components)


def lasting_terms(expression: sympy.Expr, components: tuple[sympy.Symbol, ...]) -> list[sympy.Expr]:
    """Return the terms of an expression whose means do not vanish for every periodic field.

    Terms of equal degree in the fields and with the same parameters are also tried together: they may
    cancel, as `u*v_xx - v*u_xx` does.
    """
    groups: dict[object, list[sympy.Expr]] = {}
    for term in sympy.Add.make_args(sympy.expand(expression)):
        if not vanishes(term, components):
            groups.setdefault(_degree(term, components), []).append(term)
    kept = []
    for terms in groups.values():
        if len(terms) == 1 or not vanishes(sympy.Add(*terms), components):
            kept += terms
    return kept


def _degree(term: sympy.Expr, components: tuple[sympy.Symbol, ...]) -> object:
    """Return a term's parameters and degree in the fields; the term itself where it is no polynomial."""
    jets = Jets(components)
    flat = jets.flatten(term)
    symbols = sorted(flat.free_symbols & set(jets._jets), key=str)
    if not symbols or not flat.is_polynomial(*symbols):
        return term
    constant, _ = term.as_independent(*components, X, Y, as_Add=False)
    return frozenset(constant.free_symbols), int(sympy.Poly(flat, *symbols).total_degree())
