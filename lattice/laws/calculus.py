"""The algebra of `Deriv`: derivatives kept unevaluated in one standard form.

In that form a `Deriv` holds one product or function of components, without constant factors, and never
sits directly inside another one; sums are taken apart.
"""

from __future__ import annotations

from collections.abc import Mapping, Set
from math import comb

import sympy

from lattice.errors import FormulaError
from lattice.laws.law import Deriv, X, Y

# Room for every published law by a wide margin, yet worked on in seconds at most.
TERMS_AT_MOST = 200

Fields = Set[sympy.Symbol]


class TooManyTerms(FormulaError):
    """An expression whose products would multiply out into more than `TERMS_AT_MOST` terms."""

    def __init__(self) -> None:
        super().__init__(f"a formula must multiply out into at most {TERMS_AT_MOST} terms; simplify it")


def count_terms(expression: sympy.Expr) -> int:
    """Return how many terms `expression` has once multiplied out, without doing so.

    Raises
    ------
    TooManyTerms
        When the number is above `TERMS_AT_MOST`, here or inside any argument.
    """
    if not expression.args:
        return 1
    inner = [count_terms(arg) for arg in expression.args]
    count = _combined(expression, inner)
    if count > TERMS_AT_MOST:
        raise TooManyTerms
    return count


def _combined(expression: sympy.Expr, inner: list[int]) -> int:
    if expression.is_Add:
        return sum(inner)
    if expression.is_Mul:
        count = 1
        for factor in inner:
            count *= factor
        return count
    if expression.is_Pow and expression.exp.is_Integer:
        power = min(abs(int(expression.exp)), TERMS_AT_MOST)
        return comb(inner[0] + power - 1, power)
    return 1


def multiply_out(expression: sympy.Expr) -> sympy.Expr:
    """Return `expression` as a sum of products; raises TooManyTerms instead of growing without end."""
    count_terms(expression)
    return expression.expand(power_base=False, power_exp=False, log=False)


def differentiate(expression: sympy.Expr, a: int, b: int, fields: Fields) -> sympy.Expr:
    """Return the derivative of order `a` in x and `b` in y, in standard form.

    Parameters
    ----------
    expression : sympy.Expr
        In standard form itself.
    a, b : int
        Orders, >= 0.
    fields : set of sympy.Symbol
        The components; every other symbol except x and y is a constant.

    Examples
    --------
    >>> from lattice.laws.law import symbol
    >>> u, nu = symbol("u"), symbol("nu")
    >>> differentiate(nu * u**2 + u, 1, 0, {u})
    nu*Deriv(u**2, 1, 0) + Deriv(u, 1, 0)
    """
    if a == 0 and b == 0:
        return expression
    if not expression.free_symbols & fields:
        return sympy.diff(sympy.diff(expression, X, a), Y, b)
    terms = sympy.Add.make_args(multiply_out(expression))
    return sympy.Add(*(_differentiate_term(term, a, b, fields) for term in terms))


def _differentiate_term(term: sympy.Expr, a: int, b: int, fields: Fields) -> sympy.Expr:
    constant, rest = term.as_independent(*fields, X, Y, as_Add=False)
    if not rest.free_symbols & fields:
        return constant * sympy.diff(sympy.diff(rest, X, a), Y, b)
    if isinstance(rest, Deriv):
        inner, c, d = rest.args
        return constant * Deriv(inner, c + a, d + b)
    return constant * Deriv(rest, a, b)


def order_of(expression: sympy.Expr) -> tuple[int, int, int]:
    """Return the highest derivative order in x, in y and in total; nested derivatives add up."""
    inner = [order_of(arg) for arg in expression.args]
    highest = tuple(max(orders) for orders in zip(*inner, strict=True)) if inner else (0, 0, 0)
    if isinstance(expression, Deriv):
        a, b = int(expression.args[1]), int(expression.args[2])
        return highest[0] + a, highest[1] + b, highest[2] + a + b
    return highest[0], highest[1], highest[2]


def rebuild(
    expression: sympy.Expr, replacements: dict[sympy.Symbol, sympy.Expr], fields: Fields
) -> sympy.Expr:
    """Return `expression` with symbols replaced and every derivative brought into standard form again."""
    if expression.is_Symbol:
        return replacements.get(expression, expression)
    if not expression.args:
        return expression
    if isinstance(expression, Deriv):
        inner = rebuild(expression.args[0], replacements, fields)
        return differentiate(inner, int(expression.args[1]), int(expression.args[2]), fields)
    return expression.func(*(rebuild(arg, replacements, fields) for arg in expression.args))


def vary(expression: sympy.Expr, field: sympy.Symbol, fields: Fields) -> sympy.Expr:
    """Return the rate at which `expression` changes when a constant is added to `field` everywhere.

    Examples
    --------
    >>> from lattice.laws.law import symbol
    >>> u = symbol("u")
    >>> vary(Deriv(u**2, 1, 0) / 2 + u**3, u, {u})
    3*u**2 + Deriv(u, 1, 0)
    """
    return vary_along(expression, {field: sympy.Integer(1)}, fields)


def vary_along(
    expression: sympy.Expr, changes: Mapping[sympy.Symbol, sympy.Expr], fields: Fields
) -> sympy.Expr:
    """Return the rate at which `expression` changes when the components change at the rates `changes`.

    Examples
    --------
    >>> from lattice.laws.law import symbol
    >>> u, v = symbol("u"), symbol("v")
    >>> vary_along(Deriv(u, 1, 0) * v, {u: -v, v: u}, {u, v})
    u*Deriv(u, 1, 0) - v*Deriv(v, 1, 0)
    """
    terms = (t for t in sympy.Add.make_args(expression) if t.free_symbols & changes.keys())
    return sympy.Add(*(_vary_term(term, changes, fields) for term in terms))


def _vary_term(term: sympy.Expr, changes: Mapping[sympy.Symbol, sympy.Expr], fields: Fields) -> sympy.Expr:
    if isinstance(term, Deriv):
        inner, a, b = term.args
        return differentiate(vary_along(inner, changes, fields), int(a), int(b), fields)
    stand_ins = {part: sympy.Dummy(real=True) for part in _outermost_derivatives(term)}
    plain = term.xreplace(stand_ins)
    back = {dummy: part for part, dummy in stand_ins.items()}
    rates = {**changes, **{dummy: vary_along(part, changes, fields) for part, dummy in stand_ins.items()}}
    total = sympy.Add(*(sympy.diff(plain, by) * rate for by, rate in rates.items() if rate != 0))
    return total.xreplace(back)


def _outermost_derivatives(expression: sympy.Expr) -> set[sympy.Expr]:
    if isinstance(expression, Deriv):
        return {expression}
    return set().union(*(_outermost_derivatives(arg) for arg in expression.args))


def conserve(expression: sympy.Expr, fields: Fields) -> sympy.Expr:
    """Rewrite every term `f(u)*u_x` or `f(u)*u_y`, f a polynomial, as the derivative of its antiderivative.

    Examples
    --------
    >>> from lattice.laws.law import symbol
    >>> u = symbol("u")
    >>> conserve(u * Deriv(u, 1, 0), {u})
    Deriv(u**2, 1, 0)/2
    """
    terms = sympy.Add.make_args(_distribute(expression))
    return sympy.Add(*(_conserve_term(term, fields) for term in terms))


def _distribute(expression: sympy.Expr) -> sympy.Expr:
    """Multiply out the sums that hold derivatives, and only those."""
    count_terms(expression)
    terms = (_distribute_term(term) for term in sympy.Add.make_args(expression))
    return sympy.Add(*terms)


def _distribute_term(term: sympy.Expr) -> sympy.Expr:
    for factor in sympy.Mul.make_args(term):
        if factor.is_Add and factor.has(Deriv):
            others = term / factor
            return sympy.Add(*(_distribute_term(others * part) for part in factor.args))
    return term


def _conserve_term(term: sympy.Expr, fields: Fields) -> sympy.Expr:
    for factor in sympy.Mul.make_args(term):
        if not isinstance(factor, Deriv) or factor.args[0] not in fields:
            continue
        field, a, b = factor.args
        rest = term / factor
        others = (rest.free_symbols & fields) - {field}
        if (a, b) in ((1, 0), (0, 1)) and not others and _is_polynomial(rest, field):
            antiderivative = sympy.Poly(rest, field).integrate().as_expr()
            return differentiate(antiderivative, int(a), int(b), fields)
    return term


def _is_polynomial(rest: sympy.Expr, field: sympy.Symbol) -> bool:
    if rest.has(Deriv) or rest.free_symbols & {X, Y}:
        return False
    return bool(rest.is_polynomial(field))
