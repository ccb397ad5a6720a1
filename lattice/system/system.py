"""The bordered system: fields and free scalars as one nonlinear problem in one PETSc vector.

The vector of unknowns holds every rank's part of the field and, on the last rank, one number per free
scalar, `z = sqrt(N) * scalar / unit` with N the numbers in the field. The residual vector holds the
law's residual and, in the same places, `sqrt(N)` times each condition, so that its squared norm over N
is the mean square residual plus the squares of the conditions.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import LatticeError
from lattice.geometry.blocks import Blocks
from lattice.geometry.folding import Unfolding
from lattice.geometry.lattice import Lattice
from lattice.geometry.subspace import Subspace
from lattice.kernels.forms import frame_names
from lattice.laws.law import Law
from lattice.system.invariant import check_means, check_subspace, held_scalars, lost_conditions
from lattice.system.operator import FieldOperator
from lattice.system.phases import check_independence, flat_start
from lattice.system.unknowns import FRAME, LOOSE, Values, loose_unknowns, pair_unknowns

if TYPE_CHECKING:
    from mpi4py import MPI

Array = NDArray[np.float64]
FLAT = 1e-12
"""A phase whose derivative is not larger than this, as a share of the field, does not change it: rounding."""


class System:
    """A law on a lattice with its free scalars and conditions.

    Collective.

    Parameters
    ----------
    law : Law
    lattice : Lattice
    values : mapping of str to float
        Every scalar by name; the free ones at their first guess. Drifts and rotation are 0 where absent.
    free : sequence of str
        Names of the free scalars; sources of open means are added.
    means : mapping of str to float
        Given mean of components whose mean is open; 0 where absent.
    comm : MPI.Intracomm
    loose : sequence of str
        Names of further scalars to be free, fixed by no condition, for least squares: the residual has a
        zero in their place, and the Jacobian a row of zeros.
    subspace : Subspace, optional
        Of which all fields are: then vectors hold the part of the lattice that carries it.

    Attributes
    ----------
    lattice, whole_lattice : Lattice
        The lattice of the vectors, and the one given: the same without a subspace.
    whole_blocks : Blocks
        How `whole_field` is distributed.
    loose_weight : float
        What stands for that zero on the diagonal of the Jacobian where an inverse of it is made.
    """

    def __init__(
        self,
        law: Law,
        lattice: Lattice,
        values: Mapping[str, float],
        free: Sequence[str],
        means: Mapping[str, float],
        comm: MPI.Intracomm,
        loose: Sequence[str] = (),
        subspace: Subspace | None = None,
    ) -> None:
        self.law, self.comm, self.subspace = law, comm, subspace
        self.values: Values = dict(values)
        for name in frame_names(law):
            self.values.setdefault(name, 0.0)
        if subspace:
            check_subspace(law, subspace, self.values)
        lost = lost_conditions(law, subspace)
        check_means(means, lost)
        self._held = held_scalars(law, lost)
        self.unknowns = pair_unknowns(law, lattice, free, self.values, lost)
        self.unknowns += loose_unknowns(loose, self.unknowns, self.values)
        self.means = dict(means)
        self.loose_weight = 1.0
        self.operator = FieldOperator(law, lattice, comm, subspace)
        self.lattice, self.whole_lattice = self.operator.lattice, lattice
        self.blocks = self.operator.blocks
        self.root_size = float(np.sqrt(self.blocks.size))
        self.last = comm.rank == comm.size - 1
        self.columns = [self.blocks.vector() for _ in self.unknowns]
        self._field_in, self._field_out = self.blocks.vector(), self.blocks.vector()
        self._templates: dict[str, Any] = {}
        self._offsets: dict[str, float] = {}
        self.whole_blocks = Blocks(lattice, self.blocks.components, 0, comm) if subspace else self.blocks
        self._unfolding = Unfolding(self.blocks, self.whole_blocks, subspace) if subspace else None

    def vector(self) -> Any:
        """Return a new vector of unknowns; the caller destroys it."""
        from petsc4py import PETSc

        count = len(self.unknowns)
        local = self.blocks.owned_size + (count if self.last else 0)
        return PETSc.Vec().createMPI((local, self.blocks.size + count), comm=self.comm)

    def pack(self, owned: Array, values: Mapping[str, float], x: Any) -> None:
        """Set a vector of unknowns from this rank's field and the scalars' values."""
        self.values.update(values)
        numbers = [self.values[u.name] * self.root_size / u.unit for u in self.unknowns]
        self.store(x, owned.reshape(-1), np.array(numbers))

    def field_of(self, x: Any) -> Array:
        """Return a copy of this rank's part of the field, shape (levels, rows, columns, components)."""
        array = x.getArray(readonly=1)
        return np.array(array[: self.blocks.owned_size]).reshape(self.blocks.shape)

    def whole_field(self, x: Any) -> Array:
        """Return a copy of this rank's part of the whole field, as `whole_blocks` cut it. Collective."""
        owned = self.field_of(x)
        return self._unfolding.unfold(owned) if self._unfolding else owned

    def project(self, owned: Array) -> Array:
        """Return this rank's part of the unknown field from that of a whole one. Collective.

        The nearest one in the subspace, where there is one.
        """
        return self._unfolding.project(owned) if self._unfolding else owned

    def values_of(self, x: Any) -> Values:
        """Return every scalar by name, on every rank."""
        numbers = self.border_of(x)
        found = {
            u.name: float(z * u.unit / self.root_size) for u, z in zip(self.unknowns, numbers, strict=True)
        }
        return {**self.values, **found, **self._held}

    def border_of(self, x: Any) -> Array:
        """Return the border part of a vector of unknowns, on every rank."""
        part = x.getArray(readonly=1)[self.blocks.owned_size :] if self.last else None
        numbers: Array = self.comm.bcast(None if part is None else np.array(part), root=self.comm.size - 1)
        return numbers

    def store(self, x: Any, owned: Array, border: Array) -> None:
        """Set a vector of unknowns from this rank's flat field and the border part."""
        array = x.getArray()
        array[: self.blocks.owned_size] = owned
        if self.last:
            array[self.blocks.owned_size :] = border

    def _load_field(self, x: Any) -> Any:
        self._field_in.getArray()[:] = x.getArray(readonly=1)[: self.blocks.owned_size]
        return self._field_in

    def residual(self, x: Any, out: Any) -> None:
        """Set `out` to the residual of the bordered system at `x`."""
        field = self._load_field(x)
        values = self.values_of(x)
        self.operator.residual(field, values, self._field_out)
        self.store(out, self._field_out.getArray(readonly=1), self._conditions(field))

    def _conditions(self, field: Any) -> Array:
        """Return sqrt(N) times every condition."""
        phases = self._phase_products(field)
        means = self.operator.component_means(field) if self._has_means() else np.zeros(0)
        result = []
        for unknown in self.unknowns:
            kind, _, which = unknown.condition.partition("_")
            if kind == "mean":
                found = means[self.law.components.index(which)] - self.means.get(which, 0.0)
                result.append(self.root_size * found)
            elif kind == LOOSE:
                result.append(0.0)
            else:
                result.append(phases[unknown.condition] - self._offsets[unknown.condition])
        return np.array(result)

    def _has_means(self) -> bool:
        return any(u.condition.startswith("mean") for u in self.unknowns)

    def _phase_products(self, field: Any) -> dict[str, float]:
        """Return <template, field> / sqrt(N) of every phase condition."""
        array = field.getArray(readonly=1)
        local = np.array([t.getArray(readonly=1) @ array for t in self._templates.values()])
        total = self.comm.allreduce(local) / self.root_size if self._templates else local
        return dict(zip(self._templates, total.tolist(), strict=True))

    def set_reference(self, x: Any) -> None:
        """Fix the phase conditions: the state may not slide along itself away from `x`.

        Raises
        ------
        LatticeError
            If the field at `x` does not vary along a phase that is a condition, or if two of them change it
            in the same way.
        """
        field = self._load_field(x)
        self.operator.linearise(field, self.values_of(x))
        for unknown in self.unknowns:
            if unknown.condition.startswith("phase") and unknown.condition not in self._templates:
                self._templates[unknown.condition] = self.blocks.vector()
        for condition, template in self._templates.items():
            if condition == "phase_t":
                self.operator.rate(template)
            else:
                self.operator.by_scalar(FRAME[condition], template)
            size = template.norm() / self.root_size
            if not np.isfinite(size):
                raise LatticeError("the field is not finite everywhere; start from another one")
            if not size > FLAT * field.norm() / self.root_size:
                raise LatticeError(flat_start(condition, self._named(condition)))
            template.scale(1.0 / size)
        check_independence({c: (self._named(c), t) for c, t in self._templates.items()}, self.comm)
        self._offsets = self._phase_products(field)

    def _named(self, condition: str) -> str:
        """Return the unknown that a condition fixes."""
        return next(u.name for u in self.unknowns if u.condition == condition)

    def linearise(self, x: Any) -> None:
        """Fix the point of the Jacobian and compute its border columns."""
        field = self._load_field(x)
        self.operator.linearise(field, self.values_of(x))
        for unknown, column in zip(self.unknowns, self.columns, strict=True):
            self.operator.by_scalar(unknown.name, column)
            column.scale(unknown.unit / self.root_size)

    def tangent(self, v: Any, out: Any) -> None:
        """Set `out` to the bordered Jacobian times `v`."""
        field, border = self._load_field(v), self.border_of(v)
        self.operator.tangent(field, self._field_out)
        for column, z in zip(self.columns, border, strict=True):
            self._field_out.axpy(float(z), column)
        self.store(out, self._field_out.getArray(readonly=1), self.border_rows(field))

    def adjoint(self, w: Any, out: Any) -> None:
        """Set `out` to the transpose of the bordered Jacobian times `w`."""
        field, border = self._load_field(w), self.border_of(w)
        self.operator.adjoint(field, self._field_out)
        for unknown, z in zip(self.unknowns, border, strict=True):
            self.add_row(unknown.condition, float(z), self._field_out)
        array = field.getArray(readonly=1)
        local = np.array([column.getArray(readonly=1) @ array for column in self.columns])
        products = self.comm.allreduce(local) if self.columns else local
        self.store(out, self._field_out.getArray(readonly=1), products)

    def border_rows(self, field: Any) -> Array:
        """Return the border rows of the Jacobian times a field vector, on every rank."""
        phases = self._phase_products(field)
        means = self.operator.component_means(field) if self._has_means() else np.zeros(0)
        rows = []
        for unknown in self.unknowns:
            kind, _, which = unknown.condition.partition("_")
            if kind == "mean":
                rows.append(self.root_size * means[self.law.components.index(which)])
            else:
                rows.append(phases.get(unknown.condition, 0.0))
        return np.array(rows)

    def add_row(self, condition: str, z: float, field: Any) -> None:
        """Add z times a border row, as a field, to a field vector."""
        kind, _, which = condition.partition("_")
        if kind == "mean":
            owned = self.blocks.owned(field)
            owned[..., self.law.components.index(which)] += z * self.root_size / self.lattice.nodes
        elif kind == "phase":
            field.axpy(z / self.root_size, self._templates[condition])

    def use_templates(self, templates: Mapping[str, Any]) -> None:
        """Take over the phase templates of another lattice, already on this one; offsets stay zero.

        For a system that serves linear solves only. Collective.
        """
        for condition, template in templates.items():
            if condition not in self._templates:
                self._templates[condition] = self.blocks.vector()
            template.copy(self._templates[condition])

    @property
    def templates(self) -> Mapping[str, Any]:
        """Field vectors of all phase conditions, by condition."""
        return self._templates

    def template(self, condition: str) -> Any:
        """Return the field vector of a phase condition, of root mean square 1."""
        return self._templates[condition]

    def destroy(self) -> None:
        """Free every vector and the operator. Collective."""
        for vector in (*self.columns, *self._templates.values(), self._field_in, self._field_out):
            vector.destroy()
        if self._unfolding:
            self._unfolding.destroy()
            self.whole_blocks.destroy()
        self.operator.destroy()
