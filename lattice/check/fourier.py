"""Exact derivatives of a distributed field by its Fourier series, and values of expressions made of them."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import sympy
from numpy.typing import NDArray

from lattice.geometry.blocks import Blocks
from lattice.kernels.forms import X, Y
from lattice.laws.law import Deriv, Law
from lattice.spectral.transform import Complex, Transform

Array = NDArray[np.float64]


class Fourier:
    """Values of a law's expressions at the nodes of a field, derivatives taken in Fourier space.

    Collective, as all methods. Products are formed at the nodes: on a lattice that resolves the field their
    aliasing is as small as the spectrum's tail.

    Parameters
    ----------
    law : Law
    blocks : Blocks
        Of the field.
    owned : ndarray, shape (levels, rows, columns, components)
        This rank's part of the field.
    values : mapping of str to float
        Every scalar by name.
    """

    def __init__(self, law: Law, blocks: Blocks, owned: Array, values: Mapping[str, float]) -> None:
        self.law, self.blocks, self.values = law, blocks, dict(values)
        self.transform = Transform(blocks)
        self._vector = blocks.vector()
        self._fields = {
            sympy.Symbol(c, real=True): np.ascontiguousarray(owned[..., k])
            for k, c in enumerate(law.components)
        }
        self._known: dict[sympy.Expr, Array] = {}
        self._phases = self._angles()

    def _angles(self) -> dict[str, Array]:
        """Return the wavenumbers of this rank's modes by axis, zero at the shortest wave of an even count."""
        found = {}
        axes = [("tyx"[a], self.blocks.lattice.shape[a]) for a in self.blocks.axes]
        extents = {"t": "period", "y": "length_y", "x": "length_x"}
        for (axis, nodes), modes in zip(axes, self.transform.modes(), strict=True):
            carried = np.where(2 * np.abs(modes) < nodes, modes, 0)
            found[axis] = carried * (2.0 * np.pi / self.values.get(extents[axis], 1.0))
        return found

    def spectrum(self, owned: Array) -> Complex:
        """Return a copy of this rank's part of the spectrum of a field of all components."""
        self.blocks.owned(self._vector)[...] = owned
        return self.transform.forward(self._vector).copy()

    def filtered(self, array: Array, factor: Callable[[dict[str, Array]], Any]) -> Array:
        """Return one component's array with every mode multiplied by a factor of its wavenumbers."""
        self.blocks.owned(self._vector)[...] = 0.0
        self.blocks.owned(self._vector)[..., 0] = array
        spectrum = self.transform.forward(self._vector)
        spectrum[..., 0] *= factor(self._phases)
        self.transform.backward(spectrum, self._vector)
        return self.blocks.owned(self._vector)[..., 0].copy()

    def derivative(self, array: Array, a: int, b: int, times: int = 0) -> Array:
        """Return the derivative of order a in x, b in y and `times` in t."""
        orders = {"x": a, "y": b, "t": times}

        def factor(k: dict[str, Array]) -> Any:
            total: Any = 1.0
            for axis, order in orders.items():
                if order:
                    total = total * (1j * k[axis]) ** order if axis in k else 0.0
            return total

        return self.filtered(array, factor)

    def to_midpoints(self, array: Array) -> Array:
        """Return values half a level earlier, where the rows of evolving equations lie."""
        if self.blocks.lattice.nt == 1:
            return array
        half = 0.5 * self.values["period"] / self.blocks.lattice.nt
        return self.filtered(array, lambda k: np.exp(-1j * k["t"] * half))

    def value(self, expression: sympy.Expr) -> Any:
        """Return an expression at this rank's nodes, an array or a number."""
        if expression in self._fields:
            return self._fields[expression]
        if expression in (X, Y):
            return self._coordinate(expression)
        if expression.is_Symbol:
            return self.values.get(expression.name, 0.0)
        if expression.is_Number or expression.is_NumberSymbol:
            return float(expression)
        if isinstance(expression, Deriv):
            if expression not in self._known:
                inner, a, b = expression.args
                array = np.broadcast_to(self.value(inner), self.blocks.block.shape)
                self._known[expression] = self.derivative(array, int(a), int(b))
            return self._known[expression]
        return self._combined(expression)

    def _combined(self, expression: sympy.Expr) -> Any:
        args = [self.value(argument) for argument in expression.args]
        if expression.is_Add:
            return sum(args[1:], args[0])
        if expression.is_Mul:
            product = args[0]
            for factor in args[1:]:
                product = product * factor
            return product
        if expression.is_Pow:
            return args[0] ** (int(expression.args[1]) if expression.args[1].is_Integer else args[1])
        name = type(expression).__name__
        return 1.0 / np.cosh(args[0]) if name == "sech" else getattr(np, name)(args[0])

    def _coordinate(self, axis: sympy.Symbol) -> Array:
        place, name = (2, "length_x") if axis == X else (1, "length_y")
        coordinates = self.blocks.coordinates(self.values.get(name, 1.0), place)
        halo, count = self.blocks.halos[place], self.blocks.block.shape[place]
        shape = [1, 1, 1]
        shape[place] = -1
        return coordinates[halo : halo + count].reshape(shape)

    def mean(self, expression: sympy.Expr) -> float:
        """Return the mean of an expression over all nodes, on every rank."""
        array = np.broadcast_to(self.value(expression), self.blocks.block.shape)
        return float(self.blocks.comm.allreduce(float(array.sum()))) / self.blocks.lattice.nodes

    def forget(self) -> None:
        """Drop the derivatives kept so far."""
        self._known.clear()

    def destroy(self) -> None:
        """Free the transform. Collective."""
        self.forget()
        self.transform.destroy()
        self._vector.destroy()
