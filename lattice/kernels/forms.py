"""Forms: what a kernel computes, derived from a law by SymPy and free of any lattice.

A form has input fields and one output per component. An output is `evolving`, time differences of one
input component plus midpoint values of an expression, or `nodal`, an expression at the nodes. The forms
of a law are its residual, tangent (exact linearisation), adjoint (exact discrete transpose of the
tangent), curvature (second derivative) and the derivative with respect to any scalar.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import sympy

from lattice.laws.law import Deriv, Law

X, Y = sympy.Symbol("x", real=True), sympy.Symbol("y", real=True)
LENGTHS = {"length_x": 0, "length_y": 1}


BySymbol = Callable[[sympy.Symbol], sympy.Expr]
ByAtom = Callable[[sympy.Expr], sympy.Expr]


@dataclass(frozen=True)
class Output:
    """One output component of a form.

    Parameters
    ----------
    expression : sympy.Expr
        In the symbols of the form's input fields, scalars, coordinates and `Deriv`.
    evolving : bool
        True: collocated at the midpoints, with the time difference of `differenced` added.
    differenced : sympy.Symbol, optional
        The input component whose time difference an evolving output carries.
    """

    expression: sympy.Expr
    evolving: bool
    differenced: sympy.Symbol | None = None


@dataclass(frozen=True)
class Form:
    """A named set of outputs and the fields they are computed from.

    Parameters
    ----------
    kind : str
        "gather": expressions at the levels, then midpoint interpolation. "adjoint": the transposed
        interpolation of the last field first, then the expressions.
    fields : tuple of tuple of sympy.Symbol
        For each input field its component symbols.
    outputs : tuple of Output
        In the order of the law's components.
    scalars : tuple of str
        Names of the scalars the expressions may use.
    """

    name: str
    kind: str
    fields: tuple[tuple[sympy.Symbol, ...], ...]
    outputs: tuple[Output, ...]
    scalars: tuple[str, ...]
    dimensions: int


def make_form(
    law: Law,
    name: str,
    kind: str,
    fields: tuple[tuple[sympy.Symbol, ...], ...],
    outputs: list[Output],
    scalars: tuple[str, ...],
) -> Form:
    """Return a form whose expressions are sums with constant factors pulled out of every `Deriv`."""
    varying = {symbol for field in fields for symbol in field} | {X, Y}
    normal = tuple(
        Output(normalise(_without_sech(o.expression), varying), o.evolving, o.differenced) for o in outputs
    )
    return Form(name, kind, fields, normal, scalars, law.dimensions)


def _without_sech(expression: sympy.Expr) -> sympy.Expr:
    """Write sech as 1/cosh: NumPy and Python's math module have no sech."""
    return expression.replace(sympy.sech, lambda argument: 1 / sympy.cosh(argument))


def normalise(expression: sympy.Expr, varying: set[sympy.Symbol]) -> sympy.Expr:
    """Expand an expression and make every `Deriv` act on one product of varying factors."""
    inner = {}
    for atom in _outer_atoms(expression):
        total = sympy.Integer(0)
        for term in sympy.Add.make_args(normalise(atom.args[0], varying)):
            constant, rest = term.as_independent(*varying, as_Add=False)
            if rest != 1:
                total += constant * Deriv(rest, atom.args[1], atom.args[2])
        inner[atom] = total
    return sympy.expand(sympy.expand(expression).xreplace(inner))


def field_symbols(law: Law, field: str) -> tuple[sympy.Symbol, ...]:
    """Return the component symbols of a field; the state "u" uses the law's own names."""
    if field == "u":
        return tuple(sympy.Symbol(c, real=True) for c in law.components)
    return tuple(sympy.Symbol(f"@{field}.{c}", real=True) for c in law.components)


def scalar_names(law: Law) -> tuple[str, ...]:
    """Return every scalar that may stand in the law's expressions, in a fixed order."""
    return (*(p.name for p in law.parameters), *frame_names(law), *(f"source_{c}" for c in sourced(law)))


def frame_names(law: Law) -> tuple[str, ...]:
    """Return the scalars of the frame in which a state repeats; all are 0 at rest."""
    drifts = [f"drift_{axis}" for axis in "xy"[: law.dimensions] if law.symmetries.homogeneous[axis]]
    return (*drifts, *(("rotation",) if law.rotating_pair else ()))


def sourced(law: Law) -> tuple[str, ...]:
    """Return the evolving components whose mean needs a uniform source: conserved or shiftable."""
    either = {*law.symmetries.conserved, *law.symmetries.shiftable}
    return tuple(c for c in law.components if c in either)


def residual_form(law: Law) -> Form:
    """Return the form of R = D u + M (G(u) + frame - source), constraints at the nodes.

    The frame's terms are `-drift . grad u` and, for the rotating pair (a, b), `rotation * (-b, a)`.
    """
    state = field_symbols(law, "u")
    outputs = []
    for equation, symbol in zip(law.equations, state, strict=True):
        expression = equation.expression
        if equation.evolving:
            expression = expression + _frame(law, symbol)
            if equation.component in sourced(law):
                expression = expression - sympy.Symbol(f"source_{equation.component}", real=True)
        outputs.append(Output(expression, equation.evolving, symbol if equation.evolving else None))
    return make_form(law, "residual", "gather", (state,), outputs, scalar_names(law))


def _frame(law: Law, symbol: sympy.Symbol) -> sympy.Expr:
    """Return the terms of a component in the frame that moves with the drift and turns with the rotation.

    In the frame of the laboratory the state is `R(rotation*t) u(t, x - drift*t)`, where R turns (a, b)
    from a towards b.
    """
    total = sympy.Integer(0)
    if law.rotating_pair:
        first, second = (sympy.Symbol(name, real=True) for name in law.rotating_pair)
        generator = {first: -second, second: first}.get(symbol, sympy.Integer(0))
        total += sympy.Symbol("rotation", real=True) * generator
    for axis, orders in (("x", (1, 0)), ("y", (0, 1)))[: law.dimensions]:
        if law.symmetries.homogeneous[axis]:
            total -= sympy.Symbol(f"drift_{axis}", real=True) * Deriv(symbol, *orders)
    return total


def tangent_form(law: Law) -> Form:
    """Return the form of J v: the exact derivative of the discrete residual along v."""
    residual, v = residual_form(law), field_symbols(law, "v")
    along = dict(zip(residual.fields[0], v, strict=True))
    outputs = [
        Output(_along(o.expression, along), o.evolving, along.get(o.differenced)) for o in residual.outputs
    ]
    return make_form(law, "tangent", "gather", (residual.fields[0], v), outputs, residual.scalars)


def curvature_form(law: Law) -> Form:
    """Return the form of the second derivative of the residual along v, twice."""
    tangent = tangent_form(law)
    along = dict(zip(*tangent.fields, strict=True))
    outputs = [Output(_along(o.expression, along), o.evolving) for o in tangent.outputs]
    return make_form(law, "curvature", "gather", tangent.fields, outputs, tangent.scalars)


def adjoint_form(law: Law) -> Form:
    """Return the form of J^T w; its last field is w, interpolated by M^T where its row evolves."""
    tangent = tangent_form(law)
    state, v = tangent.fields
    w = field_symbols(law, "w")
    totals = {symbol: sympy.Integer(0) for symbol in v}
    for output, symbol in zip(tangent.outputs, w, strict=True):
        _transpose(sympy.expand(output.expression), symbol, totals)
    outputs = [
        Output(totals[symbol], output.evolving, row if output.evolving else None)
        for symbol, output, row in zip(v, tangent.outputs, w, strict=True)
    ]
    return make_form(law, "adjoint", "adjoint", (state, w), outputs, tangent.scalars)


def scalar_form(law: Law, name: str) -> Form:
    """Return the form of dR/d(scalar) for a length or any scalar of the expressions.

    The period is not among them: it only scales the time differences. With a length its nodes move:
    a coordinate x changes at the rate x/length.
    """
    residual = residual_form(law)
    by_symbol, by_atom = _by_length(name) if name in LENGTHS else _by_name(name)
    outputs = [Output(differentiate(o.expression, by_symbol, by_atom), o.evolving) for o in residual.outputs]
    scalars = (*residual.scalars, *LENGTHS)
    return make_form(law, f"by_{name}", "gather", residual.fields, outputs, scalars)


def _by_name(name: str) -> tuple[BySymbol, ByAtom | None]:
    wanted = sympy.Symbol(name, real=True)
    return lambda symbol: sympy.Integer(int(symbol == wanted)), None


def _by_length(name: str) -> tuple[BySymbol, ByAtom | None]:
    axis, length = LENGTHS[name], sympy.Symbol(name, real=True)

    def by_symbol(symbol: sympy.Symbol) -> sympy.Expr:
        return symbol / length if symbol == (X, Y)[axis] else sympy.Integer(0)

    return by_symbol, lambda atom: -atom.args[1 + axis] / length * atom


def rate_form(law: Law) -> Form:
    """Return the form of D u alone: time differences at the midpoints, zero for constraints."""
    state = field_symbols(law, "u")
    outputs = [
        Output(sympy.Integer(0), e.evolving, symbol if e.evolving else None)
        for e, symbol in zip(law.equations, state, strict=True)
    ]
    return make_form(law, "rate", "gather", (state,), outputs, ())


def _along(expression: sympy.Expr, along: dict[sympy.Symbol, sympy.Symbol]) -> sympy.Expr:
    return differentiate(expression, lambda symbol: along.get(symbol, sympy.Integer(0)), None)


def differentiate(
    expression: sympy.Expr,
    of_symbol: BySymbol,
    of_atom: ByAtom | None,
) -> sympy.Expr:
    """Differentiate through `Deriv` by the chain rule.

    Parameters
    ----------
    expression : sympy.Expr
        Any expression of a form.
    of_symbol : callable
        The derivative of each plain symbol.
    of_atom : callable, optional
        An explicit derivative of a `Deriv` atom, beyond that of its inner expression.

    Returns
    -------
    sympy.Expr
        With the discrete structure kept: derivatives of `Deriv(f, a, b)` are `Deriv(f', a, b)`.
    """
    atoms = _outer_atoms(expression)
    stand_in = {atom: sympy.Dummy() for atom in atoms}
    plain = expression.xreplace(stand_in)
    total = sympy.Integer(0)
    for atom, dummy in stand_in.items():
        inner = differentiate(atom.args[0], of_symbol, of_atom)
        derived = _linear_deriv(inner, atom.args[1], atom.args[2])
        if of_atom is not None:
            derived += of_atom(atom)
        if derived != 0:
            total += sympy.diff(plain, dummy) * derived
    for symbol in sorted(plain.free_symbols - set(stand_in.values()), key=str):
        derived = of_symbol(symbol)
        if derived != 0:
            total += sympy.diff(plain, symbol) * derived
    return total.xreplace({dummy: atom for atom, dummy in stand_in.items()})


def _linear_deriv(inner: sympy.Expr, a: sympy.Expr, b: sympy.Expr) -> sympy.Expr:
    """Return Deriv of an expanded sum term by term; zero of zero."""
    terms = sympy.Add.make_args(sympy.expand(inner))
    return sympy.Add(*(Deriv(term, a, b) for term in terms if not term.is_number))


def _outer_atoms(expression: sympy.Expr) -> list[sympy.Expr]:
    """Return the outermost `Deriv` atoms, in a fixed order."""
    if isinstance(expression, Deriv):
        return [expression]
    found: list[sympy.Expr] = []
    for arg in expression.args:
        found.extend(atom for atom in _outer_atoms(arg) if atom not in found)
    return sorted(found, key=sympy.default_sort_key)


def _transpose(expression: sympy.Expr, weight: sympy.Expr, totals: dict[sympy.Symbol, sympy.Expr]) -> None:
    """Add to `totals[v]` the transpose of an expression linear in the symbols v, applied to `weight`."""
    for term in sympy.Add.make_args(expression):
        linear = [f for f in sympy.Mul.make_args(term) if f.free_symbols & totals.keys()]
        if not linear:
            continue
        (factor,) = linear
        scaled = term / factor * weight
        if isinstance(factor, Deriv):
            inner, a, b = factor.args
            sign = (-1) ** int(a + b)
            _transpose(sympy.expand(inner), sign * Deriv(scaled, a, b), totals)
        elif factor in totals:
            totals[factor] += scaled
        else:
            _transpose(sympy.expand(factor), term / factor * weight, totals)
