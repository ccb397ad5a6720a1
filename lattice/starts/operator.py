"""A law on one periodic slice in Fourier space: `dc/dt = L c + N(c)`.

Here `c` holds the spectra of the evolving components only. Constraint components are linear in them and
are eliminated mode by mode (`psi = -K^+ (A c + f)`, a pseudo-inverse: a gauge component has zero mean).

Products are evaluated on a padded grid on which they are free of aliasing: more than
`(degree + 1) * largest mode number` nodes per axis, which is the 3/2 rule for quadratic products
(S. A. Orszag, J. Atmos. Sci. 28 (1971) 1074), a factor 2 for cubic and 3 for quintic ones. No mode of the
slice itself is cut. Functions that are not polynomials get the cubic padding; their aliasing falls with
the spectrum's tail.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.fft
import sympy
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.laws.law import Law
from lattice.starts.modes import Modes
from lattice.starts.splitting import Derivative, PointwiseTerm, Splitting, split

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

DEGREE_OF_FUNCTIONS = 3
SINGULAR = 1e-12


class SpectralOperator:
    """The linear part, the nonlinear part and the constraints of a law on given modes.

    Parameters
    ----------
    law : Law
        Any law whose constraint equations are linear with constant coefficients.
    shape : tuple of int
        Nodes (ny, nx).
    lengths : tuple of float
        Lengths (Ly, Lx); Ly is ignored in one space dimension.
    values : dict of str to float
        Law parameters and uniform sources `source_<component>` by name; parameters that are absent take
        the law's defaults. Drifts are ignored: the frame is that of the laboratory.

    Attributes
    ----------
    evolving, constrained : list of int
        Component indices.
    linear : ndarray, shape (E, E, *modes.spectrum_shape)
        The matrix L of every mode.

    Raises
    ------
    InputError
        Where a constraint cannot be solved for its component, a value is missing or not finite.
    """

    def __init__(
        self, law: Law, shape: tuple[int, int], lengths: tuple[float, float], values: dict[str, float]
    ) -> None:
        _check(law, shape, lengths)
        self.law, self.modes = law, Modes(shape, lengths if law.dimensions == 2 else (1.0, lengths[1]))
        self.split = split(law)
        self.evolving = [n for n, on in enumerate(law.evolving) if on]
        self.constrained = [n for n, on in enumerate(law.evolving) if not on]
        self._parameters = _parameter_values(law, values)
        self._padded = _padded_shape(self.modes, self.split)
        symbol = self._symbol()
        forcing = self._forcing(values)
        self._eliminate(symbol, forcing)
        self._prepare_products()

    def nonlinear(self, c: Complex) -> Complex:
        """Return N(c), shape (..., E, *modes.spectrum_shape), of evolving spectra of that shape."""
        out = np.empty_like(c)
        out[...] = self._steady
        if self._multipliers:
            fields = self.modes.to_nodes(self._inputs(c), self._padded)
            inputs = [fields[..., n, :, :] for n in range(fields.shape[-3])]
            terms = self.split.evaluate_products(inputs, *self._coordinates, self._parameters)
            nodes = np.empty((*c.shape[:-3], len(terms), *self._padded))
            for n, term in enumerate(terms):
                nodes[..., n, :, :] = term
            spectra = self.modes.from_nodes(nodes)
            for n, (row, factor) in enumerate(self._outputs):
                out[..., row, :, :] -= factor * spectra[..., n, :, :]
        return out

    def rate(self, c: Complex) -> Complex:
        """Return dc/dt."""
        linear: Complex = np.einsum("ijyx,...jyx->...iyx", self.linear, c)
        return linear + self.nonlinear(c)

    def complete(self, c: Complex) -> Complex:
        """Return the spectra of all components, constraints solved, from those of the evolving ones."""
        full = np.zeros((*c.shape[:-3], len(self.law.components), *c.shape[-2:]), dtype=complex)
        full[..., self.evolving, :, :] = c
        if self.constrained:
            solved = np.einsum("ijyx,...jyx->...iyx", self._solved, c)
            full[..., self.constrained, :, :] = solved + self._solved_forcing
        return full

    def growth_rates(self) -> Real:
        """Return the largest linear growth rate of every mode about the zero state."""
        if len(self.evolving) == 1:
            return np.ascontiguousarray(self.linear[0, 0].real)
        rates: Real = np.linalg.eigvals(np.moveaxis(self.linear, (0, 1), (2, 3))).real.max(axis=-1)
        return rates

    def _symbol(self) -> Complex:
        """Return the constant-coefficient symbol of G, shape (C, C, *spectrum_shape)."""
        count = len(self.law.components)
        symbol = np.zeros((count, count, *self.modes.spectrum_shape), dtype=complex)
        numbers = dict(zip((p.name for p in self.law.parameters), self._parameters, strict=True))
        for term in self.split.linear:
            named = {s: sympy.Float(numbers[s.name], 17) for s in term.coefficient.free_symbols}
            value = float(term.coefficient.xreplace(named).evalf(17))
            derivative = self.modes.derivative(term.derivative.a, term.derivative.b)
            symbol[term.equation, term.derivative.component] += value * derivative
        return symbol

    def _forcing(self, values: dict[str, float]) -> Complex:
        """Return the spectra of the field-free terms of G, uniform sources subtracted."""
        total = np.zeros((len(self.law.components), *self.modes.spectrum_shape), dtype=complex)
        self._coordinates = _node_coordinates(self._padded, self.modes.lengths)
        terms = self.split.evaluate_forcing([], *self._coordinates, self._parameters)
        for term, value in zip(self.split.forcing, terms, strict=True):
            nodes = np.broadcast_to(np.asarray(value, dtype=float), self._padded)
            total[term.equation] += self._factor(term) * self.modes.from_nodes(nodes)
        for n, name in enumerate(self.law.components):
            total[n, 0, 0] -= values.get(f"source_{name}", 0.0)
        if not np.all(np.isfinite(total)):
            raise InputError(
                f"the forcing of law {self.law.name} is not finite on the box; check its parameters"
            )
        return total

    def _eliminate(self, symbol: Complex, forcing: Complex) -> None:
        e, k = self.evolving, self.constrained
        inverse = self._constraint_inverse(symbol[np.ix_(k, k)])
        self._solved = -np.einsum("ijyx,jlyx->ilyx", inverse, symbol[np.ix_(k, e)])
        self._solved_forcing = -np.einsum("ijyx,jyx->iyx", inverse, forcing[k])
        coupling = symbol[np.ix_(e, k)]
        self.linear = -(symbol[np.ix_(e, e)] + np.einsum("ijyx,jlyx->ilyx", coupling, self._solved))
        self._steady = -(forcing[e] + np.einsum("ijyx,jyx->iyx", coupling, self._solved_forcing))

    def _constraint_inverse(self, block: Complex) -> Complex:
        if not block.size:
            return block
        stacked = np.moveaxis(block, (0, 1), (2, 3))
        sizes = np.abs(stacked).max(axis=(2, 3))
        smallest = np.linalg.svd(stacked, compute_uv=False)[..., -1]
        singular = smallest <= SINGULAR * sizes
        singular[0, 0] = False
        if np.any(singular):
            row, column = np.argwhere(singular)[0]
            names = ", ".join(self.law.components[n] for n in self.constrained)
            raise InputError(
                f"the constraint of law {self.law.name} must determine {names} at every wavenumber, and does "
                f"not at kx = {self.modes.kx[0, column]:.6g}, ky = {self.modes.ky[row, 0]:.6g}; "
                "start from a state, waves or an array instead"
            )
        return np.moveaxis(np.linalg.pinv(stacked, rcond=SINGULAR), (2, 3), (0, 1))

    def _prepare_products(self) -> None:
        place = {n: row for row, n in enumerate(self.evolving)}
        self._outputs = [(place[term.equation], self._factor(term)) for term in self.split.products]
        self._multipliers = [self._multiplier(key, place) for key in self.split.inputs]

    def _multiplier(self, key: Derivative, place: dict[int, int]) -> tuple[int, Complex, Complex | None]:
        """Return (row, factor, offset): the row of c, or -1 with a factor for every row and an offset."""
        derivative = self.modes.derivative(key.a, key.b)
        if key.component in place:
            return place[key.component], derivative, None
        row = self.constrained.index(key.component)
        return -1, derivative * self._solved[row], derivative * self._solved_forcing[row]

    def _inputs(self, c: Complex) -> Complex:
        spectra = np.empty((*c.shape[:-3], len(self._multipliers), *c.shape[-2:]), dtype=complex)
        for n, (row, factor, offset) in enumerate(self._multipliers):
            if row >= 0:
                np.multiply(factor, c[..., row, :, :], out=spectra[..., n, :, :])
            else:
                spectra[..., n, :, :] = (factor * c).sum(axis=-3) + offset
        return spectra

    def _factor(self, term: PointwiseTerm) -> Any:
        return self.modes.derivative(term.a, term.b) if term.a or term.b else 1.0


def _check(law: Law, shape: tuple[int, int], lengths: tuple[float, float]) -> None:
    ny, nx = shape
    if nx < 4 or (law.dimensions == 2 and ny < 4) or (law.dimensions == 1 and ny != 1):
        wanted = "nx >= 4 and ny >= 4" if law.dimensions == 2 else "nx >= 4 and ny = 1"
        raise InputError(f"time stepping of law {law.name} needs {wanted}, got nx = {nx}, ny = {ny}")
    used = lengths if law.dimensions == 2 else lengths[1:]
    if not all(np.isfinite(length) and length > 0.0 for length in used):
        raise InputError(f"lengths must be positive and finite, got {', '.join(f'{v:g}' for v in used)}")


def _parameter_values(law: Law, values: dict[str, float]) -> list[float]:
    numbers = [float(values.get(p.name, p.default)) for p in law.parameters]
    for parameter, number in zip(law.parameters, numbers, strict=True):
        if not np.isfinite(number):
            raise InputError(f"parameter {parameter.name} must be finite, got {number}; give it a number")
    return numbers


def _padded_shape(modes: Modes, splitting: Splitting) -> tuple[int, int]:
    degree = DEGREE_OF_FUNCTIONS if splitting.degree is None else max(1, splitting.degree)
    axes = [
        scipy.fft.next_fast_len((degree + 1) * largest + 1, real=True) if largest else 1
        for largest in (modes.my, modes.mx)
    ]
    return (axes[0], axes[1])


def _node_coordinates(shape: tuple[int, int], lengths: tuple[float, float]) -> tuple[Real, Real]:
    y = np.arange(shape[0])[:, None] * (lengths[0] / shape[0])
    x = np.arange(shape[1])[None, :] * (lengths[1] / shape[1])
    return x, y
