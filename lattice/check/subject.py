"""The state under check: its law, its lattice, the bordered system it solves."""

from __future__ import annotations

import os
from contextlib import suppress
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import LatticeError
from lattice.laws.catalogue import law_names, load_law, read_law
from lattice.laws.law import Parameter
from lattice.starts.streaming import on_root
from lattice.store.agreement import raise_together
from lattice.store.statefile import StateFile, read_meta
from lattice.store.statemeta import StateMeta
from lattice.system.system import System
from lattice.system.unknowns import FRAME, Values, pair_unknowns

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.geometry.lattice import Lattice
    from lattice.laws.law import Law

Array = NDArray[np.float64]


@dataclass
class Subject:
    """A stored state with the system it is to solve; `destroy` it.

    Parameters
    ----------
    path : str
        The state file.
    meta : StateMeta
        Its record.
    law : Law
        Read from the record's own text.
    system : System
        With every phase that the field has as a condition.
    x : PETSc.Vec
        The state as the vector of unknowns.
    flat : str
        Why the field has fewer phases than the law allows, empty where it has all.
    """

    path: str
    meta: StateMeta
    law: Law
    system: System
    x: Any
    flat: str = ""

    @property
    def lattice(self) -> Lattice:
        """Nodes and orders of the state."""
        return self.system.lattice

    @property
    def comm(self) -> MPI.Intracomm:
        """The ranks that share the state."""
        return self.system.comm

    @property
    def values(self) -> Values:
        """Every scalar by name."""
        return self.system.values

    @property
    def owned(self) -> Array:
        """The rank's own part of the field, shape (levels, rows, columns, components)."""
        return self.system.field_of(self.x)

    def destroy(self) -> None:
        """Free everything. Collective."""
        self.x.destroy()
        self.system.destroy()


def open_subject(path: str | os.PathLike[str], comm: MPI.Intracomm) -> Subject:
    """Read a state file for a check.

    Collective. Every rank reads its own block.

    Raises
    ------
    LatticeError
        On every rank, where the file cannot be used.
    """
    meta = on_root(comm, lambda: read_meta(path))
    law = law_of(meta)
    values = {name: float(value) for name, value in meta.values.items()}
    values.setdefault("period", 1.0)
    free = complete_free(law, meta.lattice, meta.free, values)
    system = System(law, meta.lattice, values, free, {}, comm)
    owned, error = np.zeros(system.blocks.shape), None
    try:
        with StateFile(path) as file:
            owned = file.block(system.blocks.block)
    except LatticeError as caught:
        error = caught
    raise_together(comm, error)
    return make_subject(os.fspath(path), meta, law, system, owned)


def make_subject(path: str, meta: StateMeta, law: Law, system: System, owned: Array) -> Subject:
    """Return a subject whose system has the state's own means and all its phases as conditions.

    Collective. Phases along which the field does not change are left out.
    """
    values, lattice, comm = system.values, system.lattice, system.comm
    system.means.update(_means(system, owned))
    x = system.vector()
    system.pack(owned, values, x)
    flat = ""
    for _ in range(4):
        try:
            system.set_reference(x)
            break
        except LatticeError as error:
            flat = flat or str(error)
            free = _without_flat(system, x)
        means = system.means
        x.destroy()
        system.destroy()
        system = System(law, lattice, values, free, means, comm)
        x = system.vector()
        system.pack(owned, values, x)
    return Subject(path, meta, law, system, x, flat)


def _means(system: System, owned: Array) -> dict[str, float]:
    local = owned.reshape(-1, owned.shape[-1]).sum(axis=0)
    means = system.comm.allreduce(local) / system.lattice.nodes
    return {c: float(m) for c, m in zip(system.law.components, means, strict=True)}


def _without_flat(system: System, x: Any) -> tuple[str, ...]:
    """Return the free scalars without one whose phase the field lacks or has twice."""
    phases = [u for u in system.unknowns if u.condition.startswith("phase")]
    kept = [u.name for u in phases]
    for unknown in reversed(phases):
        alone = System(system.law, system.lattice, system.values, (unknown.name,), system.means, system.comm)
        y = alone.vector()
        alone.pack(system.field_of(x), system.values, y)
        failed = False
        with suppress(LatticeError):
            failed = True
            alone.set_reference(y)
            failed = False
        y.destroy()
        alone.destroy()
        if failed:
            return tuple(name for name in kept if name != unknown.name)
    return tuple(kept[:-1])


def law_of(meta: StateMeta) -> Law:
    """Return the law that a record holds: the shipped one where its text is the same."""
    if meta.law in law_names():
        shipped = load_law(meta.law)
        if shipped.text == meta.text and shipped.components == meta.components:
            return shipped
    parameters = {name: Parameter(name, value) for name, value in meta.parameters.items()}
    return read_law(meta.law, meta.text, meta.components, parameters, meta.dimensions)


def complete_free(law: Law, lattice: Lattice, free: tuple[str, ...], values: Values) -> tuple[str, ...]:
    """Return the free scalars of a solve, with the own scalar of every phase that it held.

    A state solved with its drift held is singular along its shift; for a check every phase is a condition.
    """
    own = {"phase_t": "period", **FRAME}
    asked = tuple(name for name in free if not name.startswith("source_"))
    filled = {**dict.fromkeys(own.values(), 0.0), **values}
    taken = {u.condition for u in pair_unknowns(law, lattice, asked, filled)}
    phases = ["phase_t"] if lattice.nt > 1 else []
    phases += [f"phase_{axis}" for axis in "xy"[: law.dimensions] if law.symmetries.homogeneous[axis]]
    phases += ["phase_rotation"] if law.rotating_pair else []
    return (*asked, *(own[p] for p in phases if p not in taken and own[p] not in asked))


def foreign_law(meta: StateMeta) -> str:
    """Return why a file's equations are not those of the law it names; empty where they are."""
    if meta.law not in law_names():
        return ""
    shipped = load_law(meta.law)
    if shipped.text == meta.text and shipped.components == meta.components:
        return ""
    return (
        f"the file names the law {meta.law}, whose equations here are {'; '.join(shipped.text)}, and holds "
        f"{'; '.join(meta.text)}: a state of another law"
    )
