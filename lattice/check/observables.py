"""Observables: numbers that a state is described by, and means of formulas of the user's."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import sympy
from numpy.typing import NDArray

from lattice.check.balances import balances_of
from lattice.check.extrema import extremes
from lattice.check.fourier import Fourier
from lattice.check.resolution import measure_resolution
from lattice.check.statistics import correlation_lengths
from lattice.errors import InputError
from lattice.laws.law import Law
from lattice.laws.notation import read_expression
from lattice.system.system import System

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Named:
    """A formula whose mean over the box and the period is an observable.

    Parameters
    ----------
    name, text : str
    expression : sympy.Expr
    meaning : str
    """

    name: str
    text: str
    expression: sympy.Expr
    meaning: str = ""


def read_named(law: Law, given: Sequence[str]) -> tuple[Named, ...]:
    """Return the user's observables, each `name=formula`, after those of the law file.

    Raises
    ------
    InputError
        For text that is not of this form, a name used twice or a formula that cannot be read.
    """
    parameters = [p.name for p in law.parameters]
    entries = [*law.observables, *(_split(text) for text in given)]
    found: dict[str, Named] = {}
    for name, text, meaning in entries:
        if name in found:
            raise InputError(f"must name each observable once, got {name} twice", key="--observable")
        expression = read_expression(text, law.components, parameters, law.dimensions)
        found[name] = Named(name, text, expression, meaning)
    return tuple(found.values())


def _split(text: str) -> tuple[str, str, str]:
    name, sign, formula = text.partition("=")
    name = name.strip()
    if not sign or not name.isidentifier() or not formula.strip():
        raise InputError(
            f"must be name=formula, got '{text}'; such as slope=u_x**2, whose mean is taken",
            key="--observable",
        )
    return name, formula.strip(), "mean of the formula"


def measure(
    system: System, owned: Array, values: Mapping[str, float], named: Sequence[Named] = ()
) -> dict[str, float]:
    """Return the observables of a field on a system's lattice.

    Collective.

    Parameters
    ----------
    system : System
        Its law, blocks and free scalars are used.
    owned : ndarray, shape (levels, rows, columns, components)
        This rank's part of the field.
    values : mapping of str to float
        Every scalar.
    named : sequence of Named
        Further ones.
    """
    fourier = Fourier(system.law, system.blocks, owned, values)
    try:
        return measure_with(fourier, system, owned, values, named)
    finally:
        fourier.destroy()


def measure_with(
    fourier: Fourier,
    system: System,
    owned: Array,
    values: Mapping[str, float],
    named: Sequence[Named] = (),
) -> dict[str, float]:
    """Return the same with a `Fourier` of the field at hand. Collective."""
    found = {name: float(values[name]) for name in described_scalars(system)}
    found |= mean_observables(fourier)
    for component, (low, high) in zip(system.law.components, extremes(fourier, owned), strict=True):
        found |= {f"min_{component}": low, f"max_{component}": high}
    lengths = correlation_lengths(measure_resolution(fourier, owned))
    return found | {entry.name: fourier.mean(entry.expression) for entry in named} | lengths


def mean_observables(fourier: Fourier) -> dict[str, float]:
    """Return the observables that are means over the nodes, which a march has, too. Collective."""
    law = fourier.law
    squares = [fourier.mean(sympy.Symbol(c, real=True) ** 2) for c in law.components]
    found = {"mean_square": sum(squares)}
    found["energy"] = 0.5 * sum(s for s, on in zip(squares, law.evolving, strict=True) if on)
    if len(law.components) > 1:
        found |= {f"mean_square_{c}": s for c, s in zip(law.components, squares, strict=True)}
    for balance in balances_of(law):
        if balance.name == "energy" or balance.origin == "law file":
            found |= _rates(fourier, balance.name, balance.terms)
    return found


def described_scalars(system: System) -> list[str]:
    """Return the scalars that a state determines: those it was solved for, sources left out."""
    return [u.name for u in system.unknowns if not u.name.startswith("source_")]


def _rates(fourier: Fourier, name: str, terms: Sequence[sympy.Expr]) -> dict[str, float]:
    """Return production and dissipation of a balance: the sums of its gains and of its losses."""
    means = [-fourier.mean(term) for term in terms]
    prefix = "" if name == "energy" else f"{name}_"
    return {
        f"{prefix}production": sum(m for m in means if m > 0.0),
        f"{prefix}dissipation": -sum(m for m in means if m < 0.0),
    }
