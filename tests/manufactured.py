"""Manufactured solutions [1]_: smooth fields, and what a law's equations make of them, exactly.

The field is a few waves with rational phases. SymPy puts it into the law's equations, which gives the
residual in the continuum; the lattice's residual must tend to it at the nominal order.

References
----------
.. [1] K. Salari, P. Knupp, "Code verification by the method of manufactured solutions", SAND2000-1444 (2000).
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache

import numpy as np
import sympy

from lattice.geometry.lattice import Lattice
from lattice.laws.law import Deriv, Law, X, Y
from tests.problems import Array, evaluate, law_of, values_of

T = sympy.Symbol("t", real=True)


def waves(law: Law, varies: str, refined: str) -> list[sympy.Expr]:
    """Return a field per component: a wave along the axes in `varies`, shorter ones along those refined."""
    angles = dict(zip("txy", sympy.symbols("turn_t turn_x turn_y", real=True), strict=True))
    fields = []
    for c in range(len(law.components)):
        phase = sum((angles[a] for a in varies), sympy.Rational(2 + c, 5))
        total = sympy.Rational(1, 5) * sympy.cos(phase)
        for k, axis in enumerate(refined):
            total += sympy.sin(2 * angles[axis] + sympy.Rational(3 * k + c, 7)) / (8 + k)
        turns = {angles["t"]: sympy.Symbol("rate_t") * T, angles["x"]: sympy.Symbol("rate_x") * X,
                 angles["y"]: sympy.Symbol("rate_y") * Y}  # fmt: skip
        fields.append(total.xreplace(turns))
    return fields


def in_the_continuum(expression: sympy.Expr, fields: dict[sympy.Symbol, sympy.Expr]) -> sympy.Expr:
    """Replace components by fields and every `Deriv` by the derivative it stands for."""
    if isinstance(expression, Deriv):
        inner, a, b = expression.args
        return sympy.diff(in_the_continuum(inner, fields), X, int(a), Y, int(b))
    if expression in fields:
        return fields[expression]
    if not expression.args:
        return expression
    return expression.func(*(in_the_continuum(arg, fields) for arg in expression.args))


@cache
def functions(
    name: str, varies: str, refined: str
) -> tuple[list[Callable[..., Array]], list[Callable[..., Array]]]:
    """Return the field's and the residual's components as functions of t, x, y and the scalars."""
    law = law_of(name)
    names = [*values_of(law), "rate_t", "rate_x", "rate_y"]
    arguments = [T, X, Y, *(sympy.Symbol(n, real=not n.startswith("rate")) for n in names)]
    fields = waves(law, varies, refined)
    by_symbol = {sympy.Symbol(c, real=True): f for c, f in zip(law.components, fields, strict=True)}
    exact = []
    for equation, field in zip(law.equations, fields, strict=True):
        total = in_the_continuum(equation.expression, by_symbol)
        if equation.evolving:
            total += sympy.diff(field, T) - _frame(law, equation.component, fields)
        exact.append(total)
    make = [sympy.lambdify(arguments, e, "numpy", cse=True) for e in (*fields, *exact)]
    return make[: len(fields)], make[len(fields) :]


def _frame(law: Law, component: str, fields: list[sympy.Expr]) -> sympy.Expr:
    """Return what the moving and turning frame and the source add to u_t of an evolving equation."""
    field = fields[law.components.index(component)]
    total = sympy.Integer(0)
    if law.rotating_pair is not None:
        first, second = (fields[law.components.index(c)] for c in law.rotating_pair)
        turned = {law.rotating_pair[0]: second, law.rotating_pair[1]: -first}
        total += sympy.Symbol("rotation", real=True) * turned.get(component, 0)
    for axis, name in ((X, "x"), (Y, "y"))[: law.dimensions]:
        if law.symmetries.homogeneous[name]:
            total += sympy.Symbol(f"drift_{name}", real=True) * sympy.diff(field, axis)
    if f"source_{component}" in values_of(law):
        total += sympy.Symbol(f"source_{component}", real=True)
    return total


def errors(name: str, lattice: Lattice, varies: str, refined: str) -> Array:
    """Return the root mean square error of every equation's residual on a lattice.

    Parameters
    ----------
    name : str
        Of the law.
    lattice : Lattice
    varies : str
        Axes of "txy" along which the field varies.
    refined : str
        Those along which it has shorter waves, too: the lattice's error on the others is far smaller.
    """
    law = law_of(name)
    values = values_of(law)
    rates = [2.0 * np.pi / values[key] for key in ("period", "length_x", "length_y")]
    numbers = [*values.values(), *rates]
    steps = [
        values[key] / n for key, n in zip(("period", "length_y", "length_x"), lattice.shape, strict=True)
    ]
    t, y, x = np.meshgrid(
        *(h * np.arange(n) for h, n in zip(steps, lattice.shape, strict=True)), indexing="ij"
    )
    fields, exact = functions(name, varies, refined)
    whole = np.stack([np.broadcast_to(f(t, x, y, *numbers), t.shape) for f in fields], axis=-1)
    found = evaluate(name, "residual", lattice, values, whole)
    # An evolving row belongs to the midpoint below its level, a constraint to the node.
    half = 0.5 * steps[0] if lattice.nt > 1 else 0.0
    places = [t - half if evolving else t for evolving in law.evolving]
    wanted = [np.broadcast_to(f(at, x, y, *numbers), t.shape) for f, at in zip(exact, places, strict=True)]
    difference = found - np.stack(wanted, axis=-1)
    return np.asarray(np.sqrt((difference**2).mean(axis=(0, 1, 2))))
