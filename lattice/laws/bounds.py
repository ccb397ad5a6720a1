"""Arithmetic on formulas that stays small, real and smooth whatever the text says.

Each function returns the result or raises FormulaError without a place in the text, which the parser adds.
Limits are checked before the arithmetic, so that no input costs time or memory.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import sympy

from lattice.errors import FormulaError
from lattice.laws.calculus import Fields, count_terms
from lattice.laws.law import Deriv, X, Y
from lattice.laws.names import FUNCTIONS

POWER_AT_MOST = 32
BITS_AT_MOST = 2000
NUMBER_AT_MOST = 1e100
# SymPy looks for periods and signs in the argument of a function, at a cost that grows fast with its size.
ARGUMENT_TERMS_AT_MOST = 12
ARGUMENT_PARTS_AT_MOST = 100
UNCERTAIN_PARTS_AT_MOST = 20

_FUNCTIONS: dict[str, Callable[..., sympy.Expr]] = {name: getattr(sympy, name) for name in FUNCTIONS}
_NUMERIC: dict[type, Callable[[float], float]] = {
    sympy.sin: math.sin,
    sympy.cos: math.cos,
    sympy.exp: math.exp,
    sympy.log: math.log,
    sympy.tanh: math.tanh,
    sympy.sech: lambda value: 1.0 / math.cosh(value),
    sympy.sinh: math.sinh,
    sympy.cosh: math.cosh,
}
_HYPERBOLIC = ("tanh", "sech", "sinh", "cosh")
_SMOOTH = (*_NUMERIC, Deriv)


def bounded(value: sympy.Expr) -> sympy.Expr:
    """Return `value` unless its powers or its numbers are beyond the limits."""
    if _highest_power(value) > POWER_AT_MOST or _bits(value) > BITS_AT_MOST:
        raise FormulaError(
            f"powers must stay at or below {POWER_AT_MOST} and numbers short; simplify the formula"
        )
    return value


def inverse(value: sympy.Expr) -> sympy.Expr:
    """Return 1/value; a divisor may hold components but neither zero nor derivatives."""
    if value == 0:
        raise FormulaError("a divisor must not be zero")
    if value.has(Deriv):
        raise FormulaError("a divisor must not contain derivatives; multiply the equation by it")
    return bounded(value**-1)


def power(base: sympy.Expr, exponent: sympy.Expr, fields: Fields) -> sympy.Expr:
    """Return base**exponent: whole numbers for components and coordinates, any number for constants."""
    if not exponent.is_Rational:
        raise FormulaError("an exponent must be a number; write exp( ) for other powers")
    if not exponent.is_Integer and base.free_symbols & (fields | {X, Y}):
        message = f"the exponent of a component must be a whole number, got {exponent}"
        raise FormulaError(f"{message}; write sqrt( ) for a root")
    size = math.ceil(abs(exponent))
    if size * _highest_power(base) > POWER_AT_MOST or size * _bits(base) > BITS_AT_MOST:
        raise FormulaError(
            f"powers must stay at or below {POWER_AT_MOST} and numbers short; simplify the formula"
        )
    if exponent < 0:
        return inverse(base) ** -exponent
    return smooth(base**exponent)


def apply(name: str, argument: sympy.Expr) -> sympy.Expr:
    """Return the function `name` of `argument`.

    SymPy may compare numbers while it simplifies, to as many digits as that takes: numbers are sized first.
    """
    _check_argument(name, argument)
    if not argument.free_symbols:
        as_float(argument)
    return smooth(_FUNCTIONS[name](argument))


def _check_argument(name: str, argument: sympy.Expr) -> None:
    parts = sum(1 for _ in sympy.preorder_traversal(argument))
    if parts > ARGUMENT_PARTS_AT_MOST or count_terms(argument) > ARGUMENT_TERMS_AT_MOST:
        raise FormulaError(
            f"the argument of a function must multiply out into at most {ARGUMENT_TERMS_AT_MOST} terms; "
            f"simplify what {name} is taken of"
        )
    if name in _HYPERBOLIC and parts > UNCERTAIN_PARTS_AT_MOST and not argument.is_real:
        # SymPy then takes the argument apart into real and imaginary parts, at any cost.
        raise FormulaError(f"{name} must be taken of a short or certainly real argument; simplify it")
    if name == "exp" and argument.has(sympy.log):
        # SymPy turns exp(10**9*log(9)) into the whole number 9**(10**9), now or when it multiplies out later.
        raise FormulaError("exp( ) must not be taken of log( ); write a power")


def smooth(value: sympy.Expr) -> sympy.Expr:
    """Return `value` if it is real and analytic.

    SymPy may have turned sqrt(u**2) into a modulus or log(0) into infinity.
    """
    for part in sympy.preorder_traversal(value):
        if part.is_Function and not isinstance(part, _SMOOTH):
            raise FormulaError(
                f"a law must be smooth, but this gives {part.func.__name__}; write it without root"
            )
        if part.is_Atom and not (part.is_Symbol or part.is_Rational or part in (sympy.pi, sympy.E)):
            raise FormulaError(
                "a law must be made of real, finite numbers, but this gives an infinite or complex one"
            )
        if part.args and not part.free_symbols:
            as_float(part)
    return value


def as_float(value: sympy.Expr) -> float:
    """Return an expression without symbols as a float.

    Raises
    ------
    FormulaError
        Where it is not real or not within `NUMBER_AT_MOST`.
    """
    try:
        number = _evaluate(value)
    except (ArithmeticError, ValueError):
        number = math.nan
    if not (number == 0 or 1 / NUMBER_AT_MOST <= abs(number) <= NUMBER_AT_MOST):
        limit = f"{NUMBER_AT_MOST:g}"
        raise FormulaError(
            f"a number must be real and between 1/{limit} and {limit} in size; rescale the formula"
        )
    return number


def _evaluate(value: sympy.Expr) -> float:
    if value.is_Rational:
        return int(value.p) / int(value.q)
    if value.is_NumberSymbol:
        return float(value)
    inner = [_evaluate(arg) for arg in value.args]
    if value.is_Add:
        return math.fsum(inner)
    if value.is_Mul:
        return math.prod(inner)
    if value.is_Pow:
        return math.pow(*inner)
    if type(value) in _NUMERIC:
        return _NUMERIC[type(value)](*inner)
    raise ValueError(f"{value} is not a real number")


def _highest_power(value: sympy.Expr) -> int:
    exponents = [abs(part.exp) for part in value.atoms(sympy.Pow) if part.exp.is_Rational]
    return max((math.ceil(exponent) for exponent in exponents), default=1)


def _bits(value: sympy.Expr) -> int:
    integers = (int(part) for n in value.atoms(sympy.Rational) for part in (n.p, n.q))
    return max((abs(integer).bit_length() for integer in integers), default=1)
