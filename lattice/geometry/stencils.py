"""Finite-difference weights on uniform periodic nodes, in exact rational arithmetic.

References
----------
.. [1] B. Fornberg, "Generation of finite difference formulas on arbitrarily spaced grids",
   Math. Comp. 51 (1988) 699-706 (the recursion).
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from functools import cache

SPACE_ORDERS = (2, 4, 6, 8)
TIME_ORDERS = (2, 4, 6)


def weights(derivative: int, nodes: Sequence[Fraction], point: Fraction) -> tuple[Fraction, ...]:
    """Return the weights of a derivative at `point` from values at distinct `nodes`.

    Parameters
    ----------
    derivative : int
        0 interpolates.
    nodes : sequence of Fraction
        More of them than `derivative`.
    point : Fraction
        Where the derivative is taken.

    Returns
    -------
    tuple of Fraction
        One weight per node, for unit spacing.
    """
    table = [[Fraction(0)] * (derivative + 1) for _ in nodes]
    table[0][0] = Fraction(1)
    scale = Fraction(1)
    for new in range(1, len(nodes)):
        factor = Fraction(1)
        for old in range(new):
            distance = nodes[new] - nodes[old]
            factor *= distance
            for m in range(min(new, derivative), -1, -1):  # [1] the inner recursion, new node last
                lower = table[old][m - 1] if m else Fraction(0)
                if old == new - 1:
                    table[new][m] = scale / factor * (m * lower - (nodes[old] - point) * table[old][m])
                table[old][m] = ((nodes[new] - point) * table[old][m] - m * lower) / distance
        scale = factor
    return tuple(row[derivative] for row in table)


def half_width(derivative: int, order: int) -> int:
    """Return how far the central difference of this derivative and order reaches.

    Examples
    --------
    >>> half_width(4, 4), half_width(1, 2), half_width(0, 8)
    (3, 1, 0)
    """
    return 0 if derivative == 0 else (derivative + 1) // 2 + order // 2 - 1


@cache
def central(derivative: int, order: int) -> tuple[Fraction, ...]:
    """Return central weights for offsets `-half_width .. half_width`, unit spacing.

    Examples
    --------
    >>> [str(w) for w in central(1, 2)]
    ['-1/2', '0', '1/2']
    """
    reach = half_width(derivative, order)
    return weights(derivative, [Fraction(k) for k in range(-reach, reach + 1)], Fraction(0))


@cache
def staggered(derivative: int, order: int) -> tuple[Fraction, ...]:
    """Return weights at the midpoint -1/2 for offsets `-order/2 .. order/2 - 1`, unit spacing.

    `derivative` is 0 (interpolation) or 1; row n of the scheme belongs to level n and is
    collocated halfway between levels n-1 and n.

    Examples
    --------
    >>> [str(w) for w in staggered(1, 4)]
    ['1/24', '-9/8', '9/8', '-1/24']
    """
    nodes = [Fraction(k) for k in range(-order // 2, order // 2)]
    return weights(derivative, nodes, Fraction(-1, 2))
