"""Small problems shared by the tests of kernels, systems and solvers: laws, lattices, fields, scalars.

Everything derived by SymPy is made once per run. A whole field has shape (nt, ny, nx, components).
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.lattice import Lattice
from lattice.kernels import forms
from lattice.kernels.build import Geometry, Kernel, Loop
from lattice.kernels.forms import Form, sourced
from lattice.kernels.scheme import Scheme, make_scheme
from lattice.laws.catalogue import law_names, load_law, read_law
from lattice.laws.law import Law
from lattice.solve.petsc import start_petsc
from lattice.system.system import System

Array = NDArray[np.float64]
TURN = 2.0 * np.pi
NAMED = tuple(law_names())
# Formulas that no shipped law is like: products under nested derivatives, functions, coefficients that
# depend on the coordinates, divisions, two constraints. All are smooth where |u| < 1.
OWN = {
    "nested": (("u_t + (u*(u+1)*u_x)_xx + a*(sin(u)*(1 + u_x)**2)_x = 0",), ("u",), 1),
    "functions": (("u_t + sqrt(1 + u**2)*u_xx + log(2 + cos(x)*u) = sech(u)/(1 + u**2)",), ("u",), 1),
    "places": (("u_t + (exp(cos(x))*(u**2*u_x + u))_x + tanh(a*u)*sin(x) = 0",), ("u",), 1),
    "crossed": (("u_t + (cos(x - y)*u*u_y)_x + (u**2*u_xy)_y + u_xxyy = a*sin(y)**2 - u",), ("u",), 2),
    "constrained": (("u_t + q*u_x + p_x = u_xx", "p - u*q_x - u**3 = 0", "q + q_xx - a*u_x*p = 0"),
                    ("u", "p", "q"), 1),
}  # fmt: skip
ALL = (*NAMED, *OWN)
KINDS = {
    "residual": forms.residual_form,
    "tangent": forms.tangent_form,
    "adjoint": forms.adjoint_form,
    "curvature": forms.curvature_form,
    "rate": forms.rate_form,
}


@cache
def law_of(name: str) -> Law:
    """Return a shipped law, or one of `OWN`."""
    if name in NAMED:
        return load_law(name)
    equations, components, dimensions = OWN[name]
    return read_law("own", equations, components, {"a": 0.7}, dimensions)


@cache
def form_of(name: str, kind: str) -> Form:
    """Return a form of a law; "by_<scalar>" is the derivative with respect to a scalar."""
    if kind.startswith("by_"):
        return forms.scalar_form(law_of(name), kind.removeprefix("by_"))
    return KINDS[kind](law_of(name))


def scheme_of(name: str, lattice: Lattice) -> Scheme:
    """Return the scheme a field operator would use."""
    return make_scheme(lattice, [form_of(name, kind) for kind in ("residual", "tangent", "adjoint")])


def values_of(law: Law) -> dict[str, float]:
    """Return every scalar of a law, none of them zero; forces are periodic in this box, 4 pi x 2 pi."""
    values = {"period": 2.3, "length_x": 2.0 * TURN, "length_y": TURN, "drift_x": 0.3, "drift_y": -0.2}
    values |= {"rotation": 0.15, **{f"source_{c}": 0.1 for c in sourced(law)}}
    values |= {p.name: 0.5 + 0.2 * k for k, p in enumerate(law.parameters)}
    return values | {"wavenumber": 1.0, "n": 2.0}


def lattice_of(law: Law, steady: bool = False, order: int = 4) -> Lattice:
    """Return a lattice with a different number of nodes on each axis, wide enough for `order`."""
    more = 2 * order if law.dimensions == 1 else 0
    return Lattice(
        nt=1 if steady else 9,
        ny=1 if law.dimensions == 1 else 2 * order + 6,
        nx=2 * order + 7 + more,
        dimensions=law.dimensions,
        order_t=min(order, 6),
        order_x=order,
        order_y=order,
    )


def random_field(law: Law, lattice: Lattice, seed: int, size: float = 0.3) -> Array:
    """Return a whole field of independent random numbers in (-size, size), the same for a seed."""
    rng = np.random.default_rng(seed)
    return rng.uniform(-size, size, (*lattice.shape, len(law.components)))


def padded(whole: Array, scheme: Scheme) -> Array:
    """Return a whole field with its periodic halo."""
    halos = [(h, h) for h in (scheme.halo_t, scheme.halo_y, scheme.halo_x)]
    return np.ascontiguousarray(np.pad(whole, [*halos, (0, 0)], mode="wrap"))


def geometry_of(lattice: Lattice, scheme: Scheme, values: dict[str, float]) -> Geometry:
    """Return the geometry of the whole lattice as one block."""
    dx, dy = values["length_x"] / lattice.nx, values["length_y"] / lattice.ny
    ys = np.arange(-scheme.halo_y, lattice.ny + scheme.halo_y) * dy
    xs = np.arange(-scheme.halo_x, lattice.nx + scheme.halo_x) * dx
    return Geometry(values["period"] / lattice.nt, dy, dx, ys, xs)


def prepared(name: str, kind: str, lattice: Lattice, values: dict[str, float], compiled: bool) -> Kernel:
    """Return the kernel of one form, ready for fields padded by `padded` until it is asked for again."""
    kernel = _kernel(name, kind, lattice, compiled)
    kernel.prepare(geometry_of(lattice, kernel.scheme, values), values)
    return kernel


@cache
def _kernel(name: str, kind: str, lattice: Lattice, compiled: bool) -> Kernel:
    return Kernel(form_of(name, kind), scheme_of(name, lattice), compiled)


def evaluate(name: str, kind: str, lattice: Lattice, values: dict[str, float], *fields: Array) -> Array:
    """Return a form of a law at whole fields, by NumPy slices."""
    kernel = prepared(name, kind, lattice, values, compiled=False)
    return kernel(np.full_like(fields[0], np.nan), *(padded(f, kernel.scheme) for f in fields))


def run_text(loop: Loop, out: Array, *fields: Array) -> Array:
    """Run the generated text of a prepared loop as plain Python, node by node; no Numba."""
    namespace: dict[str, Any] = {"np": np}
    exec(compile(loop.source.text, "<generated loop>", "exec"), namespace)
    kernel: Callable[..., None] = namespace["kernel"]
    flat = [a.reshape(a.shape[0], a.shape[1], -1) for a in (out, *fields)]
    kernel(*flat, loop.static_fields, loop.weights)
    return out


def relative(found: Array, wanted: Array) -> float:
    """Return the largest difference over the largest wanted value (or one)."""
    return float(np.abs(found - wanted).max() / max(1.0, np.abs(wanted).max()))


def free_of(law: Law, lattice: Lattice, usual: bool) -> tuple[str, ...]:
    """Return as many scalars as the law's phases can fix: the usual ones, or a length and parameters."""
    frame = [n for n in forms.scalar_names(law) if n.startswith("drift_") or n == "rotation"]
    phases = len(frame) + (lattice.nt > 1)
    if usual:
        return (*(["period"] if lattice.nt > 1 else []), *frame)[:phases]
    other = ["length_x", *(p.name for p in law.parameters), *frame, "period", "length_y"]
    return tuple(other[:phases])


def system_of(name: str, steady: bool = False, usual: bool = True, order: int = 2) -> System:
    """Return a system on one rank with every phase condition in use."""
    from mpi4py import MPI

    start_petsc([])
    law = law_of(name)
    lattice = lattice_of(law, steady, order)
    return System(law, lattice, values_of(law), free_of(law, lattice, usual), {}, MPI.COMM_SELF)


def random_unknowns(system: System, seed: int, size: float = 0.3) -> Any:
    """Return a vector of unknowns at a random field and the system's values."""
    x = system.vector()
    system.pack(random_field(system.law, system.lattice, seed, size)[system.blocks.block.slices], {}, x)
    return x


def random_direction(system: System, seed: int) -> Any:
    """Return a vector of random numbers, those of the scalars as large as the field's norm."""
    rng = np.random.default_rng(seed)
    v = system.vector()
    field = rng.uniform(-0.3, 0.3, (*system.lattice.shape, system.blocks.components))
    border = rng.uniform(-0.3, 0.3, len(system.unknowns)) * system.root_size
    system.store(v, field[system.blocks.block.slices].reshape(-1), border)
    return v
