"""The field operator: a law's residual and its linearisation on a distributed lattice.

Every application is one halo exchange and one generated loop. A gauge component (a constraint component
that enters only under derivatives, as a streamfunction does) is free up to a constant on every level;
its equation carries minus its mean over the level, which makes that constant zero at a solution.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.blocks import Blocks
from lattice.geometry.lattice import Lattice
from lattice.geometry.subspace import Subspace
from lattice.kernels import forms
from lattice.kernels.build import Geometry, Kernel
from lattice.kernels.scheme import make_scheme
from lattice.laws.law import Law
from lattice.system.timing import event

if TYPE_CHECKING:
    from mpi4py import MPI

Array = NDArray[np.float64]
T = TypeVar("T")


def build_once(comm: MPI.Intracomm, make: Callable[[], T]) -> T:
    """Build generated code on one rank of every node first, so that the others find it in the cache.

    Collective.
    """
    from mpi4py import MPI

    node = comm.Split_type(MPI.COMM_TYPE_SHARED)
    made: T | None = make() if node.rank == 0 else None
    comm.Barrier()
    result = made if made is not None else make()
    node.Free()
    return result


def _odd_in_space(law: Law, component: str, subspace: Subspace | None) -> bool:
    place = law.components.index(component)
    mirrors = (subspace.mirror_x, subspace.mirror_y) if subspace else ()
    return any(signs is not None and signs[place] < 0 for signs in mirrors)


class FieldOperator:
    """Residual, tangent and adjoint of a law on a lattice shared by the ranks of a communicator.

    Collective, as every method that takes vectors.

    Parameters
    ----------
    law : Law
    lattice : Lattice
    comm : MPI.Intracomm
    subspace : Subspace, optional
        Of which all fields are; vectors hold the part of the lattice that carries them.

    Attributes
    ----------
    lattice, whole : Lattice
        The lattice of the vectors, and the one it is a part of: the same without a subspace.
    gauge : tuple of str
        Gauge components; those that a mirror makes odd in space have no constant that is free.
    """

    def __init__(
        self, law: Law, lattice: Lattice, comm: MPI.Intracomm, subspace: Subspace | None = None
    ) -> None:
        self.law, self.whole, self.comm = law, lattice, comm
        self.forms = {
            "residual": forms.residual_form(law),
            "tangent": forms.tangent_form(law),
            "adjoint": forms.adjoint_form(law),
            "rate": forms.rate_form(law),
        }
        reaching = [self.forms[name] for name in ("residual", "tangent", "adjoint")]
        self.scheme = make_scheme(lattice, reaching)
        self.blocks = Blocks(lattice, len(law.components), self.scheme.halo_x, comm, subspace)
        self.lattice = self.blocks.lattice
        self.gauge = tuple(c for c in law.symmetries.gauge if not _odd_in_space(law, c, subspace))
        self._kernels: dict[str, Kernel] = {}
        self._point = self.blocks.padded_vector()
        self._other = self.blocks.padded_vector()
        self._levels = comm.Split(self.blocks.block.t0, comm.rank) if self.gauge else None
        self._gauge = [law.components.index(c) for c in self.gauge]
        self.values: dict[str, float] = {}

    def kernel(self, name: str) -> Kernel:
        """Return a kernel by the name of its form, built at its first use; "by_<scalar>" differentiates.

        Collective at the first use.
        """
        if name not in self._kernels:
            if name not in self.forms:
                self.forms[name] = self._later_form(name)
            form = self.forms[name]
            self._kernels[name] = build_once(self.comm, lambda: Kernel(form, self.scheme))
            if self.values:
                self._kernels[name].prepare(self.geometry(self.values), self.values)
        return self._kernels[name]

    def _later_form(self, name: str) -> forms.Form:
        if name == "curvature":
            return forms.curvature_form(self.law)
        return forms.scalar_form(self.law, name.removeprefix("by_"))

    def geometry(self, values: Mapping[str, float]) -> Geometry:
        """Return spacings and coordinates of this rank's padded block for given period and lengths."""
        whole, part, blocks = self.whole, self.lattice, self.blocks
        dt = values["period"] / whole.nt
        dy, dx = values.get("length_y", 1.0) / whole.ny, values["length_x"] / whole.nx
        return Geometry(dt, dy, dx, blocks.coordinates(dy * part.ny, 1), blocks.coordinates(dx * part.nx, 2))

    def residual(self, u: Any, values: Mapping[str, float], out: Any) -> None:
        """Set `out` to the residual of the field vector `u`."""
        kernel = self.kernel("residual")
        kernel.prepare(self.geometry(values), values)
        self._exchange(u, self._other)
        with event("residual"):
            self._apply(kernel, out, [self._other])
        self._add_gauge(u, out)

    def linearise(self, u: Any, values: Mapping[str, float]) -> None:
        """Fix the point about which `tangent`, `adjoint`, `rate`, `by_scalar` and `rows` act."""
        self.values = dict(values)
        self._exchange(u, self._point)
        geometry = self.geometry(values)
        for name, kernel in self._kernels.items():
            if name != "residual":
                kernel.prepare(geometry, values)

    def tangent(self, v: Any, out: Any) -> None:
        """Set `out` to J v."""
        self._exchange(v, self._other)
        with event("tangent"):
            self._apply(self.kernel("tangent"), out, [self._point, self._other])
        self._add_gauge(v, out)

    def adjoint(self, w: Any, out: Any) -> None:
        """Set `out` to J^T w."""
        self._exchange(w, self._other)
        with event("adjoint"):
            self._apply(self.kernel("adjoint"), out, [self._point, self._other])
        self._add_gauge(w, out)

    def curvature(self, v: Any, out: Any) -> None:
        """Set `out` to the second derivative of the residual along v, twice."""
        self._exchange(v, self._other)
        self._apply(self.kernel("curvature"), out, [self._point, self._other])

    def rate(self, out: Any) -> None:
        """Set `out` to the time differences of the point at the midpoints, zero for constraints."""
        self._apply(self.kernel("rate"), out, [self._point])

    def by_scalar(self, name: str, out: Any) -> None:
        """Set `out` to the derivative of the residual with respect to a scalar."""
        if name == "period":
            self.rate(out)
            out.scale(-1.0 / self.values["period"])
        elif name.startswith("source_"):
            array = self.blocks.owned(out)
            array[...] = 0.0
            array[..., self.law.components.index(name.removeprefix("source_"))] = -1.0
        else:
            self._apply(self.kernel(f"by_{name}"), out, [self._point])

    def padded_point(self) -> Array:
        """View the padded block of the point of linearisation. Not collective."""
        return self.blocks.padded(self._point)

    def copy_point(self, out: Any) -> None:
        """Set a field vector to the point of linearisation. Not collective."""
        inner = tuple(
            slice(h, h + n) for h, n in zip(self.blocks.halos, self.blocks.block.shape, strict=True)
        )
        self.blocks.owned(out)[...] = self.padded_point()[inner]

    def component_means(self, u: Any) -> Array:
        """Return the mean of every component over all nodes, on every rank."""
        local = self.blocks.owned(u).reshape(-1, self.blocks.components).sum(axis=0)
        total: Array = self.comm.allreduce(local) / self.lattice.nodes
        return total

    def level_means(self, u: Any, component: int) -> Array:
        """Return the mean of a component over each of this rank's levels."""
        assert self._levels is not None
        local = self.blocks.owned(u)[..., component].sum(axis=(1, 2))
        total = np.empty_like(local)
        self._levels.Allreduce(local, total)
        means: Array = total / (self.lattice.ny * self.lattice.nx)
        return means

    def _exchange(self, field: Any, padded: Any) -> None:
        with event("halo"):
            self.blocks.exchange(field, padded)

    def _add_gauge(self, u: Any, out: Any) -> None:
        for component in self._gauge:
            means = self.level_means(u, component)
            self.blocks.owned(out)[..., component] -= means[:, None, None]

    def _apply(self, kernel: Kernel, out: Any, padded: list[Any]) -> None:
        arrays = [self.blocks.padded(vector) for vector in padded]
        kernel(self.blocks.owned(out), *arrays)

    def destroy(self) -> None:
        """Free vectors and the DMDA. Collective."""
        self._point.destroy()
        self._other.destroy()
        self.blocks.destroy()
        if self._levels is not None:
            self._levels.Free()
