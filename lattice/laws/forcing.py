"""Whether the explicit x and y of a law repeat after the lengths of a box."""

from __future__ import annotations

from collections.abc import Mapping

import sympy

from lattice.laws.law import Deriv, Law, X, Y, symbol

# Values at x and at x + length agree to this part of the largest: a length such as 2 pi/3 is rounded.
_TOLERANCE = 1e-9

# Irrational parts of the length, so that no wave a law may hold has a node at all of them.
_PLACES = (0.0, 0.1180339887, 0.3819660113, 0.6457513111, 0.8284271247)


def find_aperiodic_axes(law: Law, values: Mapping[str, float]) -> tuple[str, ...]:
    """Return the axes ("x", "y") along which the equations do not repeat after the length of the box.

    Parameters
    ----------
    law : Law
    values : dict of str to float
        `length_x` (and `length_y`) and the parameters; a parameter left out has its default.

    Examples
    --------
    >>> from math import pi
    >>> from lattice.laws.catalogue import load_law
    >>> law = load_law("kolmogorov")
    >>> find_aperiodic_axes(law, {"length_x": 1.0, "length_y": 2 * pi, "n": 4.0})
    ()
    >>> find_aperiodic_axes(law, {"length_x": 1.0, "length_y": 5.0, "n": 4.0})
    ('y',)
    """
    held = [axis for axis, homogeneous in law.symmetries.homogeneous.items() if not homogeneous]
    return tuple(axis for axis in held if not _repeats(law, {**law.defaults, **values}, axis))


def _repeats(law: Law, values: Mapping[str, float], axis: str) -> bool:
    along, across = (X, Y) if axis == "x" else (Y, X)
    length = values[f"length_{axis}"]
    numbers = {symbol(p.name): values[p.name] for p in law.parameters}
    for equation in law.equations:
        plain = _without_fields(equation.expression, law).xreplace(numbers)
        here, there = (
            [float(plain.subs({along: (turn + place) * length, across: place})) for place in _PLACES]
            for turn in (0, 1)
        )
        largest = max(map(abs, here))
        if not all(abs(a - b) <= _TOLERANCE * largest for a, b in zip(here, there, strict=True)):
            return False
    return True


def _without_fields(expression: sympy.Expr, law: Law) -> sympy.Expr:
    """Put a number of its own for every component and derivative; x, y and parameters are left."""
    parts = [*sorted(expression.atoms(Deriv), key=str), *(symbol(name) for name in law.components)]
    numbers = {part: sympy.Float(0.7 + 0.1 * place) for place, part in enumerate(parts)}
    return expression.xreplace(numbers)
