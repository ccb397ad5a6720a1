"""States for the tests of files and pictures: smooth periodic fields, not solutions of any law."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.store.statefile import write_state
from lattice.store.statemeta import StateMeta

Real = NDArray[np.float64]


def make_meta(lattice: Lattice, components: tuple[str, ...] = ("u",), **changes: Any) -> StateMeta:
    """Return a record with every kind of entry filled in."""
    values = {"period": 10.25, "length_x": 22.0, "drift_x": -0.125}
    if lattice.dimensions == 2:
        values |= {"length_y": 11.0, "drift_y": 0.0}
    fields: dict[str, Any] = {
        "law": "own",
        "title": "A law for tests, with an accent: é",
        "text": tuple(f"{c}_t + {c}*{c}_x + {c}_xx + {c}_xxxx = 0" for c in components),
        "components": components,
        "dimensions": lattice.dimensions,
        "parameters": {"nu": 0.3},
        "lattice": lattice,
        "values": values | {"nu": 0.3},
        "free": ("period", "drift_x"),
        "residual_rms": 3.5e-11,
        "residual_max": 2.0e-10,
        "mean_square": 1.25,
        "outcome": "converged",
        "history": ({"step": 0, "residual_rms": 0.5}, {"step": 1, "residual_rms": 3.5e-11}),
        "versions": {"python": "3"},
        "job_text": '[law]\nname = "own"\n',
    }
    return StateMeta(**(fields | changes))


def smooth_field(lattice: Lattice, components: int = 1, shift: float = 0.0) -> Real:
    """Return a few travelling cosines, shape lattice.shape + (components,), of both signs."""
    t = np.arange(lattice.nt).reshape(-1, 1, 1) / lattice.nt * 2 * math.pi
    y = np.arange(lattice.ny).reshape(1, -1, 1) / lattice.ny * 2 * math.pi
    x = np.arange(lattice.nx).reshape(1, 1, -1) / lattice.nx * 2 * math.pi
    parts = [
        np.cos(3 * x - t + c + shift) * np.exp(np.sin(x + y)) + 0.5 * np.sin(y - 2 * t) - 0.2
        for c in range(components)
    ]
    return np.stack([np.broadcast_to(p, lattice.shape) for p in parts], axis=-1).astype(float)


def write_serial(path: Any, lattice: Lattice, field: Real, **changes: Any) -> StateMeta:
    """Write a whole field from one rank and return its record."""
    from mpi4py import MPI

    names = ("u", "v", "w")[: field.shape[-1]]
    meta = make_meta(lattice, changes.pop("components", names), **changes)
    write_state(path, np.ascontiguousarray(field), Block.whole(lattice), meta, MPI.COMM_SELF)
    return meta
