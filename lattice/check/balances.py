"""Balances that every periodic solution keeps: means, energies, and those its law file names.

Over a period the mean of `u_t*f(u)` is zero. So the mean of each equation is zero, and so is that of
`u*G(u)` summed over the evolving components: what is gained is lost. Terms whose mean vanishes for every
field are found by Euler's operator and left out; the sign of the others tells gains from losses. The means
are taken with exact derivatives of the Fourier series, so that their difference shows the lattice's error.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, cast

import numpy as np
import sympy

from lattice.check.fourier import Fourier
from lattice.check.variational import lasting_terms
from lattice.kernels.forms import residual_form
from lattice.laws.law import Law
from lattice.laws.notation import read_expression
from lattice.laws.writing import write_expression

if TYPE_CHECKING:
    from lattice.check.subject import Subject

CACHE_KEY = "balances"
NOTHING = 1e-13
"""Gains and losses below this share of the squared field are rounding errors."""


@dataclass(frozen=True)
class BalanceTerms:
    """A balance of a law: signed terms whose means add up to zero, as the equations have them.

    Parameters
    ----------
    name : str
        Such as "energy" or "mean of u".
    origin : str
        "derived" or "law file".
    terms : tuple of sympy.Expr
        On the left-hand side: a positive mean is a loss.
    """

    name: str
    origin: str
    terms: tuple[sympy.Expr, ...]


@dataclass(frozen=True)
class Balance:
    """A balance computed at a state.

    Parameters
    ----------
    name, origin : str
        As of `BalanceTerms`; "conserved" for a mean that must be the same on every level.
    gain, loss : float
        Means of what is gained and lost; for a conserved mean, its mean and the level farthest from it.
    error : float
        Their difference in units of the larger; for a conserved mean in units of the field's size.
    terms : tuple of (str, float)
        Every term and its mean as a gain.
    """

    name: str
    origin: str
    gain: float
    loss: float
    error: float
    terms: tuple[tuple[str, float], ...] = ()

    @property
    def computed_to_expected(self) -> float:
        """Loss in units of the gain: 1 where the balance holds."""
        return self.loss / self.gain if self.gain else float("nan")


def balances_of(law: Law) -> tuple[BalanceTerms, ...]:
    """Return the balances of a law, derived once for each law."""
    if CACHE_KEY not in law._cache:
        law._cache[CACHE_KEY] = _derive(law)
    return cast("tuple[BalanceTerms, ...]", law._cache[CACHE_KEY])


def _derive(law: Law) -> tuple[BalanceTerms, ...]:
    symbols = tuple(sympy.Symbol(c, real=True) for c in law.components)
    outputs = residual_form(law).outputs
    found = []
    for symbol, output in zip(symbols, outputs, strict=True):
        if symbol.name not in law.symmetries.conserved:
            terms = lasting_terms(output.expression, symbols)
            found.append(BalanceTerms(f"mean of {symbol.name}", "derived", tuple(terms)))
    energy = sympy.Add(*(s * o.expression for s, o in zip(symbols, outputs, strict=True) if o.evolving))
    found.append(BalanceTerms("energy", "derived", tuple(lasting_terms(energy, symbols))))
    found += [_from_file(law, *entry) for entry in law.balances]
    return tuple(balance for balance in found if len(balance.terms) > 1)


def _from_file(law: Law, name: str, gain: str, loss: str) -> BalanceTerms:
    names = [p.name for p in law.parameters]
    gained, lost = (read_expression(t, law.components, names, law.dimensions) for t in (gain, loss))
    return BalanceTerms(name, "law file", (-gained, lost))


def measure_balances(subject: Subject, fourier: Fourier) -> tuple[Balance, ...]:
    """Return all balances of a state. Collective."""
    found = [_conserved(subject, name) for name in subject.law.symmetries.conserved]
    size = _mean_square(subject)
    for balance in balances_of(subject.law):
        means = [(write_expression(-term), -fourier.mean(term)) for term in balance.terms]
        gain, loss = _sum(means, 1.0), _sum(means, -1.0)
        largest = max(gain, loss)
        if largest > NOTHING * size:
            error = abs(gain - loss) / largest
            found.append(Balance(balance.name, balance.origin, gain, loss, error, tuple(means)))
    return tuple(found)


def _sum(means: Sequence[tuple[str, float]], sign: float) -> float:
    return sum(sign * mean for _, mean in means if sign * mean > 0.0)


def _conserved(subject: Subject, name: str) -> Balance:
    """Return how far the mean of a component wanders from level to level."""
    component, block = subject.law.components.index(name), subject.system.blocks.block
    lattice = subject.lattice
    sums = np.zeros(lattice.nt)
    sums[block.t0 : block.t1] = subject.owned[..., component].sum(axis=(1, 2))
    levels = subject.comm.allreduce(sums) / (lattice.ny * lattice.nx)
    mean = float(levels.mean())
    farthest = float(levels[np.argmax(np.abs(levels - mean))])
    size = float(np.sqrt(_mean_square(subject)))
    return Balance(f"mean of {name}", "conserved", mean, farthest, abs(farthest - mean) / (size or 1.0))


def _mean_square(subject: Subject) -> float:
    local = float((subject.owned**2).sum())
    return float(subject.comm.allreduce(local)) / subject.lattice.nodes
