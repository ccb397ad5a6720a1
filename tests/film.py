"""A periodic film state on a small lattice, for the tests of Newton's method and its preconditioners."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np

from lattice.geometry.lattice import Lattice
from lattice.job.schema import SolveSection
from lattice.solve.newton import Newton, NewtonResult, Step
from lattice.solve.petsc import start_petsc
from lattice.solve.registry import make_preconditioner
from lattice.solve.stop import StopFlag
from lattice.system.system import System
from tests.parallel import attracting_film
from tests.problems import Array, law_of, values_of

NODES = 32
VALUES = {"period": 17.67, "length_x": 17.631, "drift_x": 0.0, "source_u": 0.0, "dispersion": 0.0}


@cache
def film_start() -> Array:
    """Return one marched period, shape (nt, 1, nx, 1); do not change it."""
    return attracting_film(NODES, NODES)[:, None, :, None]


def film_system(comm: Any = None) -> System:
    """Return the film law on the start's lattice with period and drift free."""
    from mpi4py import MPI

    start_petsc([])
    law = law_of("kuramoto-sivashinsky")
    values = {**values_of(law), **VALUES}
    return System(law, Lattice(NODES, 1, NODES), values, ("period", "drift_x"), {}, comm or MPI.COMM_SELF)


@dataclass
class Solve:
    """A Newton solve; `destroy` it.

    Parameters
    ----------
    system : System
    x : PETSc.Vec
        The last step.
    result : NewtonResult
    newton : Newton
    """

    system: System
    x: Any
    result: NewtonResult
    newton: Newton

    def destroy(self) -> None:
        self.newton.destroy()
        self.x.destroy()
        self.system.destroy()


def solve_film(
    start: Array,
    stop: Any = None,
    after_step: Callable[[Step, Any], None] = lambda step, x: None,
    **options: Any,
) -> Solve:
    """Solve from a start field with the given keys of the job's solve section."""
    system = film_system()
    section = SolveSection(**{"residual_rms": 1e-11, "preconditioner": "direct", **options})
    made = make_preconditioner(section.preconditioner, system, section)
    newton = Newton(system, made, section, stop or StopFlag(system.comm), after_step)
    x = system.vector()
    system.pack(start, {}, x)
    system.set_reference(x)
    return Solve(system, x, newton.solve(x), newton)


@cache
def film_state() -> tuple[Array, dict[str, float]]:
    """Return the solved state and its scalars."""
    solve = solve_film(film_start())
    assert solve.result.converged, solve.result.reason
    found = solve.system.field_of(solve.x), solve.system.values_of(solve.x)
    solve.destroy()
    return found


def far_start() -> Array:
    """Return a start from which full Newton steps make the residual grow."""
    noise = np.random.default_rng(3).uniform(-1.5, 1.5, film_start().shape)
    return film_start() + noise


def alike(seed: int) -> Array:
    """Return a field with the state's spectrum and random phases: noise as large as the state, as smooth."""
    spectrum = np.fft.fft2(film_state()[0], axes=(0, 2))
    white = np.fft.fft2(np.random.default_rng(seed).standard_normal(spectrum.shape), axes=(0, 2))
    return np.asarray(np.fft.ifft2(np.abs(spectrum) * white / np.abs(white), axes=(0, 2)).real)
