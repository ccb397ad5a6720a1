"""The `coarse` preconditioner: two levels, multiplicative.

First the bordered system of the law re-discretised on a coarse lattice that still carries the active
modes, solved by LU or by patches; then one smoothing of what is left. The scalars are solved for on the
coarse lattice only. Transfer is by truncated Fourier spectra in all axes.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any, Protocol

from lattice.solve.bordering import Bordering
from lattice.solve.coarse_lattice import Choice, choose
from lattice.solve.coarse_solver import PatchedCoarse
from lattice.solve.direct import Direct
from lattice.solve.smoothers import SlabSmoother, SpectralSmoother
from lattice.spectral.transfer import Transfer
from lattice.spectral.transform import Transform
from lattice.system.constant_part import ConstantPart
from lattice.system.system import System
from lattice.system.timing import event
from lattice.system.unknowns import LOOSE

if TYPE_CHECKING:
    from lattice.solve.registry import Preconditioner


class Smoother(Protocol):
    """An approximate inverse of the field part that is good at what the coarse lattice does not carry."""

    def update(self) -> None:
        """Set up for the system's point of linearisation. Collective."""

    def apply(self, r: Any, y: Any) -> None:
        """Set the field vector `y` to the smoother times `r`. Collective."""

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transposed smoother times `r`. Collective."""

    def destroy(self) -> None:
        """Free everything PETSc holds. Collective."""


class TwoLevel:
    """The two-level preconditioner of a bordered system.

    Collective, as all methods. The coarse lattice and the smoother are chosen at the first `update`.

    Parameters
    ----------
    system : System
        On the fine lattice.
    options : object
        The job's solve section; `options.coarse` says what is not to be chosen.
    report : callable
        Takes lines for the log.

    Attributes
    ----------
    chosen : dict or None
        The coarse lattice and the smoother as keys of the job's section solve.coarse, once chosen.
    """

    def __init__(self, system: System, options: Any, report: Callable[[str], None]) -> None:
        self.system, self.options, self.report = system, options, report
        self.transform = Transform(system.blocks)
        self.constant = ConstantPart(system.operator)
        self._field, self._other = system.blocks.vector(), system.blocks.vector()
        self._work, self._rest = system.vector(), system.vector()
        self._made: list[Any] = []
        self.chosen: dict[str, Any] | None = None

    def update(self) -> None:
        """Restrict the point of linearisation, set up the coarse solver and the smoother."""
        self.constant.update()
        if not self._made:
            choice = choose(self.system, self.transform, self.constant, self.options.coarse)
            self.report(choice.reason)
            self._build(choice)
        with event("coarse set-up"):
            self._restrict_point()
            self.solver.update()
        with event("smoother set-up"):
            self.smoother.update()

    def _build(self, choice: Choice) -> None:
        """Make the coarse system, the transfer and the smoother."""
        system, options = self.system, self.options.coarse
        loose = [u.name for u in system.unknowns if u.condition == LOOSE]
        free = [u.name for u in system.unknowns if u.condition.startswith("phase")]
        self.coarse = System(
            system.law, choice.lattice, system.values, free, system.means, system.comm, loose
        )
        lattice = choice.lattice
        self.chosen = {"nt": lattice.nt, "nx": lattice.nx, "order": lattice.order_x}
        self.chosen |= {"smoother": choice.smoother, **({"ny": lattice.ny} if lattice.ny > 1 else {})}
        self.coarse.unknowns = system.unknowns  # the same units of the scalars on both levels
        self.coarse_transform = Transform(self.coarse.blocks)
        steady = system.lattice.nt == 1
        midpoint = tuple(e.evolving and not steady for e in system.law.equations)
        self.transfer = Transfer(self.transform, self.coarse_transform, midpoint)
        self.solver = self._make_solver()
        self.smoother = self._make_smoother(choice.smoother)
        self.ratio = self.coarse.root_size / system.root_size
        self._x, self._r, self._y = self.coarse.vector(), self.coarse.vector(), self.coarse.vector()
        self._small = self.coarse.blocks.vector()
        self._made = [
            *(self._x, self._r, self._y, self._small),
            *(self.smoother, self.solver, self.transfer, self.coarse_transform, self.coarse),
        ]
        assert options is not None

    def _make_solver(self) -> Preconditioner:
        if self.options.coarse.solver == "patches":
            return PatchedCoarse(self.coarse, self.options)
        return Bordering(
            self.coarse, Direct(self.coarse, prefix="coarse_", ranks=self.options.coarse.lu_ranks)
        )

    def _make_smoother(self, name: str) -> Smoother:
        options = self.options.coarse
        if name == "slabs":
            return SlabSmoother(self.system, options.slabs, options.slab_overlap, self.report)
        return SpectralSmoother(self.transform, self.constant, options.shift)

    def _restrict_point(self) -> None:
        """Linearise the coarse system about the restricted point, with the restricted phase conditions."""
        operator = self.system.operator
        operator.copy_point(self._field)
        self.transfer.restrict(self._field, self._small, rows=False)
        self.coarse.pack(self.coarse.blocks.owned(self._small), operator.values, self._x)
        for condition, template in self.system.templates.items():
            self.transfer.restrict(template, self._small, rows=False)
            self.coarse.use_templates({condition: self._small})
        self.coarse.loose_weight = self.system.loose_weight
        self.coarse.linearise(self._x)

    def _down(self, r: Any, out: Any, rows: bool) -> None:
        """Restrict a vector of unknowns."""
        with event("transfer"):
            self._field.getArray()[:] = r.getArray(readonly=1)[: self.system.blocks.owned_size]
            self.transfer.restrict(self._field, self._small, rows)
            border = self.system.border_of(r) * self.ratio
            self.coarse.store(out, self._small.getArray(readonly=1), border)

    def _up(self, r: Any, out: Any, rows: bool) -> None:
        """Prolong a vector of unknowns."""
        with event("transfer"):
            self._small.getArray()[:] = r.getArray(readonly=1)[: self.coarse.blocks.owned_size]
            self.transfer.prolong(self._small, self._field, rows)
            border = self.coarse.border_of(r) / self.ratio
            self.system.store(out, self._field.getArray(readonly=1), border)

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to the coarse correction of `r`, smoothed once."""
        self._down(r, self._r, rows=True)
        with event("coarse solve"):
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
        with event("coarse solve"):
            self.solver.apply_transpose(self._r, self._y)
        self._up(self._y, y, rows=True)
        y.axpy(1.0, self._rest)

    def _smooth(self, r: Any, y: Any, smooth: Callable[[Any, Any], None]) -> None:
        """Add the smoothed field part of `r` to `y`."""
        owned = self.system.blocks.owned_size
        self._field.getArray()[:] = r.getArray(readonly=1)[:owned]
        with event("smoother"):
            smooth(self._field, self._other)
        y.getArray()[:owned] += self._other.getArray(readonly=1)

    def destroy(self) -> None:
        """Free both levels."""
        for item in (*self._made, self._field, self._other, self._work, self._rest, self.transform):
            item.destroy()
