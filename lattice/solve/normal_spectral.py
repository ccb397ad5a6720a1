"""For large damping: the normal equations inverted mode by mode, with the law's mean coefficients.

The inverse of `S^H S + beta + mu` for every Fourier mode, S its C x C block of the constant-coefficient
tangent, beta what the fluctuating coefficients add to J^T J on the average. No factorisation; two
transforms an application. The scalars are left to the diagonal of J^T J.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.solve.scrambling import scramble
from lattice.solve.smoothers import multiply_blocks
from lattice.spectral.transform import Complex, Transform
from lattice.system.constant_part import ConstantPart

if TYPE_CHECKING:
    from lattice.system.system import System


class SpectralNormal:
    """Inverts the damped normal equations of the constant-coefficient tangent.

    Collective, as all methods.

    Parameters
    ----------
    system : System

    Attributes
    ----------
    fluctuation : ndarray, shape (components,)
        beta of every component, in the units of J^T J.
    """

    def __init__(self, system: System) -> None:
        self.system = system
        self.transform = Transform(system.blocks)
        self.constant = ConstantPart(system.operator)
        self._field, self._other = system.blocks.vector(), system.blocks.vector()
        self._square: Complex = np.zeros(0, dtype=complex)
        self._inverse: Complex = np.zeros(0, dtype=complex)
        self._columns, self._border = np.zeros(0), np.zeros(0)
        self.fluctuation = np.zeros(0)

    def update(self, damping: float) -> None:
        """Compute symbols and beta at the point of linearisation."""
        self.constant.update()
        symbol = self.constant.symbol(self.transform, 0.0)
        self._square = np.swapaxes(symbol, -1, -2).conj() @ symbol
        self.fluctuation = self._fluctuation(symbol)
        self._columns = np.array([column.norm() ** 2 for column in self.system.columns])
        self.damp(damping)

    def damp(self, damping: float) -> None:
        """Invert the blocks for another damping."""
        self._inverse = np.linalg.inv(self._square + np.diag(self.fluctuation + damping))
        self._border = 1.0 / (self._columns + damping)

    @property
    def scale(self) -> float:
        """Largest beta: the size of J^T J on the waves of the state."""
        return float(self.fluctuation.max())

    def _fluctuation(self, symbol: Complex) -> Any:
        """Return for every component the mean square that J adds to its constant-coefficient part.

        Measured on a field of the state's spectrum and foreign phases.
        """
        count = self.system.blocks.components
        return np.array([self._added(component, symbol) for component in range(count)])

    def _added(self, component: int, symbol: Complex) -> float:
        operator, blocks = self.system.operator, self.system.blocks
        operator.copy_point(self._field)
        means = operator.component_means(self._field)
        probe = blocks.owned(self._field)
        probe -= means
        probe[..., [c for c in range(blocks.components) if c != component]] = 0.0
        del probe
        scramble(self.transform, self._field, self._field)
        size = self._field.norm() ** 2
        operator.tangent(self._field, self._other)
        whole = self._other.norm() ** 2
        multiply_blocks(self.transform, symbol, self._field, self._other)
        constant = self._other.norm() ** 2
        return max(whole - constant, 1e-6 * whole) / size if size > 0.0 else 1.0

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to the approximate inverse times `r`."""
        system, owned = self.system, self.system.blocks.owned_size
        self._field.getArray()[:] = r.getArray(readonly=1)[:owned]
        multiply_blocks(self.transform, self._inverse, self._field, self._other)
        system.store(y, self._other.getArray(readonly=1), system.border_of(r) * self._border)

    def destroy(self) -> None:
        """Free everything."""
        for item in (self._field, self._other, self.transform):
            item.destroy()
