"""What LU factors of a lattice Jacobian need: counts, and how they grow with the lattice.

Nested dissection of a lattice with two long axes has factors of `n log n` entries for `n^(3/2)` operations,
with three `n^(4/3)` and `n^2` [1]_. Two lattices of the same shape fix the constants, the narrow stencil's
own share included.

References
----------
.. [1] A. George, "Nested dissection of a regular finite element mesh", SIAM J. Numer. Anal. 10 (1973)
   345-363; for three dimensions R. J. Lipton, D. J. Rose, R. E. Tarjan, "Generalized nested dissection",
   SIAM J. Numer. Anal. 16 (1979) 346-358 (from memory).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

RELAXATION = 1.2
"""Workspace over what the analysis needs: MUMPS's default of 20 percent."""
BYTES_PER_ENTRY = 11.4
"""Of MUMPS's own estimate, relaxation included, over the factors' entries: 8 for the number, the rest for
contribution blocks and indices. Measured, 2.1 to 19 million entries: 10.9 to 11.4."""


@dataclass(frozen=True)
class Factors:
    """The size of the LU factors of one matrix.

    Parameters
    ----------
    unknowns, nonzeros : int
        Of the matrix.
    entries : float
        Of both factors.
    flops : float
        To compute them.
    megabytes : float
        What the package asks for on all ranks together.
    largest : float
        The same on the fullest rank.
    origin : str
        "analysis", "growth" (from analyses of smaller lattices) or "law" (from constants of the trade).
    """

    unknowns: int
    nonzeros: int
    entries: float
    flops: float
    megabytes: float
    largest: float
    origin: str = "analysis"

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return asdict(self)


SAFETY = 1.25
"""Over what the growth laws alone give: memory that is missing costs more than memory that is left."""
GROWN = 1.1
"""The same of figures grown from analyses: orderings change with the size, and the factors with them by some
twenty percent either way (measured, square lattices of 24 to 200 nodes an axis)."""
SHARED = 0.35
"""By how much the memory of all ranks together grows for every doubling of the ranks (measured at two ranks:
0.32 in one space dimension, 0.34 in two)."""
UNEVEN = 1.1
"""Fullest rank over the mean one, beyond two ranks."""


def shared(factors: Factors, ranks: int) -> Factors:
    """Return the factors of one rank's analysis spread over several ranks."""
    if ranks == 1:
        return factors
    total = factors.megabytes * (1.0 + SHARED * math.log2(ranks))
    uneven = UNEVEN if ranks > 2 else 1.0
    return Factors(
        factors.unknowns,
        factors.nonzeros,
        factors.entries,
        factors.flops,
        total,
        uneven * total / ranks,
        factors.origin,
    )


def growth(small: Factors, large: Factors, unknowns: int, long_axes: int) -> Factors:
    """Return the factors of a larger lattice of the same shape as two analysed ones.

    Parameters
    ----------
    small, large : Factors
        Of lattices whose axes have the same ratios.
    unknowns : int
        Of the lattice wanted.
    long_axes : int
        Axes of many nodes: 1, 2 or 3.

    Examples
    --------
    >>> a, b = (Factors(n, 28 * n, 10.0 * n ** (4 / 3), n**2, 0.0, 0.0) for n in (1000, 8000))
    >>> found = growth(a, b, 64000, 3)
    >>> round(found.entries / (10.0 * 64000 ** (4 / 3)), 3), found.origin
    (1.0, 'growth')
    """
    entries, flops = _laws(long_axes)
    scale = unknowns / large.unknowns
    grown = _through(small.unknowns, small.entries, large.unknowns, large.entries, entries)
    worked = _through(small.unknowns, small.flops, large.unknowns, large.flops, flops)
    wanted = grown(unknowns)
    megabytes = GROWN * large.megabytes * wanted / large.entries
    return Factors(
        unknowns,
        int(large.nonzeros * scale),
        wanted,
        worked(unknowns),
        megabytes,
        megabytes,
        "growth",
    )


def _laws(long_axes: int) -> tuple[Callable[[float], float], Callable[[float], float]]:
    if long_axes >= 3:
        return (lambda n: n ** (4 / 3)), (lambda n: n**2)
    if long_axes == 2:
        return (lambda n: n * math.log2(n)), (lambda n: n**1.5)
    return (lambda n: n), (lambda n: n)


def _through(
    n1: float, y1: float, n2: float, y2: float, law: Callable[[float], float]
) -> Callable[[float], float]:
    """Return `a*n + b*law(n)` through two points, the law scaled to the last where a part is negative."""
    determinant = n1 * law(n2) - n2 * law(n1)
    if abs(determinant) > 1e-9 * n1 * law(n2):
        a = (y1 * law(n2) - y2 * law(n1)) / determinant
        b = (n1 * y2 - n2 * y1) / determinant
        if a >= 0.0 and b >= 0.0:
            return lambda n: a * n + b * law(n)
    if y1 > 0.0 and n2 > n1:
        # The power seen between the two, at most that of the law itself: never below what was measured.
        power = math.log(y2 / y1) / math.log(n2 / n1)
        return lambda n: y2 * max((n / n2) ** power, law(n) / law(n2))
    return lambda n: y2 * law(n) / law(n2)


def assumed(unknowns: int, nonzeros: int, long_axes: int) -> Factors:
    """Return factors by the growth laws alone, where nothing was analysed.

    The constants are from analyses of the film laws at order 4 (measured here): 19 200 unknowns of two long
    axes with 28 nonzeros a row have 457 entries a row, 7 776 of three with 116 have 2 490. A wider stencil
    fills in proportion to its nonzeros.
    """
    n = max(2.0, float(unknowns))
    width = nonzeros / n
    entries, flops = _laws(long_axes)
    if long_axes >= 3:
        per_law, work = 2490 / 7776 ** (1 / 3) * (width / 116), 455.0 * (width / 116) ** 2
    elif long_axes == 2:
        per_law, work = 457 / math.log2(19200) * (width / 28), 1290.0 * (width / 28) ** 2
    else:
        per_law, work = 4.0 * width, 10.0 * width**2
    filled = per_law * entries(n)
    megabytes = SAFETY * BYTES_PER_ENTRY * filled / 1e6
    return Factors(int(n), nonzeros, filled, work * flops(n), megabytes, megabytes, "law")
