"""The constant part of a tangent, and the smoothers: against NumPy's transforms, means and dense blocks.

About a uniform state nothing is left out of the constant part: there its symbol is the transform of the
Jacobian's column at one node, and the spectral smoother inverts the Jacobian.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest
import sympy

from lattice.geometry.lattice import Lattice
from lattice.geometry.stencils import staggered
from lattice.job.schema import PatchesSection
from lattice.laws.law import Deriv
from lattice.solve.patches import Patches, block_patches, slab_patches
from lattice.solve.smoothers import SlabSmoother, SpectralSmoother
from lattice.spectral.transform import Transform
from lattice.system.constant_part import ConstantPart
from lattice.system.system import System
from tests.levels import dense, random_system
from tests.problems import NAMED, Array, law_of, random_field, values_of

TINY = 2.0**-52


@pytest.fixture(autouse=True, scope="module")
def numpy_kernels() -> Iterator[None]:
    # That compiled loops equal these is shown in test_kernels.
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("LATTICE_KERNELS", "numpy")
        yield


class Uniform:
    """A system linearised about a uniform state, its constant part, and the exact symbol of every mode."""

    def __init__(self, name: str, steady: bool) -> None:
        from mpi4py import MPI

        law = law_of(name)
        plane = law.dimensions == 2
        self.lattice = Lattice(1 if steady else 6, 7 if plane else 1, 10, law.dimensions, 4, 4, 2)
        self.system = System(law, self.lattice, values_of(law), (), {}, MPI.COMM_SELF)
        self.field, self.out = self.system.blocks.vector(), self.system.blocks.vector()
        owned = self.system.blocks.owned(self.field)
        owned[...] = 0.4 + 0.3 * np.arange(len(law.components))
        self.system.operator.linearise(self.field, self.system.values)
        self.transform = Transform(self.system.blocks)
        self.constant = ConstantPart(self.system.operator)
        self.constant.update()

    def jacobian_symbol(self) -> Array:
        """Return the transforms of the Jacobian's columns at node (0, 0, 0), shape (modes ..., C, C)."""
        columns = []
        owned, components = self.system.blocks.owned(self.field), self.system.blocks.components
        for component in range(components):
            owned[...] = 0.0
            owned[0, 0, 0, component] = 1.0
            self.system.operator.tangent(self.field, self.out)
            column = np.fft.rfftn(self.system.blocks.owned(self.out), axes=self.system.blocks.axes)
            columns.append(column.reshape(*self.transform.empty_spectrum().shape))
        return np.stack(columns, axis=-1)


def uniform(name: str, steady: bool) -> Uniform:
    return Uniform(name, steady)


STEADY = pytest.mark.parametrize("steady", [False, True], ids=["periodic", "steady"])
# Laws with products under nested derivatives and with two constraints, besides the shipped ones.
EVERY = pytest.mark.parametrize("name", (*NAMED, "nested", "constrained"))


@STEADY
@EVERY
def test_symbol_is_the_transform_of_the_jacobian_about_a_uniform_state(name, steady):
    case = uniform(name, steady)
    wanted = case.jacobian_symbol()
    found = case.constant.symbol(case.transform, 0.0)
    assert np.abs(found - wanted).max() < 100 * TINY * np.abs(wanted).max()
    # The shift joins G, so midpoint interpolation applies to it: the sum of weights at the midpoint.
    shifted = case.constant.symbol(case.transform, 0.7)
    steps = np.exp(2j * np.pi * np.arange(case.lattice.nt) / case.lattice.nt)
    weights = [1.0] if steady else [float(w) for w in staggered(0, 4)]
    midpoint = sum(w * steps ** (k - len(weights) // 2) for k, w in enumerate(weights))
    for c, evolving in enumerate(law_of(name).evolving):
        added = (shifted - found)[..., c, c].reshape(case.lattice.nt, -1)
        expected = 0.7 * evolving * midpoint[:, None]
        assert np.abs(added - expected).max() < 100 * TINY * np.abs(wanted).max()


@STEADY
@EVERY
def test_unshifted_smoother_inverts_the_jacobian_about_a_uniform_state(name, steady):
    case = uniform(name, steady)
    blocks = case.jacobian_symbol()
    sizes = np.linalg.svd(blocks, compute_uv=False)
    singular = sizes[..., -1] < 1e-10 * sizes[..., 0].max()
    # The mean may not be found, nor, by odd derivatives alone, the Nyquist wave in x.
    assert singular.sum() <= 2
    smoother = SpectralSmoother(case.transform, case.constant, shift=0.0)
    smoother.update()
    r = np.random.default_rng(5).normal(size=case.system.blocks.shape)
    case.system.blocks.owned(case.field)[...] = r
    smoother.apply(case.field, case.out)
    solved = np.fft.rfftn(case.system.blocks.owned(case.out), axes=case.system.blocks.axes)
    assert np.isfinite(solved).all()
    case.system.operator.tangent(case.out, case.field)
    left = np.fft.rfftn(r - case.system.blocks.owned(case.field), axes=case.system.blocks.axes)
    left, solved = (a.reshape(*blocks.shape[:-1]) for a in (left, solved))
    # Rounding of a solve, in units of the largest product of block and solution.
    bound = 1e3 * TINY * sizes.max() * np.abs(solved).max()
    assert np.abs(left[~singular]).max() < bound
    assert not (np.abs(solved[singular]) > 1e-12).any()


@EVERY
def test_transposed_smoother_is_the_transpose(name):
    case = uniform(name, steady=False)
    smoother = SpectralSmoother(case.transform, case.constant, shift=1.0)
    smoother.update()
    rng = np.random.default_rng(6)
    v, w = case.system.blocks.vector(), case.system.blocks.vector()
    for vector in (v, w):
        case.system.blocks.owned(vector)[...] = rng.normal(size=case.system.blocks.shape)
    smoother.apply(v, case.field)
    smoother.apply_transpose(w, case.out)
    assert abs(case.field.dot(w) - case.out.dot(v)) < 100 * TINY * case.field.norm() * w.norm()


@pytest.mark.parametrize("name", ["kuramoto-sivashinsky", "ginzburg-landau", "gray-scott-2d", "functions"])
def test_means_and_fluctuations_are_those_of_the_coefficients(name):
    from mpi4py import MPI

    law = law_of(name)
    lattice = Lattice(6, 7 if law.dimensions == 2 else 1, 11, law.dimensions, 2, 2, 2)
    system = random_system(name, lattice, MPI.COMM_SELF, seed=8)
    constant = ConstantPart(system.operator)
    constant.update()
    field = random_field(law, lattice, 8)
    values = {**values_of(law), **system.values}
    x = np.broadcast_to(np.arange(lattice.nx) * (values["length_x"] / lattice.nx), lattice.shape)
    checked = 0
    for expression, mean in constant.means.items():
        if expression.has(Deriv):
            continue
        names = [*(sympy.Symbol(c, real=True) for c in law.components), sympy.Symbol("x", real=True)]
        numbers = {sympy.Symbol(key, real=True): value for key, value in values.items()}
        make = sympy.lambdify(names, expression.subs(numbers), "numpy")
        array = make(*np.moveaxis(field, -1, 0), x) + np.zeros(lattice.shape)
        checked += float(array.std()) > 1e-3
        assert mean == pytest.approx(array.mean(), rel=1e-12, abs=1e-13)
        # A variance by squares loses half the digits of a constant coefficient.
        assert constant.fluctuations[expression] == pytest.approx(array.std(), rel=1e-8, abs=1e-6)
    assert checked > 0
    system.destroy()


def schwarz(matrix: Array, owned: list[Array], wide: list[Array]) -> Array:
    """Return the matrix of restricted additive Schwarz: each block's inverse, kept on the nodes it owns."""
    result = np.zeros_like(matrix)
    for mine, all_of_it in zip(owned, wide, strict=True):
        inverse = np.linalg.inv(matrix[np.ix_(all_of_it, all_of_it)])
        kept = np.isin(all_of_it, mine)
        result[np.ix_(all_of_it[kept], all_of_it)] = inverse[kept]
    return result


@pytest.mark.parametrize("kind", ["slabs", "patches"])
@pytest.mark.parametrize("name", ["kuramoto-sivashinsky", "gray-scott"])
def test_patches_are_restricted_additive_schwarz_of_dense_blocks(name, kind):
    from mpi4py import MPI

    lattice = Lattice(11, 1, 9, 1, 2, 2)
    system = random_system(name, lattice, MPI.COMM_SELF)
    size = 4 if kind == "patches" else 9
    levels = [(0, 4), (4, 7), (7, 11)]
    places = [(0, 3), (3, 6), (6, 9)] if kind == "patches" else [(0, 9)]
    numbers = np.arange(system.blocks.size).reshape(11, 9, -1)
    owned, wide = [], []
    for t0, t1 in levels:
        for x0, x1 in places:
            owned.append(numbers[t0:t1, x0:x1].ravel())
            t = np.unique(np.arange(t0 - 1, t1 + 1) % 11)
            x = np.unique(np.arange(x0 - 1, x1 + 1) % 9) if kind == "patches" else np.arange(9)
            wide.append(numbers[np.ix_(t, x)].ravel())
    patches = (
        slab_patches(system, 3, 1)
        if kind == "slabs"
        else block_patches(system, PatchesSection(nt=size, nx=3, overlap=1))
    )
    made = Patches(system, patches, "tested_")
    made.update()
    jacobian = dense(system.operator.tangent, system.blocks.vector)
    wanted = schwarz(jacobian, owned, wide)
    bound = 1e-12 * np.abs(wanted).max()
    assert np.abs(dense(made.apply, system.blocks.vector) - wanted).max() < bound
    assert np.abs(dense(made.apply_transpose, system.blocks.vector) - wanted.T).max() < bound
    made.destroy()
    system.destroy()


def test_slabs_keep_their_factors_while_the_field_hardly_changes():
    from mpi4py import MPI

    system = random_system("kuramoto-sivashinsky", Lattice(16, 1, 9, 1, 2, 2), MPI.COMM_SELF)
    lines: list[str] = []
    slabs = SlabSmoother(system, None, 2, lines.append)
    r, first, second = (system.blocks.vector() for _ in range(3))
    r.setRandom()
    slabs.update()
    slabs.apply(r, first)
    field = random_field(system.law, system.lattice, 4)
    for factor, same in ((1.001, True), (1.5, False)):
        system.blocks.owned(second)[...] = factor * field
        system.operator.linearise(second, system.values)
        slabs.update()
        slabs.apply(r, second)
        second.axpy(-1.0, first)
        assert (second.norm() < 1e-12 * first.norm()) is same
    assert lines == ["slab smoother: 4 slabs of time levels, 2 levels of overlap"]
    slabs.destroy()
    system.destroy()


def test_orders_of_the_coarse_lattice_enter_the_symbol():
    # So that the checks above do not pass on a symbol that ignores them.
    from mpi4py import MPI

    law = law_of("kuramoto-sivashinsky")
    found = []
    for order in (2, 8):
        lattice = replace(Lattice(6, 1, 24), order_x=order)
        system = System(law, lattice, values_of(law), (), {}, MPI.COMM_SELF)
        field = system.blocks.vector()
        system.operator.linearise(field, system.values)
        constant = ConstantPart(system.operator)
        constant.update()
        found.append(constant.symbol(Transform(system.blocks), 0.0)[0, 6, 0, 0])
        system.destroy()
    # At a quarter of the nodes' wavenumber order 2 has (2 - 2 cos(pi/2)) = 2 for (pi/2)^2.
    assert abs(found[0] - found[1]) > 0.1 * abs(found[1])
