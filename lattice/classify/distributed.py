"""A state spread over the ranks: read from a file, carried to another lattice, cut to one of its repeats."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from lattice.classify.spectra import Real
from lattice.geometry.block import Block
from lattice.geometry.blocks import Blocks
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.store.statemeta import StateMeta


@dataclass(frozen=True)
class DistributedState:
    """A state and how it is distributed; `destroy` it.

    Parameters
    ----------
    law : Law
    values : dict of str to float
        Every scalar by name.
    blocks : Blocks
        Of its lattice, without halo.
    owned : ndarray, shape blocks.shape
        This rank's part.
    """

    law: Law
    values: dict[str, float]
    blocks: Blocks
    owned: Real

    @property
    def lattice(self) -> Lattice:
        """Its lattice."""
        return self.blocks.lattice

    def destroy(self) -> None:
        """Free what PETSc holds. Collective."""
        self.blocks.destroy()


def make_state(
    law: Law, lattice: Lattice, values: Mapping[str, float], whole: Real, comm: MPI.Intracomm
) -> DistributedState:
    """Return a state from a whole field that every rank has. Collective."""
    blocks = Blocks(lattice, len(law.components), 0, comm)
    return DistributedState(law, dict(values), blocks, np.ascontiguousarray(whole[blocks.block.slices]))


@contextmanager
def stored_state(path: str | os.PathLike[str], comm: MPI.Intracomm) -> Iterator[DistributedState]:
    """Read a state file, every rank its own part. Collective.

    Raises
    ------
    StateFileError
        If the file cannot be used.
    """
    from lattice.store.statefile import StateFile

    with StateFile(path) as file:
        law = law_of(file.meta)
        blocks = Blocks(file.meta.lattice, len(law.components), 0, comm)
        values = {**law.defaults, **file.meta.values}
        state = DistributedState(law, values, blocks, np.ascontiguousarray(file.block(blocks.block)))
    yield state
    state.destroy()


def law_of(meta: StateMeta) -> Law:
    """Return the law of a stored state, read from the equations it keeps."""
    from lattice.laws.catalogue import law_names, load_law, read_law

    if meta.law in law_names():
        law = load_law(meta.law)
        if law.text == tuple(meta.text):
            return law
    return read_law("own", meta.text, meta.components, dict(meta.parameters), meta.dimensions)


def carried(state: DistributedState, shape: tuple[int, int, int]) -> DistributedState:
    """Return a state on a lattice with other nodes, by its Fourier series; new in any case. Collective."""
    owned = state.owned
    for nodes in _ways(state.lattice.shape, shape):
        lattice = replace(state.lattice, nt=nodes[0], ny=nodes[1], nx=nodes[2])
        blocks = Blocks(lattice, state.blocks.components, 0, state.blocks.comm)
        moved = DistributedState(state.law, dict(state.values), blocks, _transferred(state, owned, blocks))
        if owned is not state.owned:
            state.destroy()
        state, owned = moved, moved.owned
    return state


def _ways(old: tuple[int, ...], new: tuple[int, ...]) -> list[tuple[int, ...]]:
    """Return the lattices to pass through: a transfer makes every axis finer, or none."""
    finer = tuple(max(a, b) for a, b in zip(old, new, strict=True))
    return [finer, new] if finer not in (old, new) else [new]


def _transferred(state: DistributedState, owned: Real, blocks: Blocks) -> Real:
    from lattice.spectral.transfer import Transfer
    from lattice.spectral.transform import Transform

    if blocks.lattice.shape == state.lattice.shape:
        return owned.copy()
    old, new = Transform(state.blocks), Transform(blocks)
    fine, coarse = (new, old) if blocks.lattice.nodes > state.lattice.nodes else (old, new)
    transfer = Transfer(fine, coarse, (False,) * blocks.components)
    source, target = state.blocks.vector(), blocks.vector()
    state.blocks.owned(source)[...] = owned
    (transfer.prolong if fine is new else transfer.restrict)(source, target, rows=False)
    found = blocks.owned(target).copy()
    for item in (transfer, old, new, source, target):
        item.destroy()
    return found


def cut(state: DistributedState, repeats: tuple[int, int, int]) -> DistributedState:
    """Return the first of the repeats of a state, on the nodes it has there. Collective.

    Exact: where the nodes are no multiple of the repeats, the state is first carried to ones that are.

    Parameters
    ----------
    state : DistributedState
    repeats : tuple of int
        How often it repeats along t, y and x.
    """
    shape = state.lattice.shape
    nodes = tuple(r * -(-n // r) for n, r in zip(shape, repeats, strict=True))
    whole = state if nodes == shape else carried(state, nodes)  # type: ignore[arg-type]
    nt, ny, nx = (n // r for n, r in zip(nodes, repeats, strict=True))
    blocks = Blocks(
        replace(state.lattice, nt=nt, ny=ny, nx=nx), state.blocks.components, 0, state.blocks.comm
    )
    values = dict(state.values)
    for name, count in zip(("period", "length_y", "length_x"), repeats, strict=True):
        if name in values:
            values[name] /= count
    owned = taken(whole, blocks.block)
    if whole is not state:
        whole.destroy()
    return DistributedState(state.law, values, blocks, owned)


def one_level(state: DistributedState, velocity: Mapping[str, float]) -> DistributedState:
    """Return the first level of a state that is at rest in a frame, as a state of one level. Collective."""
    blocks = Blocks(replace(state.lattice, nt=1), state.blocks.components, 0, state.blocks.comm)
    values = {**state.values, **velocity, "period": 1.0}
    return DistributedState(state.law, values, blocks, taken(state, blocks.block))


def taken(state: DistributedState, block: Block) -> Real:
    """Return the part of a state on a block, which may differ from rank to rank. Collective."""
    from petsc4py import PETSc

    blocks = state.blocks
    places = [np.arange(part.start, part.stop) for part in block.slices]
    nodes = blocks.node_numbers(*np.ix_(*places)).reshape(-1)
    source = blocks.vector()
    blocks.owned(source)[...] = state.owned
    target = PETSc.Vec().createMPI((nodes.size * blocks.components, None), comm=blocks.comm)
    wanted = PETSc.IS().createBlock(blocks.components, nodes.astype(PETSc.IntType), comm=blocks.comm)
    first = target.getOwnershipRange()[0]
    own = PETSc.IS().createStride(target.getLocalSize(), first, 1, comm=blocks.comm)
    scatter = PETSc.Scatter().create(source, wanted, target, own)
    scatter.begin(source, target)
    scatter.end(source, target)
    found = np.array(target.getArray(readonly=1)).reshape(*block.shape, blocks.components)
    for item in (scatter, wanted, own, source, target):
        item.destroy()
    return found
