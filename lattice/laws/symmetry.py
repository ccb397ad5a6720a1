"""The symmetries of a law, found from its equations by substitution.

Each check replaces symbols, brings the result into standard form and compares; nothing is fitted and nothing is
assumed about the law. A symmetry that holds only for special parameter values is found by giving `values`.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from itertools import product

import sympy

from lattice.laws.calculus import Fields, differentiate, multiply_out, rebuild
from lattice.laws.law import X, Y, Deriv, Equation, Law, Reflection, Symmetries, symbol

# A constant added to a component; a dummy cannot collide with a name of the law.
_SHIFT = sympy.Dummy("V", real=True)


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
    evolving = [e.component for e in equations if e.evolving]
    constrained = [e.component for e in equations if not e.evolving]
    axes = dict(zip(("x", "y"), (X, Y)[:dimensions]))
    return Symmetries(
        homogeneous={
            name: not any(e.expression.has(axis) for e in equations) for name, axis in axes.items()
        },
        conserved=tuple(e.component for e in equations if e.evolving and has_zero_mean(e.expression, fields)),
        shiftable=tuple(name for name in evolving if _shift_invariant(equations, name, fields)),
        gauge=tuple(name for name in constrained if _shift_invariant(equations, name, fields)),
        reflections=tuple(_reflections(equations, fields, dimensions)),
        galilean=any(_galilean(equations, name, fields) for name in evolving),
    )


def symmetries_at(law: Law, values: Mapping[str, float]) -> Symmetries:
    """Return the symmetries of `law` where some parameters vanish: those whose value is exactly zero."""
    fields = frozenset(symbol(name) for name in law.components)
    zeros = {symbol(p.name): sympy.Integer(0) for p in law.parameters if values.get(p.name, p.default) == 0.0}
    equations = [
        Equation(e.component, e.evolving, rebuild(e.expression, zeros, fields)) for e in law.equations
    ]
    names = [p.name for p in law.parameters]
    return find_symmetries(equations, law.components, names, law.dimensions)


def _vanishes(expression: sympy.Expr) -> bool:
    return bool(multiply_out(expression) == 0)


# -- constants added to a component -------------------------------------------------------------------


def _shifted(equations: Sequence[Equation], name: str, fields: Fields) -> list[sympy.Expr]:
    """Return by how much each expression changes when a constant is added to component `name`."""
    replacement = {symbol(name): symbol(name) + _SHIFT}
    return [rebuild(e.expression, replacement, fields) - e.expression for e in equations]


def _shift_invariant(equations: Sequence[Equation], name: str, fields: Fields) -> bool:
    return all(_vanishes(change) for change in _shifted(equations, name, fields))


def _galilean(equations: Sequence[Equation], name: str, fields: Fields) -> bool:
    """Tell whether `name` + V is undone by x -> x - r*V*t: every evolving equation gains r*V*(component)_x."""
    changes = _shifted(equations, name, fields)
    own = next(change for e, change in zip(equations, changes) if e.component == name)
    rate = multiply_out(own).coeff(Deriv(symbol(name), 1, 0))
    if rate == 0 or rate.free_symbols & (fields | {X, Y}):
        return False
    return all(
        _vanishes(change - rate * Deriv(symbol(e.component), 1, 0)) if e.evolving else _vanishes(change)
        for e, change in zip(equations, changes)
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
    return all(_vanishes(total) for total in pairs.values())


def _is_wave(factor: sympy.Expr, fields: Fields) -> bool:
    """Tell whether `factor` is sin or cos of (constant * x + constant * y + constant), not a constant itself."""
    if not isinstance(factor, (sympy.sin, sympy.cos)) or factor.free_symbols & fields:
        return False
    slopes = [sympy.diff(factor.args[0], axis) for axis in (X, Y)]
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


def _reflections(equations: Sequence[Equation], fields: Fields, dimensions: int) -> Iterator[Reflection]:
    flips = product((False, True), repeat=dimensions)
    for flip, time in product(flips, (False, True)):
        in_x, in_y = flip[0], dimensions == 2 and flip[1]
        for signs in product((1, -1), repeat=len(equations)):
            identity = not (in_x or in_y or time) and all(sign == 1 for sign in signs)
            candidate = Reflection(in_x, in_y, signs, time)
            if not identity and _unchanged(equations, candidate, fields):
                yield candidate


def _unchanged(equations: Sequence[Equation], candidate: Reflection, fields: Fields) -> bool:
    signs = {symbol(e.component): sign for e, sign in zip(equations, candidate.signs)}
    for equation, sign in zip(equations, candidate.signs):
        image = _image(equation.expression, candidate, signs, fields)
        if equation.evolving:
            expected = [-sign if candidate.time else sign]
        else:
            expected = [1, -1]
        if not any(_vanishes(image - factor * equation.expression) for factor in expected):
            return False
    return True


def _image(
    expression: sympy.Expr, candidate: Reflection, signs: Mapping[sympy.Symbol, int], fields: Fields
) -> sympy.Expr:
    """Return the expression written in the reflected fields and coordinates."""
    if expression == X:
        return -X if candidate.x else X
    if expression == Y:
        return -Y if candidate.y else Y
    if expression.is_Symbol:
        return signs.get(expression, 1) * expression
    if not expression.args:
        return expression
    if isinstance(expression, Deriv):
        inner, a, b = expression.args
        odd = (candidate.x and a % 2 == 1) != (candidate.y and b % 2 == 1)
        image = differentiate(_image(inner, candidate, signs, fields), int(a), int(b), fields)
        return -image if odd else image
    return expression.func(*(_image(arg, candidate, signs, fields) for arg in expression.args))
