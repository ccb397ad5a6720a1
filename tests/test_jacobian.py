"""Tangent, adjoint, curvature, sparse matrix and derivatives with respect to every scalar, for every law.

The wanted values are differences of the residual along a direction. Difference weights of order 2m are
exact on polynomials of degree 2m, and the shipped laws are polynomials of degree 5 at most in the field:
there the step may be 1, and nothing but rounding is left.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import pytest

from lattice.geometry.lattice import Lattice
from lattice.geometry.stencils import central
from lattice.kernels.forms import scalar_names
from lattice.system.assembly import GAUGE_PIN, AssembledJacobian
from lattice.system.system import System
from tests.problems import (
    ALL,
    NAMED,
    Array,
    evaluate,
    lattice_of,
    law_of,
    random_direction,
    random_field,
    random_unknowns,
    relative,
    system_of,
    values_of,
)

ROUNDING = 2.0**-52
STEADY = pytest.mark.parametrize("steady", [False, True], ids=["periodic", "steady"])
EVERY = pytest.mark.parametrize("name", ALL)


@pytest.fixture(autouse=True, scope="module")
def numpy_kernels() -> Iterator[None]:
    # That compiled loops equal these is shown in test_kernels.
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("LATTICE_KERNELS", "numpy")
        yield


def difference(function: Callable[[float], Array], derivative: int, step: float) -> Array:
    """Return a derivative of a function of one number at 0, by central differences of order 8."""
    weights = central(derivative, 8)
    terms = [float(w) * function((k - len(weights) // 2) * step) for k, w in enumerate(weights) if w != 0]
    return np.asarray(sum(terms[1:], terms[0])) / step**derivative


def small_problem(name: str, steady: bool) -> tuple[Lattice, dict[str, float], Array, Array]:
    law = law_of(name)
    lattice = lattice_of(law, steady, 2 if law.dimensions == 2 else 4)
    return lattice, values_of(law), random_field(law, lattice, 1), random_field(law, lattice, 2)


def step_of(name: str) -> float:
    # Where the law is no polynomial the eighth order leaves (0.02)**8 of the ninth derivative.
    return 1.0 if name in NAMED else 0.02


@STEADY
@EVERY
def test_the_tangent_is_the_derivative_of_the_residual(name: str, steady: bool) -> None:
    lattice, values, u, v = small_problem(name, steady)
    wanted = difference(lambda s: evaluate(name, "residual", lattice, values, u + s * v), 1, step_of(name))
    found = evaluate(name, "tangent", lattice, values, u, v)
    assert relative(found, wanted) < 100 * ROUNDING / step_of(name)


@STEADY
@EVERY
def test_the_curvature_is_the_second_derivative_of_the_residual(name: str, steady: bool) -> None:
    lattice, values, u, v = small_problem(name, steady)
    residual = evaluate(name, "residual", lattice, values, u)
    wanted = difference(lambda s: evaluate(name, "residual", lattice, values, u + s * v), 2, step_of(name))
    found = evaluate(name, "curvature", lattice, values, u, v)
    rounding = 100 * ROUNDING * max(1.0, np.abs(residual).max()) / step_of(name) ** 2
    assert np.abs(found - wanted).max() < rounding * max(1.0, np.abs(wanted).max())


@STEADY
@EVERY
def test_the_adjoint_is_the_transpose_of_the_tangent(name: str, steady: bool) -> None:
    lattice, values, u, v = small_problem(name, steady)
    w = random_field(law_of(name), lattice, 3)
    along = evaluate(name, "tangent", lattice, values, u, v)
    back = evaluate(name, "adjoint", lattice, values, u, w)
    size = np.linalg.norm(w) * np.linalg.norm(along) + np.linalg.norm(back) * np.linalg.norm(v)
    assert abs(np.vdot(w, along) - np.vdot(back, v)) < 1e-13 * size


@pytest.fixture(scope="module")
def systems(numpy_kernels: None) -> Iterator[Callable[[str, bool, bool], System]]:
    """Return a system by law, steadiness and choice of free scalars; tests set its points themselves."""
    made: dict[tuple[str, bool, bool], System] = {}

    def find(name: str, steady: bool, usual: bool) -> System:
        key = (name, steady, usual)
        if key not in made:
            made[key] = system_of(name, steady, usual)
        return made[key]

    yield find
    for system in made.values():
        system.destroy()


def array_of(vector: Any) -> Array:
    return np.array(vector.getArray(readonly=1))


@EVERY
def test_the_derivative_with_respect_to_every_scalar_is_that_of_the_residual(
    name: str, systems: Callable[[str, bool, bool], System]
) -> None:
    system = systems(name, False, True)
    law, operator = system.law, system.operator
    values, u = values_of(law), system.blocks.vector()
    system.blocks.owned(u)[...] = random_field(law, system.lattice, 1)
    operator.linearise(u, values)
    out = system.blocks.vector()
    for scalar in ("period", "length_x", "length_y", *scalar_names(law)):
        if scalar == "length_y" and law.dimensions == 1:
            continue
        operator.by_scalar(scalar, out)
        found = array_of(out)

        def residual(s: float, scalar: str = scalar) -> Array:
            operator.residual(u, {**values, scalar: values[scalar] + s}, out)
            return array_of(out)

        step = 0.01
        # Lengths enter as powers of 1/length: order 8 leaves (step/length)**8 times a binomial coefficient.
        tolerance = 1e-9 * np.abs(found).max() + 20 * ROUNDING * np.abs(residual(0.0)).max() / step
        assert np.abs(found - difference(residual, 1, step)).max() < tolerance, scalar
        assert name not in NAMED or np.abs(found).max() > 1e-6, scalar
    for vector in (u, out):
        vector.destroy()


@STEADY
@pytest.mark.parametrize("usual", [True, False], ids=["frame", "box"])
@EVERY
def test_the_bordered_tangent_is_the_derivative_of_the_bordered_residual(
    name: str, usual: bool, steady: bool, systems: Callable[[str, bool, bool], System]
) -> None:
    system = systems(name, steady, usual)
    reference, x, v = (random_unknowns(system, 4), random_unknowns(system, 5), random_direction(system, 6))
    system.set_reference(reference)
    system.linearise(x)
    moved, out = system.vector(), system.vector()
    system.tangent(v, out)
    found = array_of(out)

    def residual(s: float) -> Array:
        moved.waxpy(s, v, x)
        system.residual(moved, out)
        return array_of(out)

    step = 0.02
    tolerance = 1e-9 * np.abs(found).max() + 20 * ROUNDING * np.abs(residual(0.0)).max() / step
    assert np.abs(found - difference(residual, 1, step)).max() < tolerance
    for vector in (reference, x, v, moved, out):
        vector.destroy()


@STEADY
@pytest.mark.parametrize("usual", [True, False], ids=["frame", "box"])
@EVERY
def test_the_bordered_adjoint_is_the_transpose_of_the_bordered_tangent(
    name: str, usual: bool, steady: bool, systems: Callable[[str, bool, bool], System]
) -> None:
    system = systems(name, steady, usual)
    x, v, w = (random_unknowns(system, 4), random_direction(system, 5), random_direction(system, 6))
    system.set_reference(x)
    system.linearise(x)
    along, back = system.vector(), system.vector()
    system.tangent(v, along)
    system.adjoint(w, back)
    size = w.norm() * along.norm() + back.norm() * v.norm()
    assert abs(w.dot(along) - back.dot(v)) < 1e-13 * size
    for vector in (x, v, w, along, back):
        vector.destroy()


@STEADY
@EVERY
def test_the_sparse_matrix_is_the_tangent_but_for_the_gauge(
    name: str, steady: bool, systems: Callable[[str, bool, bool], System]
) -> None:
    system = systems(name, steady, True)
    x = random_unknowns(system, 4)
    system.set_reference(x)
    system.linearise(x)
    assembled = AssembledJacobian(system.operator)
    v, sparse, free = (system.blocks.vector() for _ in range(3))
    for _ in range(2):  # a second filling must replace the first
        matrix = assembled.update()
    system.blocks.owned(v)[...] = random_field(system.law, system.lattice, 7)
    matrix.mult(v, sparse)
    system.operator.tangent(v, free)
    wanted = system.blocks.owned(free).copy()
    for component in system.law.symmetries.gauge:
        c = system.law.components.index(component)
        psi = system.blocks.owned(v)[..., c]
        wanted[..., c] += psi.mean(axis=(1, 2), keepdims=True) - GAUGE_PIN * psi
    assert relative(system.blocks.owned(sparse), wanted) < 1e-13
    assembled.destroy()
    for vector in (x, v, sparse, free):
        vector.destroy()
