"""Evaluate a form with NumPy slices: slower than generated loops, independent of them.

It serves where Numba is missing, as the reference of the tests, and as the baseline of the benchmark.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING

import numpy as np
import sympy
from numpy.typing import NDArray

from lattice.kernels.forms import Form, X, Y
from lattice.kernels.scheme import Scheme, space_stencil, time_weights
from lattice.laws.law import Deriv

if TYPE_CHECKING:
    from lattice.kernels.build import Geometry

Array = NDArray[np.float64]


class Evaluator:
    """Values of expressions on all rows of some levels, by shifted slices of padded arrays."""

    def __init__(
        self,
        scheme: Scheme,
        geometry: Geometry,
        values: Mapping[str, float],
        arrays: Mapping[sympy.Symbol, Array],
        shape: tuple[int, int],
    ) -> None:
        self.scheme, self.geometry, self.values = scheme, geometry, values
        self.arrays, self.shape = arrays, shape

    def value(self, expression: sympy.Expr, dy: int = 0, dx: int = 0) -> Array | float:
        """Return the expression at every node, shifted by (dy, dx)."""
        rows = slice(self.scheme.halo_y + dy, self.scheme.halo_y + dy + self.shape[0])
        columns = slice(self.scheme.halo_x + dx, self.scheme.halo_x + dx + self.shape[1])
        if expression in self.arrays:
            return self.arrays[expression][:, rows, columns]
        if expression == X:
            return self.geometry.xs[columns][None, None, :]
        if expression == Y:
            return self.geometry.ys[rows][None, :, None]
        if expression.is_Symbol:
            return self.values[expression.name]
        if expression.is_Number or expression.is_NumberSymbol:
            return float(expression)
        if isinstance(expression, Deriv):
            return self._derivative(expression, dy, dx)
        return self._combined(expression, dy, dx)

    def _combined(self, expression: sympy.Expr, dy: int, dx: int) -> Array | float:
        args = [self.value(a, dy, dx) for a in expression.args]
        if expression.is_Add:
            return sum(args[1:], args[0])
        if expression.is_Mul:
            return _product(args)
        if expression.is_Pow:
            return args[0] ** (int(expression.args[1]) if expression.args[1].is_Integer else args[1])
        function: Callable[[Array | float], Array] = getattr(np, type(expression).__name__)
        return function(args[0])

    def _derivative(self, atom: sympy.Expr, dy: int, dx: int) -> Array | float:
        inner, a, b = atom.args
        scale = self.geometry.dx ** -int(a) * self.geometry.dy ** -int(b)
        stencil = space_stencil(int(a), int(b), self.scheme.order_x, self.scheme.order_y)
        terms = [w * scale * self.value(inner, dy + oy, dx + ox) for (oy, ox), w in stencil.items()]
        return sum(terms[1:], terms[0])


def _product(args: list[Array | float]) -> Array | float:
    total = args[0]
    for factor in args[1:]:
        total = total * factor
    return total


def evaluate(
    form: Form,
    scheme: Scheme,
    geometry: Geometry,
    values: Mapping[str, float],
    out: Array,
    fields: tuple[Array, ...],
) -> None:
    """Evaluate a form into `out`; arguments as `lattice.kernels.build.Kernel` takes them."""
    levels, rows, columns, _ = out.shape
    arrays = {
        symbol: field[..., c]
        for symbols, field in zip(form.fields, fields, strict=True)
        for c, symbol in enumerate(symbols)
    }
    difference, midpoint = time_weights(scheme.levels)
    difference = [w / geometry.dt for w in difference] if scheme.levels > 1 else [0.0]
    low = scheme.halo_t - scheme.below
    if form.kind == "adjoint":
        arrays = _transposed_midpoints(form, scheme, arrays, midpoint, levels)
    for c, output in enumerate(form.outputs):
        evaluator = Evaluator(scheme, geometry, values, arrays, (rows, columns))
        total = np.zeros((fields[0].shape[0] if form.kind == "gather" else levels, rows, columns))
        total += evaluator.value(output.expression)
        if not output.evolving:
            out[..., c] = total[scheme.halo_t :][:levels] if form.kind == "gather" else total
            continue
        if form.kind == "gather":
            parts = (w * total[low + k :][:levels] for k, w in enumerate(midpoint))
            total = sum(parts, np.zeros(1))
        if output.differenced is not None:
            whole = fields[-1] if form.kind == "adjoint" else fields[_field_of(form, output.differenced)]
            total = (
                total
                + _time_difference(
                    whole[..., _component_of(form, output.differenced)], form.kind, scheme, difference, levels
                )[:, scheme.halo_y :][:, :rows][:, :, scheme.halo_x :][:, :, :columns]
            )
        out[..., c] = total


def _field_of(form: Form, symbol: sympy.Symbol) -> int:
    return next(k for k, symbols in enumerate(form.fields) if symbol in symbols)


def _component_of(form: Form, symbol: sympy.Symbol) -> int:
    return form.fields[_field_of(form, symbol)].index(symbol)


def _time_difference(padded: Array, kind: str, scheme: Scheme, difference: list[float], levels: int) -> Array:
    """Return D u, or D^T w for an adjoint, on every padded row of the owned levels."""
    start = scheme.halo_t - scheme.below
    if kind == "adjoint":
        start = scheme.halo_t + scheme.below - scheme.levels + 1
        difference = difference[::-1]
    return sum((w * padded[start + k :][:levels] for k, w in enumerate(difference)), np.zeros(1))


def _transposed_midpoints(
    form: Form, scheme: Scheme, arrays: dict[sympy.Symbol, Array], midpoint: list[float], levels: int
) -> dict[sympy.Symbol, Array]:
    """Return the arrays of an adjoint form on its owned levels: M^T w, and every other field as it is."""
    start = scheme.halo_t + scheme.below - scheme.levels + 1
    result = {symbol: array[scheme.halo_t :][:levels] for symbol, array in arrays.items()}
    for symbol, output in zip(form.fields[-1], form.outputs, strict=True):
        if output.evolving:
            parts = (w * arrays[symbol][start + k :][:levels] for k, w in enumerate(midpoint[::-1]))
            result[symbol] = sum(parts, np.zeros(1))
    return result
