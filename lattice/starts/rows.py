"""Rows of matrices that take a field from the nodes of one axis to any places on it.

Trigonometric rows for axes along which the field repeats: exact on every mode the nodes carry. Local rows,
polynomials through the nearest nodes, for axes along which it does not. A place that is a node takes that
node's value exactly.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Real = NDArray[np.float64]

ON_NODE = 1e-11
"""Distance in nodes below which a place is the node: round-off of coordinates."""
STENCIL = 8
"""Nodes of a local row: a polynomial of degree 7."""


def trigonometric_rows(nodes: int, places: ArrayLike, carried: float = np.inf) -> Real:
    """Return rows that evaluate the trigonometric interpolant of periodic nodes.

    Parameters
    ----------
    nodes : int
        Number of periodic nodes.
    places : array of float, shape (rows,)
        In units of the distance between nodes; any number of periods away.
    carried : float
        Nodes per period of the lattice the rows are for: modes that it cannot carry are left out.

    Returns
    -------
    ndarray, shape (rows, nodes)

    Examples
    --------
    >>> trigonometric_rows(4, [0.5, 6.0]).round(3)
    array([[ 0.604,  0.604, -0.104, -0.104],
           [ 0.   ,  0.   ,  1.   ,  0.   ]])
    """
    places = np.asarray(places, dtype=float)
    full, paired = (nodes - 1) // 2, nodes % 2 == 0
    most = (carried - 1.0) / 2.0 + ON_NODE
    truncated = most < full or (paired and carried < nodes * (1.0 - ON_NODE))
    if truncated:
        full, paired = min(full, int(most)), False
    distance = places[:, None] - np.arange(nodes)
    angle = np.pi * (distance / nodes - np.round(distance / nodes))
    with np.errstate(invalid="ignore", divide="ignore"):
        # The sum of cos(2 k angle) over |k| <= full: the Dirichlet kernel.
        kernel = np.sin((2 * full + 1) * angle) / np.sin(angle)
    rows = np.where(np.abs(angle) < 1e-14, 2.0 * full + 1.0, kernel)
    if paired:
        rows += np.cos(nodes * angle)
    rows /= nodes
    if not truncated:
        _settle_nodes(rows, places, nodes)
    return rows


def local_rows(nodes: int, places: ArrayLike) -> Real:
    """Return rows that evaluate polynomials through the nodes nearest to places between the end nodes.

    Parameters
    ----------
    nodes : int
        Number of nodes.
    places : array of float, shape (rows,)
        Between 0 and `nodes - 1`, in units of the distance between nodes.

    Returns
    -------
    ndarray, shape (rows, nodes)
    """
    places = np.asarray(places, dtype=float)
    width = min(STENCIL, nodes)
    rows = np.zeros((len(places), nodes))
    for row, place in enumerate(places):
        first = int(np.clip(np.floor(place) - width // 2 + 1, 0, nodes - width))
        near = np.arange(first, first + width)
        for node in near:
            others = near[near != node]
            rows[row, node] = np.prod((place - others) / (node - others))
    _settle_nodes(rows, places, nodes)
    return rows


def _settle_nodes(rows: Real, places: Real, nodes: int) -> None:
    """Make rows at nodes exact."""
    near = np.round(places)
    on = np.abs(places - near) < ON_NODE
    rows[on] = 0.0
    rows[on, near[on].astype(int) % nodes] = 1.0
