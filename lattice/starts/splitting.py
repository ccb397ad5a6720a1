"""Split a law for spectral time stepping: a constant-coefficient linear part and the rest.

Every expression `G` becomes `sum_j L_j d^a_j u_j + sum_o d^o P_o(u, d u, ...; x, y) + F(x, y)`, where the
`L_j` are constants, the `P_o` pointwise products and functions, and `F` is free of the fields. The
splitting is symbolic and is done once for each law; numbers enter in `lattice.starts.operator`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any, cast

import sympy

from lattice.errors import InputError
from lattice.laws.law import Deriv, Equation, Law

CACHE_KEY = "spectral splitting"


@dataclass(frozen=True, order=True)
class Derivative:
    """The a-th derivative in x and b-th in y of one component, given by its index."""

    component: int
    a: int
    b: int


@dataclass(frozen=True)
class LinearTerm:
    """`coefficient(parameters) * derivative` in one equation."""

    equation: int
    derivative: Derivative
    coefficient: sympy.Expr


@dataclass(frozen=True)
class PointwiseTerm:
    """The a-th derivative in x and b-th in y of a pointwise expression, in one equation."""

    equation: int
    a: int
    b: int
    expression: sympy.Expr


@dataclass(frozen=True)
class Splitting:
    """A law, split for spectral time stepping.

    Parameters
    ----------
    linear : tuple of LinearTerm
        The constant-coefficient part.
    products : tuple of PointwiseTerm
        Terms that depend on the fields; each expression is in the symbols of `inputs`.
    forcing : tuple of PointwiseTerm
        Terms that do not.
    inputs : tuple of Derivative
        The derivatives that `products` are computed from.
    degree : int or None
        Degree of the products as polynomials of the fields (a coordinate counts as one more factor);
        None where a product is not a polynomial.
    evaluate_products, evaluate_forcing : callable
        `(inputs, x, y, parameters) -> list of arrays`, one for each term, from sequences of arrays.
    """

    linear: tuple[LinearTerm, ...]
    products: tuple[PointwiseTerm, ...]
    forcing: tuple[PointwiseTerm, ...]
    inputs: tuple[Derivative, ...]
    degree: int | None
    evaluate_products: Callable[..., Sequence[Any]]
    evaluate_forcing: Callable[..., Sequence[Any]]


def split(law: Law) -> Splitting:
    """Return the splitting of a law, computed once for each law.

    Raises
    ------
    InputError
        Where a constraint equation is not linear with constant coefficients.
    """
    if CACHE_KEY not in law._cache:
        law._cache[CACHE_KEY] = _split(law)
    return cast(Splitting, law._cache[CACHE_KEY])


def _split(law: Law) -> Splitting:
    reader = _Reader(law)
    linear: list[LinearTerm] = []
    products: list[PointwiseTerm] = []
    forcing: list[PointwiseTerm] = []
    for row, equation in enumerate(law.equations):
        rest: dict[tuple[int, int], sympy.Expr] = {}
        for coefficient, factor, a, b in reader.terms(equation.expression):
            if factor in reader.index:
                linear.append(LinearTerm(row, Derivative(reader.index[factor], a, b), coefficient))
            else:
                rest[a, b] = rest.get((a, b), sympy.Integer(0)) + coefficient * factor
        for (a, b), expression in sorted(rest.items()):
            varying, fixed = reader.separate(reader.flatten(expression))
            if varying != 0:
                _refuse_constraint(equation, law)
                products.append(PointwiseTerm(row, a, b, varying))
            if fixed != 0:
                forcing.append(PointwiseTerm(row, a, b, fixed))
    inputs = tuple(sorted(reader.inputs))
    symbols = [reader.inputs[key] for key in inputs]
    return Splitting(
        tuple(linear),
        tuple(products),
        tuple(forcing),
        inputs,
        reader.degree([term.expression for term in products], symbols),
        _compile([term.expression for term in products], symbols, law),
        _compile([term.expression for term in forcing], [], law),
    )


def _refuse_constraint(equation: Equation, law: Law) -> None:
    if not equation.evolving:
        row = law.components.index(equation.component)
        raise InputError(
            f"time stepping needs constraint equations that are linear with constant coefficients, got "
            f"'{law.text[row]}' for {equation.component}; start from a state, waves or an array instead"
        )


class _Reader:
    """Reads the terms of a law's expressions and collects the derivatives that products need."""

    def __init__(self, law: Law) -> None:
        self.components = law.components
        symbols = set().union(*(e.expression.free_symbols for e in law.equations))
        self.index = {s: law.components.index(s.name) for s in symbols if s.name in law.components}
        self.coordinates = {s for s in symbols if s.name in ("x", "y")}
        self.inputs: dict[Derivative, sympy.Symbol] = {}
        self._of_input: dict[sympy.Symbol, Derivative] = {}

    def terms(
        self, expression: sympy.Expr, coefficient: sympy.Expr = sympy.S.One, a: int = 0, b: int = 0
    ) -> Iterator[tuple[sympy.Expr, sympy.Expr, int, int]]:
        """Yield (constant, factor, a, b) whose sum of constant * d^(a+b) factor is the expression."""
        varying = {*self.index, *self.coordinates}
        for term in sympy.Add.make_args(sympy.expand(expression)):
            constant, factor = term.as_independent(*varying, as_Add=False)
            if isinstance(factor, Deriv):
                inner, more_a, more_b = factor.args
                yield from self.terms(inner, coefficient * constant, a + int(more_a), b + int(more_b))
            elif factor != 1 or (a == 0 and b == 0):
                yield coefficient * constant, factor, a, b

    def flatten(self, expression: sympy.Expr) -> sympy.Expr:
        """Return the expression in input symbols: inner derivatives of products by the chain rule."""
        if expression in self.index:
            return self._input(Derivative(self.index[expression], 0, 0))
        if isinstance(expression, Deriv):
            inner, a, b = expression.args
            flat = self.flatten(inner)
            for axis, times in ((0, int(a)), (1, int(b))):
                for _ in range(times):
                    flat = self._total_derivative(flat, axis)
            return flat
        if not expression.args:
            return expression
        return expression.func(*(self.flatten(arg) for arg in expression.args))

    def separate(self, expression: sympy.Expr) -> tuple[sympy.Expr, sympy.Expr]:
        """Return the parts of a flat expression with and without fields."""
        fixed, varying = sympy.expand(expression).as_independent(*self._of_input, as_Add=True)
        return varying, fixed

    def degree(self, expressions: list[sympy.Expr], symbols: list[sympy.Symbol]) -> int | None:
        """Return the largest polynomial degree of flat expressions, None where one is no polynomial."""
        largest = 0
        for expression in expressions:
            for term in sympy.Add.make_args(sympy.expand(expression)):
                if not term.is_polynomial(*symbols):
                    return None
                factors = sympy.Poly(term, *symbols).total_degree()
                largest = max(largest, factors + bool(term.free_symbols & self.coordinates))
        return largest

    def _input(self, key: Derivative) -> sympy.Symbol:
        if key not in self.inputs:
            symbol = sympy.Symbol(f"field_{key.component}_{key.a}_{key.b}", real=True)
            self.inputs[key], self._of_input[symbol] = symbol, key
        return self.inputs[key]

    def _total_derivative(self, flat: sympy.Expr, axis: int) -> sympy.Expr:
        total = sum((sympy.diff(flat, c) for c in self.coordinates if c.name == "xy"[axis]), sympy.Integer(0))
        for symbol in sorted(flat.free_symbols & self._of_input.keys(), key=str):
            key = self._of_input[symbol]
            higher = Derivative(key.component, key.a + (axis == 0), key.b + (axis == 1))
            total += sympy.diff(flat, symbol) * self._input(higher)
        return total


def _compile(
    expressions: list[sympy.Expr], symbols: list[sympy.Symbol], law: Law
) -> Callable[..., Sequence[Any]]:
    """Return `(inputs, x, y, parameters) -> values`; all names are replaced by our own first."""
    parameters = [sympy.Symbol(f"parameter_{n}", real=True) for n, _ in enumerate(law.parameters)]
    coordinates = [sympy.Symbol(f"coordinate_{axis}", real=True) for axis in "xy"]
    ours = {p.name: s for p, s in zip(law.parameters, parameters, strict=True)}
    ours |= dict(zip("xy", coordinates, strict=True))
    renamed = [e.xreplace({s: ours[s.name] for s in e.free_symbols if s.name in ours}) for e in expressions]
    arguments = [symbols, *coordinates, parameters]
    return cast("Callable[..., Sequence[Any]]", sympy.lambdify(arguments, renamed, modules="numpy", cse=True))
