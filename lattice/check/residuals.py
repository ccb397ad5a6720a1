"""Residuals: how well each equation holds, on the state's own differences and on better ones.

On the state's lattice the residual is measured against the equation's largest term. On the same nodes with
differences of higher order it is an estimate of the truncation error that needs no new solve; with exact
derivatives of the Fourier series it is that error in full, as far as the nodes can show it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import sympy
from numpy.typing import NDArray

from lattice.check.fourier import Fourier
from lattice.errors import InputError
from lattice.geometry.blocks import Blocks
from lattice.kernels.forms import Form, Output, residual_form
from lattice.kernels.scheme import Scheme, make_scheme
from lattice.kernels.slices import evaluate
from lattice.laws.writing import write_expression

if TYPE_CHECKING:
    from lattice.check.subject import Subject
    from lattice.geometry.lattice import Lattice

Array = NDArray[np.float64]
HIGHEST = {"order_t": 6, "order_x": 8, "order_y": 8}


@dataclass(frozen=True)
class EquationResidual:
    """How well one equation holds.

    Parameters
    ----------
    component : str
        The component the equation belongs to.
    rms, largest : float
        Of the residual on the state's own differences.
    term, term_rms : str, float
        The equation's largest term and its root mean square, to compare with.
    raised_rms : float
        Of the residual with differences of higher order on the same nodes; with exact derivatives where the
        differences have the highest order there is.
    exact_rms : float
        Of the residual with exact derivatives of the Fourier series: the truncation error.
    """

    component: str
    rms: float
    largest: float
    term: str
    term_rms: float
    raised_rms: float
    exact_rms: float

    @property
    def relative(self) -> float:
        """The residual in units of the largest term."""
        return ratio(self.rms, self.term_rms)

    @property
    def truncation(self) -> float:
        """The residual with exact derivatives in units of the largest term."""
        return ratio(self.exact_rms, self.term_rms)


@dataclass(frozen=True)
class Residuals:
    """The residuals of all equations.

    Parameters
    ----------
    rms, largest : float
        Over nodes and equations.
    equations : tuple of EquationResidual
    orders : tuple of int
        The raised orders in t, y and x; those of the state where they cannot be raised.
    """

    rms: float
    largest: float
    equations: tuple[EquationResidual, ...]
    orders: tuple[int, int, int]

    @property
    def relative(self) -> float:
        """The worst equation's residual in units of its largest term."""
        return max(e.relative for e in self.equations)

    @property
    def truncation(self) -> float:
        """The worst equation's truncation error in units of its largest term."""
        return max(e.truncation for e in self.equations)


def ratio(part: float, whole: float) -> float:
    """Return part/whole; 0 of nothing, infinite where only the whole is nothing."""
    if whole > 0.0:
        return part / whole
    return 0.0 if part == 0.0 else float("inf")


def measure_residuals(subject: Subject, fourier: Fourier) -> tuple[Residuals, Array]:
    """Return the residuals, and this rank's part of the one with exact derivatives.

    Collective.
    """
    system = subject.system
    system.linearise(subject.x)
    own = _own_residual(subject)
    terms = _term_sizes(subject)
    raised_lattice = raised(subject.lattice)
    exact = exact_residual(subject, fourier)
    higher = _raised_residual(subject, raised_lattice)
    higher = exact if higher is None else higher
    sizes = [_sizes(subject, array) for array in (own, higher, exact)]
    equations = tuple(
        EquationResidual(component, sizes[0][0][c], sizes[0][1][c], *terms[c], sizes[1][0][c], sizes[2][0][c])
        for c, component in enumerate(subject.law.components)
    )
    rms = float(np.sqrt(np.mean(np.square(sizes[0][0]))))
    orders = (raised_lattice.order_t, raised_lattice.order_y, raised_lattice.order_x)
    return Residuals(rms, max(sizes[0][1]), equations, orders), exact


def raised(lattice: Lattice) -> Lattice:
    """Return the same nodes with every order raised by two where there is such an order.

    Examples
    --------
    >>> from lattice.geometry.lattice import Lattice
    >>> raised(Lattice(nt=8, ny=1, nx=8, order_t=6, order_x=4)).order_x
    6
    """
    orders = {name: min(most, getattr(lattice, name) + 2) for name, most in HIGHEST.items()}
    return replace(lattice, **orders)


def _differs(one: Lattice, other: Lattice) -> bool:
    """Tell whether orders differ along an axis that has more than one node."""
    return any(
        nodes > 1 and getattr(one, name) != getattr(other, name)
        for nodes, name in zip(other.shape, ("order_t", "order_y", "order_x"), strict=True)
    )


def _own_residual(subject: Subject) -> Array:
    out = subject.system.vector()
    subject.system.residual(subject.x, out)
    found: Array = subject.system.field_of(out)
    out.destroy()
    return found


def _raised_residual(subject: Subject, lattice: Lattice) -> Array | None:
    """Return the residual of the raised orders, None where the ranks' blocks do not serve them."""
    system = subject.system
    if not _differs(lattice, subject.lattice):
        return None
    form = residual_form(subject.law)
    scheme = make_scheme(lattice, [form])
    try:
        blocks = Blocks(lattice, len(subject.law.components), scheme.halo_x, subject.comm)
    except InputError:
        return None
    same = subject.comm.allreduce(int(blocks.block == system.blocks.block)) == subject.comm.size
    found = None
    if same:
        field, padded = blocks.vector(), blocks.padded_vector()
        blocks.owned(field)[...] = subject.owned
        blocks.exchange(field, padded)
        found = np.zeros(blocks.shape)
        _evaluate(subject, form, scheme, blocks, blocks.padded(padded), found)
        found -= _gauge_means(subject)
        field.destroy()
        padded.destroy()
    blocks.destroy()
    return found


def _evaluate(
    subject: Subject, form: Form, scheme: Scheme, blocks: Blocks, padded: Array, out: Array
) -> None:
    """Evaluate a form at the state, by NumPy: nothing is compiled for a single use."""
    from lattice.kernels.build import Geometry

    values, lattice = subject.values, subject.lattice
    length_y = values.get("length_y", 1.0)
    geometry = Geometry(
        values["period"] / lattice.nt,
        length_y / lattice.ny,
        values["length_x"] / lattice.nx,
        blocks.coordinates(length_y, 1),
        blocks.coordinates(values["length_x"], 2),
    )
    evaluate(form, scheme, geometry, values, out, (padded,))


def _gauge_means(subject: Subject) -> Array:
    """Return what the equations of gauge components carry besides the law: their level means."""
    system = subject.system
    means = np.zeros((system.blocks.block.shape[0], 1, 1, len(subject.law.components)))
    vector = system.blocks.vector()
    system.blocks.owned(vector)[...] = subject.owned
    for name in subject.law.symmetries.gauge:
        component = subject.law.components.index(name)
        means[:, 0, 0, component] = system.operator.level_means(vector, component)
    vector.destroy()
    return means


def exact_residual(subject: Subject, fourier: Fourier) -> Array:
    """Return this rank's residual with exact derivatives, where the rows of the lattice lie. Collective."""
    form = residual_form(subject.law)
    steady = subject.lattice.nt == 1
    parts = []
    for output in form.outputs:
        array = np.array(np.broadcast_to(fourier.value(output.expression), fourier.blocks.block.shape))
        if output.differenced is not None and not steady:
            array = array + fourier.derivative(fourier.value(output.differenced), 0, 0, 1)
        parts.append(fourier.to_midpoints(array) if output.evolving else array)
    found: Array = np.stack(parts, axis=-1) - _gauge_means(subject)
    return found


def _term_sizes(subject: Subject) -> list[tuple[str, float]]:
    """Return the largest term of every equation and its root mean square."""
    form, operator = residual_form(subject.law), subject.system.operator
    sizes: list[list[tuple[float, str]]] = [[] for _ in form.outputs]
    out = np.zeros(subject.system.blocks.shape)
    for outputs in _split(form, steady=subject.lattice.nt == 1):
        part = Form("term", form.kind, form.fields, outputs, form.scalars, form.dimensions)
        _evaluate(subject, part, operator.scheme, operator.blocks, operator.padded_point(), out)
        for c, size in enumerate(_sizes(subject, out)[0]):
            sizes[c].append((size, _name(outputs[c])))
    largest = [max(found, key=lambda pair: pair[0]) for found in sizes]
    return [(name, size) for size, name in largest]


def _split(form: Form, steady: bool) -> list[tuple[Output, ...]]:
    """Return forms' outputs of one term each: number k of every equation, in one evaluation."""
    zero = sympy.Integer(0)
    lists: list[list[Output]] = []
    for output in form.outputs:
        terms = [Output(term, output.evolving) for term in sympy.Add.make_args(output.expression)]
        if output.differenced is not None and not steady:
            terms.append(Output(zero, True, output.differenced))
        lists.append(terms)
    count = max(len(terms) for terms in lists)
    empty = Output(zero, False)
    return [tuple(terms[k] if k < len(terms) else empty for terms in lists) for k in range(count)]


def _name(output: Output) -> str:
    if output.differenced is not None:
        return f"{output.differenced.name}_t"
    return write_expression(output.expression)


def _sizes(subject: Subject, owned: Array) -> tuple[list[float], list[float]]:
    """Return root mean square and largest absolute value of every component."""
    from mpi4py import MPI

    flat = owned.reshape(-1, owned.shape[-1])
    squares: Sequence[Any] = subject.comm.allreduce((flat**2).sum(axis=0)) / subject.lattice.nodes
    largest = np.abs(flat).max(axis=0)
    subject.comm.Allreduce(MPI.IN_PLACE, largest, op=MPI.MAX)
    return [float(np.sqrt(s)) for s in squares], [float(value) for value in largest]
