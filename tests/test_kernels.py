"""The generated loops compute what NumPy slices compute, an evaluation written independently of them."""

from __future__ import annotations

import numpy as np
import pytest

from lattice.geometry.lattice import Lattice
from lattice.kernels.build import Rows, have_numba
from lattice.kernels.forms import scalar_names
from lattice.kernels.scheme import Scheme
from tests.problems import (
    ALL,
    NAMED,
    Array,
    evaluate,
    form_of,
    geometry_of,
    lattice_of,
    law_of,
    padded,
    prepared,
    random_field,
    relative,
    run_text,
    scheme_of,
    values_of,
)

# Both sum the same numbers in another order: a few units of the last place of the largest term, which
# the weights of a fourth difference make some hundred times the result.
ROUNDING = 1e-13
KINDS = ("residual", "tangent", "adjoint", "curvature", "rate")


def scalar_kinds(name: str) -> list[str]:
    law = law_of(name)
    lengths = ["length_x", "length_y"][: law.dimensions]
    return [f"by_{scalar}" for scalar in (*scalar_names(law), *lengths)]


def fields_of(name: str, kind: str, lattice: Lattice) -> list[Array]:
    return [random_field(law_of(name), lattice, seed) for seed, _ in enumerate(form_of(name, kind).fields)]


@pytest.mark.parametrize("steady", [False, True], ids=["periodic", "steady"])
@pytest.mark.parametrize("name", ALL)
def test_the_text_of_every_loop_computes_what_slices_compute(name: str, steady: bool) -> None:
    law = law_of(name)
    lattice, values = lattice_of(law, steady, 2 if law.dimensions == 2 else 4), values_of(law)
    for kind in (*KINDS, *scalar_kinds(name)):
        fields = fields_of(name, kind, lattice)
        loop = prepared(name, kind, lattice, values, compiled=False)
        found = run_text(loop, np.full_like(fields[0], np.nan), *(padded(f, loop.scheme) for f in fields))
        assert relative(found, evaluate(name, kind, lattice, values, *fields)) < ROUNDING, kind


@pytest.mark.parametrize("orders", [(6, 2), (2, 8), (6, 8)], ids=str)
@pytest.mark.parametrize("name", ["burgers", "constrained"])
def test_the_halo_serves_orders_in_time_and_space_that_differ(name: str, orders: tuple[int, int]) -> None:
    values, lattice = values_of(law_of(name)), Lattice(11, 1, 30, 1, *orders)
    for kind in ("residual", "tangent", "adjoint"):
        fields = fields_of(name, kind, lattice)
        loop = prepared(name, kind, lattice, values, compiled=False)
        assert min(loop.scheme.halo_t, loop.scheme.halo_x) >= max(orders) // 2
        found = run_text(loop, np.full_like(fields[0], np.nan), *(padded(f, loop.scheme) for f in fields))
        assert relative(found, evaluate(name, kind, lattice, values, *fields)) < ROUNDING, kind


def rows_times(rows: Rows, values: Array, scheme: Scheme, v: Array, evolving: list[bool]) -> Array:
    """Return the product of a filled row array (levels, rows, columns, stride) with a whole field."""
    outer = padded(v, scheme)
    levels, ny, nx, _ = v.shape
    result = np.zeros_like(v)
    place = 0
    for c, (points, evolves) in enumerate(zip(rows.points, evolving, strict=True)):
        for k in range(-scheme.below, scheme.levels - scheme.below) if evolves else (0,):
            for dy, dx, component in points:
                t, y, x = scheme.halo_t + k, scheme.halo_y + dy, scheme.halo_x + dx
                shifted = outer[t : t + levels, y : y + ny, x : x + nx, component]
                result[..., c] += values[..., place] * shifted
                place += 1
    assert place == values.shape[-1]
    return result


@pytest.mark.parametrize("steady", [False, True], ids=["periodic", "steady"])
@pytest.mark.parametrize("name", ALL)
def test_the_rows_of_the_jacobian_give_the_tangent(
    name: str, steady: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")
    check_rows(name, steady)


def check_rows(name: str, steady: bool) -> None:
    law = law_of(name)
    lattice, values = lattice_of(law, steady, 2 if law.dimensions == 2 else 4), values_of(law)
    scheme = scheme_of(name, lattice)
    u, v = fields_of(name, "tangent", lattice)
    rows = Rows(form_of(name, "tangent"), scheme)
    rows.prepare(geometry_of(lattice, scheme, values), values)
    evolving = [e and not steady for e in law.evolving]
    sizes = [len(p) * (scheme.levels if e else 1) for p, e in zip(rows.points, evolving, strict=True)]
    filled = np.full((lattice.nt, lattice.ny, lattice.nx * sum(sizes)), np.nan)
    rows(filled, padded(u, scheme))
    found = rows_times(rows, filled.reshape(*lattice.shape, -1), scheme, v, evolving)
    assert relative(found, evaluate(name, "tangent", lattice, values, u, v)) < ROUNDING


def check_compiled(name: str, kind: str, lattice: Lattice) -> None:
    values = values_of(law_of(name))
    fields = fields_of(name, kind, lattice)
    kernel = prepared(name, kind, lattice, values, compiled=True)
    found = kernel(np.full_like(fields[0], np.nan), *(padded(f, kernel.scheme) for f in fields))
    assert relative(found, evaluate(name, kind, lattice, values, *fields)) < ROUNDING


# Compiling takes seconds a loop, so here only what tells a compiler's fault from the text's: one and two
# components, one and two dimensions, a constraint. The long test below compiles every law.
COMPILED = ("kuramoto-sivashinsky", "kolmogorov")


@pytest.mark.skipif(not have_numba(), reason="Numba is not installed")
@pytest.mark.parametrize("kind", ["residual", "tangent", "adjoint"])
@pytest.mark.parametrize("name", COMPILED)
def test_compiled_loops_compute_what_slices_compute(name: str, kind: str) -> None:
    check_compiled(name, kind, lattice_of(law_of(name)))


@pytest.mark.skipif(not have_numba(), reason="Numba is not installed")
@pytest.mark.parametrize("name", COMPILED)
def test_compiled_rows_give_the_tangent(name: str) -> None:
    check_rows(name, steady=False)


@pytest.mark.skipif(not have_numba(), reason="Numba is not installed")
@pytest.mark.parametrize("kind", ["residual", "tangent", "adjoint"])
@pytest.mark.parametrize(
    ("name", "shape"), [("kuramoto-sivashinsky", (5, 1, 4500)), ("kolmogorov", (5, 80, 90))]
)
def test_loops_cut_large_blocks_without_a_seam(name: str, kind: str, shape: tuple[int, int, int]) -> None:
    # More columns than a row buffer holds, and more rows than the buffers of a level together.
    check_compiled(name, kind, Lattice(*shape, dimensions=law_of(name).dimensions))


@pytest.mark.skipif(not have_numba(), reason="Numba is not installed")
def test_nan_in_a_field_stays_nan() -> None:
    law, name = law_of("kuramoto-sivashinsky"), "kuramoto-sivashinsky"
    lattice = lattice_of(law)
    u = random_field(law, lattice, 1)
    u[3, 0, 5] = np.nan
    kernel = prepared(name, "residual", lattice, values_of(law), compiled=True)
    found = kernel(np.zeros_like(u), padded(u, kernel.scheme))
    wanted = evaluate(name, "residual", lattice, values_of(law), u)
    assert np.array_equal(np.isnan(found), np.isnan(wanted))
    assert np.isnan(found).any()
    assert not np.isnan(found).all()


@pytest.mark.long
@pytest.mark.skipif(not have_numba(), reason="Numba is not installed")
@pytest.mark.parametrize("steady", [False, True], ids=["periodic", "steady"])
@pytest.mark.parametrize("name", NAMED)
def test_every_law_compiles_to_what_slices_compute(name: str, steady: bool) -> None:
    law = law_of(name)
    for kind in ("residual", "tangent", "adjoint"):
        check_compiled(name, kind, lattice_of(law, steady, 2 if law.dimensions == 2 else 4))
    check_rows(name, steady)
