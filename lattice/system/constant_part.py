"""The constant-coefficient part of a law's tangent: every coefficient replaced by its mean.

What is left is a C x C matrix per Fourier mode of the lattice, with the discrete symbols of its
differences. The spectral smoother inverts it; the size of what was left out tells whether it may.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import sympy
from numpy.typing import NDArray

from lattice.kernels.build import number_of
from lattice.kernels.scheme import space_stencil, time_weights
from lattice.kernels.slices import Evaluator
from lattice.laws.law import Deriv
from lattice.spectral.transform import Complex, Transform
from lattice.system.operator import FieldOperator

Real = NDArray[np.float64]


@dataclass(frozen=True)
class Term:
    """One term of an output: factors times nested derivatives of one component.

    Parameters
    ----------
    output, component : int
    factors : tuple of sympy.Expr
        Coefficients, outermost first.
    derivatives : tuple of (int, int)
        Orders (a, b) in x and y, outermost first.
    """

    output: int
    component: int
    factors: tuple[sympy.Expr, ...]
    derivatives: tuple[tuple[int, int], ...]

    @property
    def order(self) -> int:
        """Total order of its derivatives."""
        return sum(a + b for a, b in self.derivatives)


class ConstantPart:
    """Means of a tangent's coefficients about an operator's point, and symbols made of them.

    Parameters
    ----------
    operator : FieldOperator
    """

    def __init__(self, operator: FieldOperator) -> None:
        self.operator = operator
        self.form = operator.forms["tangent"]
        self.terms: list[Term] = []
        for index, output in enumerate(self.form.outputs):
            self._flatten(output.expression, index, (), ())
        self.means: dict[sympy.Expr, float] = {}
        self.fluctuations: dict[sympy.Expr, float] = {}

    def _flatten(
        self,
        expression: sympy.Expr,
        output: int,
        factors: tuple[sympy.Expr, ...],
        derivatives: tuple[tuple[int, int], ...],
    ) -> None:
        direction = self.form.fields[1]
        for term in sympy.Add.make_args(sympy.expand(expression)):
            linear = [f for f in sympy.Mul.make_args(term) if f.free_symbols & set(direction)]
            if not linear:
                continue
            (factor,) = linear
            rest = (*factors, term / factor)
            if isinstance(factor, Deriv):
                inner, a, b = factor.args
                self._flatten(inner, output, rest, (*derivatives, (int(a), int(b))))
            else:
                self.terms.append(Term(output, direction.index(factor), rest, derivatives))

    def update(self) -> None:
        """Compute means and root mean square fluctuations of all coefficients. Collective."""
        expressions = sorted({f for term in self.terms for f in term.factors}, key=sympy.default_sort_key)
        sums = np.array([self._local_sums(e) for e in expressions])
        total = self.operator.comm.allreduce(sums) / self.operator.lattice.nodes
        for expression, (mean, square) in zip(expressions, total, strict=True):
            self.means[expression] = float(mean)
            self.fluctuations[expression] = float(np.sqrt(max(0.0, square - mean**2)))

    def _local_sums(self, expression: sympy.Expr) -> tuple[float, float]:
        """Return the sums of a coefficient and of its square over this rank's nodes, level by level."""
        operator = self.operator
        levels, rows, columns = operator.blocks.block.shape
        if not self._varies(expression):
            names = [sympy.Symbol(n, real=True) for n in self.form.scalars]
            number = number_of(expression, names)([operator.values[n] for n in self.form.scalars])
            return number * levels * rows * columns, number**2 * levels * rows * columns
        padded, halo = operator.padded_point(), operator.scheme.halo_t
        geometry = operator.geometry(operator.values)
        first = second = 0.0
        for level in range(halo, halo + levels):
            arrays = {s: padded[level : level + 1, ..., c] for c, s in enumerate(self.form.fields[0])}
            evaluator = Evaluator(operator.scheme, geometry, operator.values, arrays, (rows, columns))
            found = np.broadcast_to(evaluator.value(expression), (1, rows, columns))
            first += float(found.sum())
            second += float((found**2).sum())
        return first, second

    def _varies(self, expression: sympy.Expr) -> bool:
        moving = {*self.form.fields[0], sympy.Symbol("x", real=True), sympy.Symbol("y", real=True)}
        return bool(expression.has(Deriv) or expression.free_symbols & moving)

    def symbol(self, transform: Transform, shift: float) -> Complex:
        """Return the C x C symbol of every mode of this rank's part of a spectrum.

        Parameters
        ----------
        transform : Transform
            Of the operator's blocks.
        shift : float
            Added to the diagonal of every evolving row, before midpoint interpolation.

        Returns
        -------
        ndarray, shape (modes ..., C, C)
            Rows are equations, columns components.
        """
        operator, modes = self.operator, transform.modes()
        angles = [2.0 * np.pi * m / n for m, n in zip(modes, transform.shape, strict=True)]
        steady = operator.lattice.nt == 1
        shape = np.broadcast_shapes(*(a.shape for a in angles))
        count = len(self.form.outputs)
        symbol = np.zeros((*shape, count, count), dtype=complex)
        for term in self.terms:
            symbol[..., term.output, term.component] += self._term_symbol(term, angles)
        for c, equation in enumerate(operator.law.equations):
            if equation.evolving:
                symbol[..., c, c] += shift
            if equation.evolving and not steady:
                difference, midpoint = self._time_symbols(angles[0])
                symbol[..., c, :] *= midpoint[..., None]
                symbol[..., c, c] += difference
        for component in operator.law.symmetries.gauge:
            index = operator.law.components.index(component)
            level_mean = np.logical_and.reduce(np.broadcast_arrays(*(m == 0 for m in modes[-self._space :])))
            symbol[..., index, index] -= np.broadcast_to(level_mean, shape)
        return symbol

    @property
    def _space(self) -> int:
        return self.operator.lattice.dimensions

    def _term_symbol(self, term: Term, angles: list[Real]) -> Complex:
        scheme = self.operator.scheme
        geometry = self.operator.geometry(self.operator.values)
        result = np.asarray(np.prod([self.means[f] for f in term.factors]), dtype=complex)
        for a, b in term.derivatives:
            along_x = _stencil_symbol(space_stencil(a, 0, scheme.order_x, scheme.order_y), angles[-1], 1)
            result = result * along_x * geometry.dx**-a
            if b:
                along_y = _stencil_symbol(space_stencil(0, b, scheme.order_x, scheme.order_y), angles[-2], 0)
                result = result * along_y * geometry.dy**-b
        return result

    def _time_symbols(self, angle: Real) -> tuple[Complex, Complex]:
        levels, below = self.operator.scheme.levels, self.operator.scheme.below
        step = self.operator.geometry(self.operator.values).dt
        difference, midpoint = time_weights(levels)
        phases = [np.exp(1j * angle * (k - below)) for k in range(levels)]
        d = sum((w * p for w, p in zip(difference, phases, strict=True)), np.zeros(1, dtype=complex))
        m = sum((w * p for w, p in zip(midpoint, phases, strict=True)), np.zeros(1, dtype=complex))
        return np.asarray(d / step), np.asarray(m)

    def fluctuating_size(self, wavenumber: float) -> float:
        """Return the largest fluctuating part an evolving row has in its own component, at a wavenumber."""
        return max(self._own_size(c, wavenumber)[1] for c in self._evolving())

    def constant_size(self, wavenumber: float) -> float:
        """Return the smallest constant part an evolving row has in its own component, at a wavenumber."""
        return min(self._own_size(c, wavenumber)[0] for c in self._evolving())

    def _evolving(self) -> list[int]:
        return [c for c, equation in enumerate(self.operator.law.equations) if equation.evolving]

    def _own_size(self, component: int, wavenumber: float) -> tuple[float, float]:
        """Return sizes of the constant and the fluctuating part, for the wave along x."""
        constant, fluctuating = 0.0 + 0.0j, 0.0
        for term in self.terms:
            if (term.output, term.component) != (component, component):
                continue
            mean = complex(np.prod([self.means[f] for f in term.factors]))
            full = np.prod([abs(self.means[f]) + self.fluctuations[f] for f in term.factors])
            fluctuating += float(full - abs(mean)) * wavenumber**term.order
            if not any(b for _, b in term.derivatives):
                constant += mean * (1j * wavenumber) ** term.order
        return abs(constant.real), fluctuating


def _stencil_symbol(stencil: dict[tuple[int, int], float], angle: Real, place: int) -> Complex:
    total = sum((w * np.exp(1j * offset[place] * angle) for offset, w in stencil.items()), 0.0 + 0.0j)
    return np.asarray(total, dtype=complex)
