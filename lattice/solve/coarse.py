"""The `coarse` preconditioner: two levels, multiplicative.

First the bordered system of the law re-discretised on a coarse lattice that still carries the active
modes, solved exactly (or by patches); then one smoothing of what is left. The scalars are solved for on
the coarse lattice only. Transfer is by truncated Fourier spectra in all axes.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.solve.bordering import Bordering
from lattice.solve.direct import Direct
from lattice.solve.spectral_smoother import SpectralSmoother
from lattice.spectral.transfer import Transfer
from lattice.system.constant_part import ConstantPart
from lattice.system.system import System

if TYPE_CHECKING:
    from lattice.geometry.lattice import Lattice


class TwoLevel:
    """The two-level preconditioner of a bordered system.

    Collective, as all methods.

    Parameters
    ----------
    system : System
        On the fine lattice.
    options : object
        The job's solve section.
    report : callable
        Takes lines for the log.
    """

    def __init__(self, system: System, options: Any, report: Callable[[str], None]) -> None:
        self.system, self.options, self.report = system, options, report
        lattice = self._choose_lattice()
        free = [u.name for u in system.unknowns if not u.condition.startswith("mean")]
        self.coarse = System(system.law, lattice, system.values, free, system.means, system.comm)
        self.transfer = Transfer(system.blocks, self.coarse.blocks, self._midpoint_rows())
        self.solver = Bordering(self.coarse, Direct(self.coarse))
        self.constant = ConstantPart(system.operator)
        self.smoother = SpectralSmoother(system, self.transfer.fine, self.constant, options.shift)
        self.ratio = self.coarse.root_size / system.root_size
        self._x, self._r = self.coarse.vector(), self.coarse.vector()
        self._y = self.coarse.vector()
        self._small, self._field, self._other = self.coarse.blocks.vector(), system.blocks.vector(), system.blocks.vector()
        self._work, self._rest = system.vector(), system.vector()

    def _choose_lattice(self) -> Lattice:
        return self.options.coarse_lattice

    def _midpoint_rows(self) -> tuple[bool, ...]:
        steady = self.system.lattice.nt == 1
        return tuple(e.evolving and not steady for e in self.system.law.equations)

    def update(self) -> None:
        """Restrict the point of linearisation, factorise the coarse Jacobian, invert the symbols."""
        operator = self.system.operator
        operator.copy_point(self._field)
        self.transfer.restrict(self._field, self._small, rows=False)
        self._match_units()
        self.coarse.pack(self.coarse.blocks.owned(self._small), operator.values, self._x)
        for condition, template in self.system.templates.items():
            self.transfer.restrict(template, self._small, rows=False)
            self.coarse.use_templates({condition: self._small})
        self.coarse.linearise(self._x)
        self.solver.update()
        self.constant.update()
        self.smoother.update()

    def _match_units(self) -> None:
        """Measure the coarse scalars in the fine system's units."""
        self.coarse.unknowns = self.system.unknowns

    def _down(self, r: Any, out: Any, rows: bool) -> None:
        """Restrict a vector of unknowns."""
        self._field.getArray()[:] = r.getArray(readonly=1)[: self.system.blocks.owned_size]
        self.transfer.restrict(self._field, self._small, rows)
        border = self.system.border_of(r) * self.ratio
        self.coarse.store(out, self._small.getArray(readonly=1), border)

    def _up(self, r: Any, out: Any, rows: bool) -> None:
        """Prolong a vector of unknowns."""
        self._small.getArray()[:] = r.getArray(readonly=1)[: self.coarse.blocks.owned_size]
        self.transfer.prolong(self._small, self._field, rows)
        border = self.coarse.border_of(r) / self.ratio
        self.system.store(out, self._field.getArray(readonly=1), border)

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to the coarse correction of `r`, smoothed once."""
        self._down(r, self._r, rows=True)
        self.solver.apply(self._r, self._y)
        self._up(self._y, y, rows=False)
        self.system.tangent(y, self._work)
        self._work.aypx(-1.0, r)
        self._smooth(self._work, y, self.smoother.apply)

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transpose: smoothing first, the coarse correction of what is left second."""
        self._rest.set(0.0)
        self._smooth(r, self._rest, self.smoother.apply_transpose)
        self.system.adjoint(self._rest, self._work)
        self._work.aypx(-1.0, r)
        self._down(self._work, self._r, rows=False)
        self.solver.apply_transpose(self._r, self._y)
        self._up(self._y, y, rows=True)
        y.axpy(1.0, self._rest)

    def _smooth(self, r: Any, y: Any, smooth: Callable[[Any, Any], None]) -> None:
        """Add the smoothed field part of `r` to `y`."""
        owned = self.system.blocks.owned_size
        self._field.getArray()[:] = r.getArray(readonly=1)[:owned]
        smooth(self._field, self._other)
        y.getArray()[:owned] += self._other.getArray(readonly=1)

    def destroy(self) -> None:
        """Free both levels."""
        for vector in (self._x, self._r, self._y, self._small, self._field, self._other, self._work, self._rest):
            vector.destroy()
        self.smoother.destroy()
        self.solver.destroy()
        self.transfer.destroy()
        self.coarse.destroy()
