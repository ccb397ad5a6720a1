"""The lattice on the ranks: grids of ranks, blocks, halo exchange, refusals."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.blocks import Blocks, check_halo, largest_rank_count, process_grid
from lattice.geometry.lattice import Lattice
from tests.parallel import results

nodes = st.integers(1, 40)
halos = st.integers(1, 8)
# A lattice in two dimensions has at least two rows.
lattices = st.one_of(
    st.builds(lambda nt, nx: Lattice(nt, 1, nx), nodes, st.integers(2, 40)),
    st.builds(lambda nt, ny, nx: Lattice(nt, ny, nx, 2), nodes, st.integers(2, 40), st.integers(2, 40)),
)


def narrowest(lattice: Lattice, grid: tuple[int, ...]) -> list[int]:
    """Return the fewest nodes of a rank on each axis that is cut; the remainder goes to other ranks."""
    return [n // p for n, p in zip(lattice.shape, grid, strict=True) if p > 1]


@given(st.integers(1, 24), lattices, halos)
def test_a_grid_uses_all_ranks_and_leaves_each_at_least_a_halo(
    ranks: int, lattice: Lattice, halo: int
) -> None:
    grid = process_grid(ranks, lattice, halo)
    possible = [
        g
        for g in itertools.product(range(1, ranks + 1), repeat=3)
        if np.prod(g) == ranks and all(n >= halo for n in narrowest(lattice, g))
        and all(n > 1 or p == 1 for n, p in zip(lattice.shape, g, strict=True))
    ]  # fmt: skip
    assert (grid in possible) if possible else grid is None


@given(lattices, halos)
def test_the_largest_rank_count_works_and_no_larger_one_does(lattice: Lattice, halo: int) -> None:
    most = largest_rank_count(lattice, halo)
    assert process_grid(most, lattice, halo) is not None
    assert all(process_grid(more, lattice, halo) is None for more in range(most + 1, most + 12))


def test_a_grid_cuts_the_axis_that_costs_least_halo() -> None:
    assert process_grid(2, Lattice(64, 1, 16), 3) == (2, 1, 1)
    assert process_grid(2, Lattice(16, 1, 64), 3) == (1, 1, 2)
    assert process_grid(16, Lattice(64, 1, 64), 2) == (4, 1, 4)
    assert process_grid(3, Lattice(1, 30, 12, 2), 2) == (1, 3, 1)


@pytest.mark.parametrize(
    ("lattice", "halo", "message"),
    [
        (Lattice(2, 1, 16), 3, "lattice.nt: nt = 2 is smaller than the halo of 3 nodes"),
        (Lattice(8, 1, 2), 3, "lattice.nx: nx = 2 is smaller than the halo of 3 nodes"),
        (Lattice(1, 1, 1), 1, "lattice.nx: nx = 1 is smaller than the halo of 2 nodes"),
        (Lattice(1, 3, 16, 2), 4, "lattice.ny: ny = 3 is smaller than the halo of 4 nodes"),
        (Lattice(1, 1, 16, 2), 4, "lattice.ny: ny = 1 is smaller than the halo of 4 nodes"),
    ],
)
def test_a_lattice_narrower_than_its_halo_is_refused(lattice: Lattice, halo: int, message: str) -> None:
    with pytest.raises(InputError) as caught:
        check_halo(lattice, halo)
    assert message in str(caught.value)
    assert "raise" in str(caught.value)
    assert "or lower the orders" in str(caught.value)


def test_the_block_of_one_rank_is_the_whole_lattice() -> None:
    from mpi4py import MPI

    lattice = Lattice(5, 6, 7, 2)
    blocks = Blocks(lattice, 3, 2, MPI.COMM_SELF)
    assert blocks.block == Block.whole(lattice)
    assert blocks.shape == (5, 6, 7, 3)
    assert blocks.padded_shape == (9, 10, 11, 3)
    assert (blocks.owned_size, blocks.size) == (630, 630)
    blocks.destroy()


def test_every_node_is_owned_by_one_rank(ranks: int) -> None:
    for name, found in results(ranks)["blocks"].items():
        assert found["owned"] == [1, 1], name
        assert found["ranks"] == ranks, name


def test_the_halo_is_that_of_the_whole_field_wrapped_around(ranks: int) -> None:
    # numpy.pad of the whole array is the reference, corners included; an exchange only copies.
    for name, found in results(ranks)["blocks"].items():
        assert found["halo"] == 0.0, name
        assert found["coordinates"] == 0.0, name


def test_no_block_is_narrower_than_its_halo(ranks: int) -> None:
    halo_of = {"time and x": 3, "x": 3}
    for name, found in results(ranks)["blocks"].items():
        assert found["narrowest"] >= halo_of.get(name, 4), name


def test_ranks_that_cannot_share_a_lattice_are_told_how_many_can(ranks: int) -> None:
    refusal = results(ranks)["refusal"]
    if ranks == 1:
        assert refusal == ""
    else:
        assert refusal == (
            f"ranks: {ranks} ranks cannot share a lattice of nt = 4, ny = 1, nx = 5 with a halo of 3 nodes; "
            "the largest rank count is 1"
        )
