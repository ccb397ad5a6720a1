"""Values of a law's expressions on smooth periodic fields, by Fourier series instead of stencils."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import sympy

from lattice.laws.law import Deriv, Law

_FUNCTIONS = {
    sympy.sin: np.sin,
    sympy.cos: np.cos,
    sympy.exp: np.exp,
    sympy.log: np.log,
    sympy.tanh: np.tanh,
    sympy.sech: lambda value: 1.0 / np.cosh(value),
    sympy.sinh: np.sinh,
    sympy.cosh: np.cosh,
}


@dataclass(frozen=True)
class Box:
    """A periodic box; fields have shape (ny, nx)."""

    nx: int
    length_x: float
    ny: int = 1
    length_y: float = 1.0

    @property
    def x(self) -> np.ndarray:
        return np.broadcast_to(np.arange(self.nx) * self.length_x / self.nx, (self.ny, self.nx))

    @property
    def y(self) -> np.ndarray:
        return np.broadcast_to((np.arange(self.ny) * self.length_y / self.ny)[:, None], (self.ny, self.nx))

    def derivative(self, field: np.ndarray, a: int, b: int) -> np.ndarray:
        """Return the derivative of order a in x and b in y; rounding noise is cut before it is amplified."""
        spectrum = np.fft.fft2(np.broadcast_to(field, (self.ny, self.nx)))
        spectrum[np.abs(spectrum) < 1e-13 * np.abs(spectrum).max()] = 0.0
        kx = 2j * np.pi * np.fft.fftfreq(self.nx, self.length_x / self.nx)
        ky = 2j * np.pi * np.fft.fftfreq(self.ny, self.length_y / self.ny)
        return np.fft.ifft2(spectrum * kx[None, :] ** a * ky[:, None] ** b).real

    def smooth_field(self, rng: np.random.Generator, mean: float = 0.0) -> np.ndarray:
        """Return a random field of the few longest waves, of size about one."""
        field = np.full((self.ny, self.nx), mean)
        for m in range(-2, 3):
            for n in range(-2, 3) if self.ny > 1 else (0,):
                phase = 2 * np.pi * (m * self.x / self.length_x + n * self.y / self.length_y)
                field = field + 0.2 * rng.normal() * np.cos(phase + rng.uniform(0, 2 * np.pi)) * bool(m or n)
        return field


def evaluate(expression: sympy.Expr, box: Box, values: Mapping[str, object]) -> np.ndarray:
    """Return `expression` at every node; `values` has the components and parameters by name."""
    if expression.is_Symbol:
        return np.asarray({"x": box.x, "y": box.y, **values}[expression.name])
    if expression.is_number:
        return np.asarray(float(expression))
    if isinstance(expression, Deriv):
        inner, a, b = expression.args
        return box.derivative(evaluate(inner, box, values), int(a), int(b))
    arguments = [evaluate(arg, box, values) for arg in expression.args]
    if expression.is_Add:
        return np.asarray(sum(arguments[1:], arguments[0]))
    if expression.is_Mul:
        return np.prod(np.array(np.broadcast_arrays(*arguments)), axis=0)
    if expression.is_Pow:
        return np.asarray(arguments[0] ** float(expression.exp))
    return np.asarray(_FUNCTIONS[type(expression)](*arguments))


def right_hand_sides(law: Law, box: Box, values: Mapping[str, object]) -> list[np.ndarray]:
    """Return G of every equation (u_t + G = 0 or G = 0) at every node; parameters not given have defaults."""
    everything = {**law.defaults, **values}
    shape = (box.ny, box.nx)
    return [np.broadcast_to(evaluate(e.expression, box, everything), shape) for e in law.equations]
