"""The counts of a law on a lattice that costs depend on: no PETSc, no MPI, nothing compiled."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from lattice.errors import InputError
from lattice.geometry.blocks import largest_rank_count, process_grid
from lattice.geometry.lattice import Lattice
from lattice.geometry.subspace import Subspace
from lattice.kernels import forms
from lattice.kernels.rows import row_points
from lattice.kernels.scheme import Scheme, make_scheme
from lattice.kernels.source import generate
from lattice.laws.law import Law
from lattice.system.invariant import lost_conditions
from lattice.system.unknowns import pair_unknowns


@dataclass(frozen=True)
class Problem:
    """A law on a lattice, as numbers.

    Parameters
    ----------
    lattice : Lattice
        The part that is distributed, where the fields lie in a subspace.
    components, scalars : int
        Values per node, and free scalars, each with a phase or mean as condition.
    halo : int
        Nodes around a rank's block.
    nonzeros_per_node : int
        Of the assembled Jacobian, all components of a node together.
    flops_per_node : int
        Of one product with the Jacobian.
    """

    lattice: Lattice
    components: int
    scalars: int
    halo: int
    nonzeros_per_node: int
    flops_per_node: int

    @property
    def dimensions(self) -> int:
        """Space dimensions."""
        return self.lattice.dimensions

    @property
    def numbers(self) -> int:
        """Numbers in the field."""
        return self.lattice.nodes * self.components

    @property
    def unknowns(self) -> int:
        """Field and scalars."""
        return self.numbers + self.scalars

    @property
    def nonzeros(self) -> int:
        """Of the assembled Jacobian."""
        return self.lattice.nodes * self.nonzeros_per_node

    @property
    def axes(self) -> int:
        """Axes with more than one node."""
        return sum(nodes > 1 for nodes in self.lattice.shape)

    @property
    def most_ranks(self) -> int:
        """Most ranks that can share the lattice."""
        return largest_rank_count(self.lattice, self.halo)

    def owned(self, ranks: int) -> int:
        """Return the numbers of the largest rank's block."""
        return self._block(ranks, 0) * self.components

    def padded(self, ranks: int) -> int:
        """Return the numbers of the largest rank's block with its halo."""
        return self._block(ranks, 2 * self.halo) * self.components

    def _block(self, ranks: int, more: int) -> int:
        grid = process_grid(ranks, self.lattice, self.halo)
        if grid is None:
            raise InputError(
                f"must be at most {self.most_ranks} and leave every rank a block as wide as its halo of"
                f" {self.halo} nodes, got {ranks}",
                key="--ranks",
            )
        total = 1
        for nodes, parts in zip(self.lattice.shape, grid, strict=True):
            total *= -(-nodes // parts) + (more if nodes > 1 else 0)
        return total


def problem_of(
    law: Law,
    lattice: Lattice,
    free: Sequence[str],
    values: Mapping[str, float],
    subspace: Subspace | None = None,
) -> Problem:
    """Return the counts of a law on a lattice with free scalars.

    Parameters
    ----------
    law : Law
    lattice : Lattice
    free : sequence of str
        Names of the free scalars, without the sources of open means.
    values : mapping of str to float
        Every scalar by name.
    subspace : Subspace, optional
        Of which all fields are.
    """
    scheme = make_scheme(lattice, _forms(law))
    stride, flops = _per_node(law, scheme, lattice.nt > 1)
    paired = pair_unknowns(law, lattice, tuple(free), dict(values), lost_conditions(law, subspace))
    part = subspace.part(lattice) if subspace else lattice
    return Problem(part, len(law.components), len(paired), scheme.halo_x, stride, flops)


def _forms(law: Law) -> list[forms.Form]:
    return [forms.residual_form(law), forms.tangent_form(law), forms.adjoint_form(law)]


def _per_node(law: Law, scheme: Scheme, moving: bool) -> tuple[int, int]:
    """Return the nonzeros of a node's rows and the operations of a tangent there."""
    tangent = forms.tangent_form(law)
    points = row_points(tangent, scheme)
    levels = [scheme.levels if e.evolving and moving else 1 for e in law.equations]
    stride = sum(len(row) * count for row, count in zip(points, levels, strict=True))
    return stride, generate(tangent, scheme).flops
