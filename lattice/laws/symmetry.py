"""The symmetries of a law, found from its equations by algebra.

Nothing is assumed about the law. Reflections are found for equations whose terms are even or odd one by
one, as products, powers and functions of one product are; one that needs an addition theorem
(`cos(x + y) + cos(x - y)`) is not seen. A symmetry that holds only where some parameters vanish is found by
`symmetries_at`.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from functools import reduce
from itertools import combinations, product
from operator import xor

import sympy

from lattice.laws.calculus import Fields, TooManyTerms, multiply_out, rebuild, vary, vary_along
from lattice.laws.law import Deriv, Equation, Law, Reflection, Symmetries, X, Y, symbol


def find_symmetries(
    equations: Sequence[Equation], components: Sequence[str], parameters: Sequence[str], dimensions: int
) -> Symmetries:
    """Return what leaves the equations unchanged for every value of the parameters.

    Parameters
    ----------
    equations : sequence of Equation
        In the order of `components`.
    components, parameters : sequence of str
        Names; parameters are taken as arbitrary constants.
    dimensions : int
        1 or 2.
    """
    fields = frozenset(symbol(name) for name in components)
    axes = {"x": X} if dimensions == 1 else {"x": X, "y": Y}
    changes = {name: _changes(equations, name, fields) for name in components}
    invariant = {name for name in components if not any(changes[name].values())}
    return Symmetries(
        homogeneous={name: not any(e.expression.has(axis) for e in equations) for name, axis in axes.items()},
        conserved=tuple(e.component for e in equations if e.evolving and has_zero_mean(e.expression, fields)),
        shiftable=tuple(e.component for e in equations if e.evolving and e.component in invariant),
        gauge=tuple(e.component for e in equations if not e.evolving and e.component in invariant),
        reflections=tuple(_reflections(equations, dimensions)),
        rotations=tuple(_rotations(equations, fields)),
        galilean=any(
            _galilean(equations, e.component, changes[e.component]) for e in equations if e.evolving
        ),
    )


def symmetries_at(law: Law, values: Mapping[str, float]) -> Symmetries:
    """Return the symmetries of `law` where some parameters vanish: those whose value is exactly zero.

    Where an equation is infinite for those values (`u/nu` at nu = 0) they are those for general ones.
    """
    equations = _equations_at(law, values)
    if any(e.expression.has(sympy.zoo, sympy.nan) for e in equations):
        return law.symmetries
    names = [p.name for p in law.parameters]
    return find_symmetries(equations, law.components, names, law.dimensions)


def row_signs(law: Law, reflection: Reflection, values: Mapping[str, float]) -> tuple[int, ...]:
    """Return what a reflection of the law multiplies each equation by.

    An evolving equation has the sign of its component; a constraint may have another.
    """
    bits = _bits(law.components)
    switches = reflection.x * _FLIP_X + reflection.y * _FLIP_Y + reflection.time * _FLIP_TIME
    switches += sum(
        bits[symbol(c)] for c, sign in zip(law.components, reflection.signs, strict=True) if sign < 0
    )
    found = []
    for equation, sign in zip(_equations_at(law, values), reflection.signs, strict=True):
        mask = _mask(multiply_out(equation.expression), bits, set())
        found.append(sign if equation.evolving else -1 if _is_odd(mask & switches) else 1)
    return tuple(found)


def _equations_at(law: Law, values: Mapping[str, float]) -> list[Equation]:
    """Return the equations with the parameters left out whose value is exactly zero."""
    fields = frozenset(symbol(name) for name in law.components)
    zeros = {symbol(p.name): sympy.Integer(0) for p in law.parameters if values.get(p.name, p.default) == 0.0}
    return [Equation(e.component, e.evolving, rebuild(e.expression, zeros, fields)) for e in law.equations]


# -- constants added to a component -------------------------------------------------------------------


def _changes(equations: Sequence[Equation], name: str, fields: Fields) -> dict[str, sympy.Expr]:
    """Return the rate at which each component's equation changes when a constant is added to `name`."""
    return {e.component: multiply_out(vary(e.expression, symbol(name), fields)) for e in equations}


def _galilean(equations: Sequence[Equation], name: str, changes: Mapping[str, sympy.Expr]) -> bool:
    """Tell whether x -> x - r*V*t undoes `name` + V: evolving equations gain r*V*(component)_x."""
    if any(e.expression.has(X) for e in equations):
        return False
    rate = changes[name].coeff(Deriv(symbol(name), 1, 0))
    if rate == 0 or rate.free_symbols & {symbol(e.component) for e in equations} or rate.has(Y):
        return False
    gains = {e.component: rate * Deriv(symbol(e.component), 1, 0) if e.evolving else 0 for e in equations}
    return all(multiply_out(changes[component] - gain) == 0 for component, gain in gains.items())


# -- rotations ----------------------------------------------------------------------------------------


def _rotations(equations: Sequence[Equation], fields: Fields) -> Iterator[tuple[str, str]]:
    """Yield the pairs of evolving components that may be turned, on the lattice as in the continuum.

    A law whose terms would multiply out into too many is taken to have none.
    """
    for first, second in combinations((e for e in equations if e.evolving), 2):
        try:
            if _turns(equations, first, second, fields):
                yield first.component, second.component
        except TooManyTerms:
            continue


def _turns(equations: Sequence[Equation], first: Equation, second: Equation, fields: Fields) -> bool:
    """Tell whether the rates a -> -b, b -> a only turn the equations of the two, likewise."""
    a, b = symbol(first.component), symbol(second.component)
    wanted = {first.component: -second.expression, second.component: first.expression}
    return all(
        multiply_out(vary_along(e.expression, {a: -b, b: a}, fields) - wanted.get(e.component, 0)) == 0
        for e in equations
    )


# -- conserved mean -----------------------------------------------------------------------------------


def has_zero_mean(expression: sympy.Expr, fields: Fields) -> bool:
    """Tell whether the mean of `expression` over the periodic box vanishes for every field.

    It does so on the lattice as well, to rounding: only sums of derivatives count, sines and cosines of one
    coordinate, and products of two derivatives that cancel when a difference is moved from one factor to
    the other, as in `psi_y*om_x - psi_x*om_y`.
    """
    pairs: dict[object, sympy.Expr] = {}
    for term in sympy.Add.make_args(multiply_out(expression)):
        constant, rest = term.as_independent(*fields, X, Y, as_Add=False)
        if isinstance(rest, Deriv) or _is_wave(rest, fields):
            continue
        key, sign = _moved(rest, fields)
        if key is None:
            return False
        pairs[key] = pairs.get(key, sympy.Integer(0)) + sign * constant
    return all(multiply_out(total) == 0 for total in pairs.values())


def _is_wave(factor: sympy.Expr, fields: Fields) -> bool:
    """Tell whether `factor` is a wave: sin or cos of a*x + b*y + constant, or one in x times one in y."""
    if factor.free_symbols & fields:
        return False
    parts = sympy.Mul.make_args(factor)
    axes = [part.free_symbols & {X, Y} for part in parts]
    apart = len(parts) == 1 or (len(parts) == 2 and not axes[0] & axes[1])
    return apart and all(
        isinstance(part, (sympy.sin, sympy.cos)) and _is_linear(part.args[0]) for part in parts
    )


def _is_linear(argument: sympy.Expr) -> bool:
    slopes = [sympy.diff(argument, axis) for axis in (X, Y)]
    return any(slope != 0 for slope in slopes) and not any(slope.free_symbols & {X, Y} for slope in slopes)


def _moved(factor: sympy.Expr, fields: Fields) -> tuple[object, int]:
    """Return a key equal for products of two derivatives whose means agree up to the sign also returned.

    Differences along one axis commute, and moving one to the other factor costs the sign (-1)^order, so the
    mean depends only on the two fields and on which differences act in all. The key of a product whose mean
    vanishes by itself is always the same one with sign 0.
    """
    factors = _factors(factor)
    if len(factors) != 2 or factor.has(X, Y):
        return None, 0
    (f, a, b), (g, c, d) = sorted(map(_difference, factors), key=str)
    if not {f, g} <= fields:
        return None, 0
    if f == g and (a + b) % 2 != (c + d) % 2:
        return "vanishes", 0
    along_x = tuple(sorted(n for n in (a, c) if n))
    along_y = tuple(sorted(n for n in (b, d) if n))
    return (f, g, along_x, along_y), (-1) ** (a + b)


def _factors(factor: sympy.Expr) -> list[sympy.Expr]:
    """Return the factors of a product, a square counting as two."""
    found: list[sympy.Expr] = []
    for part in sympy.Mul.make_args(factor):
        base, power = part.as_base_exp()
        found.extend([base, base] if power == 2 else [part])
    return found


def _difference(factor: sympy.Expr) -> tuple[sympy.Expr, int, int]:
    if isinstance(factor, Deriv):
        inner, a, b = factor.args
        return inner, int(a), int(b)
    return factor, 0, 0


# -- reflections --------------------------------------------------------------------------------------
#
# Every switch (x, y, time, the sign of each component) has a bit. What a reflection does to a product is
# then a mask: the product changes sign where an odd number of the mask's switches are on. For the equations
# to stay unchanged certain masks must be even.

_FLIP_X, _FLIP_Y, _FLIP_TIME = 1, 2, 4
_FIRST_SIGN = 3

_ODD = (sympy.sin, sympy.tanh, sympy.sinh)
_EVEN = (sympy.cos, sympy.cosh, sympy.sech)


def _reflections(equations: Sequence[Equation], dimensions: int) -> Iterator[Reflection]:
    conditions = _conditions(equations)
    flips = product((0, _FLIP_X), (0, _FLIP_Y)[:dimensions], (0, _FLIP_TIME))
    for flip in map(sum, flips):
        for signs in product((0, 1), repeat=len(equations)):
            switches = flip + sum(sign << (_FIRST_SIGN + place) for place, sign in enumerate(signs))
            if switches and not any(_is_odd(mask & switches) for mask in conditions):
                yield Reflection(
                    bool(switches & _FLIP_X),
                    bool(switches & _FLIP_Y),
                    tuple(-1 if sign else 1 for sign in signs),
                    bool(switches & _FLIP_TIME),
                )


def _is_odd(mask: int) -> bool:
    return mask.bit_count() % 2 == 1


def _bits(components: Sequence[str]) -> dict[sympy.Symbol, int]:
    """Return the switch of every symbol that a reflection may change."""
    signs = {symbol(name): 1 << (_FIRST_SIGN + place) for place, name in enumerate(components)}
    return signs | {X: _FLIP_X, Y: _FLIP_Y}


def _conditions(equations: Sequence[Equation]) -> set[int]:
    """Return the masks that must be even for a reflection to leave the equations unchanged."""
    bits = _bits([e.component for e in equations])
    conditions: set[int] = set()
    for equation in equations:
        expression = multiply_out(equation.expression)
        mask = _mask(expression, bits, conditions)
        if equation.evolving and expression != 0:
            conditions.add(mask ^ bits[symbol(equation.component)] ^ _FLIP_TIME)
    return conditions


def _mask(expression: sympy.Expr, bits: Mapping[sympy.Symbol, int], conditions: set[int]) -> int:
    """Return the mask of `expression`; what it takes for it to have one is added to `conditions`."""
    if expression.is_Symbol:
        return bits.get(expression, 0)
    masks = [_mask(arg, bits, conditions) for arg in expression.args]
    if isinstance(expression, Deriv):
        along_x, along_y = (int(order) % 2 for order in expression.args[1:])
        return masks[0] ^ along_x * _FLIP_X ^ along_y * _FLIP_Y
    if expression.is_Mul:
        return reduce(xor, masks)
    if expression.is_Add:
        conditions.update(mask ^ masks[0] for mask in masks)
        return masks[0]
    if isinstance(expression, _ODD):
        return masks[0]
    if isinstance(expression, _EVEN):
        return 0
    if expression.is_Pow and expression.exp.is_Integer:
        return masks[0] if expression.exp % 2 == 1 else 0
    conditions.update(masks)
    return 0
