"""Damped steps: they solve the damped least-squares problem, and lead back to a state from far away."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from lattice.geometry.lattice import Lattice
from lattice.job.schema import DampedSection, SolveSection
from lattice.solve.damped import Damped, DampedResult, DampedStep
from lattice.solve.memory import Memory
from lattice.solve.normal import NormalEquations
from lattice.solve.normal_inverse import InverseNormal
from lattice.solve.normal_spectral import SpectralNormal
from lattice.solve.petsc import start_petsc
from lattice.solve.registry import make_preconditioner
from lattice.system.system import System
from tests.film import NODES, VALUES, alike, film_state
from tests.problems import Array, free_of, law_of, random_field, values_of

# One component; two with a free angle; an evolving one and a constraint with a free constant, in the plane;
# a formula with functions.
LAWS = {
    "kuramoto-sivashinsky": Lattice(8, 1, 15),
    "ginzburg-landau": Lattice(7, 1, 12),
    "kolmogorov": Lattice(4, 7, 7, 2, order_t=2, order_x=2, order_y=2),
    "functions": Lattice(7, 1, 12, order_x=2),
}
LOOSE = ("length_x",)


@pytest.fixture(autouse=True)
def numpy_kernels(monkeypatch: pytest.MonkeyPatch) -> None:
    # That compiled loops equal these is shown in test_kernels.
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


@pytest.fixture(params=LAWS)
def system(request: pytest.FixtureRequest) -> Iterator[System]:
    from mpi4py import MPI

    start_petsc([])
    law, lattice = law_of(request.param), LAWS[request.param]
    free = free_of(law, lattice, usual=True)
    made = System(law, lattice, values_of(law), free, {}, MPI.COMM_SELF, LOOSE)
    yield made
    made.destroy()


def at_random_field(system: System) -> Any:
    x = system.vector()
    system.pack(random_field(system.law, system.lattice, 4, size=0.4), {}, x)
    system.set_reference(x)
    system.linearise(x)
    return x


def dense(system: System) -> Array:
    """Return the bordered Jacobian, column by column."""
    v, out = system.vector(), system.vector()
    columns = []
    for k in range(v.getSize()):
        v.set(0.0)
        v.setValue(k, 1.0)
        v.assemble()
        system.tangent(v, out)
        columns.append(out.getArray(readonly=1).copy())
    v.destroy()
    out.destroy()
    return np.stack(columns, axis=1)


def helping(system: System, kind: str) -> Any:
    if kind == "spectral":
        return SpectralNormal(system)
    return InverseNormal(system, make_preconditioner("direct", system, SolveSection()))


@pytest.mark.parametrize("kind", ["spectral", "inverse"])
def test_a_step_solves_the_damped_normal_equations(system: System, kind: str) -> None:
    x, jacobian = at_random_field(system), dense(system)
    residual, right, step = system.vector(), system.vector(), system.vector()
    system.residual(x, residual)
    equations, made = NormalEquations(system, lambda: False), helping(system, kind)
    equations.gradient(residual, right)
    for damping in (10.0, 0.1):
        made.update(damping)
        solved = equations.solve(right, damping, made, 1e-10, 3000, step)
        normal = jacobian.T @ jacobian + damping * np.eye(jacobian.shape[1])
        wanted = np.linalg.solve(normal, -jacobian.T @ residual.getArray(readonly=1))
        found = step.getArray(readonly=1)
        # A relative residual of 1e-10 bounds the error by the condition number, 1e6 at most here.
        assert np.abs(found - wanted).max() <= 1e-5 * np.abs(wanted).max()
        assert solved.reduction <= 1e-10
    for item in (x, residual, right, step, equations, made):
        item.destroy()


@pytest.mark.parametrize("kind", ["spectral", "inverse"])
def test_preconditioners_of_the_normal_equations_are_symmetric_and_positive(
    system: System, kind: str
) -> None:
    x, made = at_random_field(system), helping(system, kind)
    made.update(0.1)
    rng, vectors = np.random.default_rng(3), [system.vector() for _ in range(4)]
    for vector in vectors[:2]:
        vector.getArray()[:] = rng.standard_normal(vector.getLocalSize())
    a, b, image_a, image_b = vectors
    made.apply(a, image_a)
    made.apply(b, image_b)
    scale = image_a.norm() * b.norm()
    assert abs(image_a.dot(b) - a.dot(image_b)) <= 1e-9 * scale
    assert image_a.dot(a) > 0.0
    for item in (*vectors, x, made):
        item.destroy()


def test_the_spectral_inverse_is_exact_for_a_field_without_fluctuations() -> None:
    from mpi4py import MPI

    start_petsc([])
    law = law_of("swift-hohenberg")
    system = System(law, Lattice(8, 1, 16), values_of(law), (), {}, MPI.COMM_SELF)
    x, right, step = system.vector(), system.vector(), system.vector()
    system.pack(np.full(system.blocks.shape, 0.2), {}, x)
    system.linearise(x)
    equations, made = NormalEquations(system, lambda: False), SpectralNormal(system)
    made.fluctuation = np.zeros(1)
    made.update(0.3)
    made.fluctuation = np.zeros(1)
    made.damp(0.3)
    right.getArray()[:] = np.random.default_rng(2).standard_normal(right.getLocalSize())
    # One iteration suffices where the preconditioner is the inverse.
    assert equations.solve(right, 0.3, made, 1e-8, 10, step).iterations == 1
    for item in (x, right, step, equations, made, system):
        item.destroy()


def film_system(loose: tuple[str, ...] = LOOSE) -> System:
    from mpi4py import MPI

    start_petsc([])
    law = law_of("kuramoto-sivashinsky")
    values = {**values_of(law), **VALUES}
    lattice = Lattice(NODES, 1, NODES)
    return System(law, lattice, values, ("period", "drift_x"), {}, MPI.COMM_SELF, loose)


def make_damped(system: System, after_step: Any, **options: Any) -> Damped:
    stop: Any = SimpleNamespace(poll=lambda: False, name="")
    return Damped(
        system,
        lambda: make_preconditioner("direct", system, SolveSection()),
        DampedSection(**options),
        stop,
        after_step,
        lambda values: True,
    )


def damp(system: System, x: Any, seen: list[DampedStep], **options: Any) -> DampedResult:
    damped = make_damped(system, lambda step, memory, x, residual: seen.append(step), **options)
    result = damped.run(x, Memory())
    damped.destroy()
    return result


def noisy(seed: int, share: float) -> Array:
    """Return the film state, shifted in time and space, with noise of a share of its amplitude."""
    return np.asarray(np.roll(film_state()[0], (5, 9), axis=(0, 2)) + share * alike(seed))


def recovered(seed: int, share: float) -> bool:
    """Tell whether damped steps lead back to the film state."""
    system = film_system()
    steps: list[DampedStep] = []
    x = system.vector()
    system.pack(noisy(seed, share), {}, x)
    result = damp(system, x, steps, residual_rms=1e-9)
    field, values = system.field_of(x), system.values_of(x)
    x.destroy()
    system.destroy()
    wanted, known = film_state()
    # The length moves, too, along a family of states: close to the known one all numbers are close.
    near = (
        abs(values["period"] / known["period"] - 1.0) < 0.2 and abs(values["length_x"] / 17.631 - 1.0) < 0.1
    )
    return result.ending == "small" and near and abs(field.std() / wanted.std() - 1.0) < 0.2


def test_a_state_comes_back_from_noise_as_large_as_itself() -> None:
    assert recovered(seed=1, share=1.0)


@pytest.mark.long
def test_most_of_twenty_noises_lead_back_to_the_state() -> None:
    found = sum(recovered(seed, share=1.0) for seed in range(20))
    assert found >= 10


def test_steps_lower_the_residual_and_keep_the_count() -> None:
    system = film_system()
    steps: list[DampedStep] = []
    x = system.vector()
    system.pack(noisy(2, 1.0), {}, x)
    result = damp(system, x, steps, steps=6)
    residuals = [step.residual_rms for step in steps]
    assert result.ending == "step limit"
    assert [step.number for step in steps] == list(range(7))
    assert all(after < before for before, after in itertools.pairwise(residuals))
    assert result.memory.residuals == tuple(residuals)
    x.destroy()
    system.destroy()


def test_no_step_moves_period_or_length_further_than_allowed() -> None:
    system = film_system()
    seen: list[dict[str, float]] = []
    x = system.vector()
    system.pack(noisy(3, 1.0), {"period": 25.0}, x)
    damped = make_damped(system, lambda *_: seen.append(system.values_of(x)), steps=5, largest_move=0.01)
    damped.run(x, Memory())
    for name in ("period", "length_x"):
        found = np.array([values[name] for values in seen])
        # The acceleration may bend a step by half of 0.75 of its size.
        assert np.abs(np.diff(found) / found[:-1]).max() <= 0.01 * 1.375 + 1e-12
    damped.destroy()
    x.destroy()
    system.destroy()


def test_a_residual_that_stays_is_a_stall() -> None:
    system = film_system(())
    steps: list[DampedStep] = []
    x = system.vector()
    system.pack(noisy(4, 1.0), {}, x)
    result = damp(system, x, steps, stall_steps=2, stall_fall=0.99)
    assert result.ending == "stalled"
    assert "fell by less than 99 % over 2 damped steps" in result.reason
    # The field is that of the last step.
    out = system.vector()
    system.residual(x, out)
    assert out.norm() / system.root_size == pytest.approx(steps[-1].residual_rms, rel=1e-12)
    for item in (out, x, system):
        item.destroy()
