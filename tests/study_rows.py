"""Rows of invented studies, for tests of what is computed from rows; every number follows from a formula."""

from __future__ import annotations

import math
from typing import Any

COEFFICIENTS = {"tangent": 2e-9, "halo": 5e-10, "FFT": 3e-10, "coarse solve": 1e-9, "rest": 4e-9}
LATENCY, LINK = 2e-6, 4e9


def spread(number: float) -> dict[str, float]:
    """Return the statistics of ranks that are all alike."""
    return dict.fromkeys(("min", "median", "max", "mean"), float(number))


def row(ranks: int, seconds: dict[str, float], **more: Any) -> dict[str, Any]:
    """Return one row with the given seconds by phase."""
    whole = sum(seconds.values())
    made: dict[str, Any] = {
        "study": "invented", "kind": "strong", "measure": "steps", "digest": f"point-{ranks}", "ranks": ranks,
        "growth": 1.0, "factor": 1.0, "cores": 64, "oversubscribed": False, "law": "kuramoto-sivashinsky",
        "dimensions": 1, "lattice": {"nt": 256, "nx": 256, "order_t": 4, "order_x": 4},
        "box": {"period": 90.0, "length_x": 128.0}, "preconditioner": "coarse", "linear_rtol": 1e-6,
        "unknowns": 65539, "components": 1, "halo": 4, "grid": [ranks, 1, 1], "iterations": 10, "newton_steps": 1,
        "calls": {"tangent": 11, "halo": 12, "FFT": 60, "coarse solve": 10, "rest": 1},
        "seconds": {**{n: spread(s) for n, s in seconds.items()}, "whole": spread(whole)},
        "petsc": {}, "lu": {}, "counts_mpi": True,
        "memory_mb": {"left": spread(100.0), "started": spread(120.0), "peak": spread(100.0 + 800.0 / ranks)},
        "machine": {"triad_gb_s": 10.0, "latency_us": 1e6 * LATENCY, "link_gb_s": LINK / 1e9},
        "host": "nowhere", "processor": "invented", "memory_gb": 1.0, "load_average": 0.5, "binding": [0],
        "system": "none", "versions": {"lattice": "0"}, "commit": "0000000", "measured": "2026-01-01T00:00:00Z",
        "command": "lattice study invented.toml",
    }  # fmt: skip
    return made | more


def modelled_row(ranks: int, nx: int = 256, **more: Any) -> dict[str, Any]:
    """Return a row whose seconds follow from `COEFFICIENTS`, latency and bandwidth exactly."""
    grid, nt = [ranks, 1, 1], 256
    own = math.ceil(nt / ranks) * nx
    unknowns = nt * nx + 3
    padded = (math.ceil(nt / ranks) + 8) * (nx + 8)
    calls = {"tangent": 11, "halo": 12, "FFT": 60, "coarse solve": 10, "rest": 1}
    shared = ranks > 1
    messages = {"halo": 24.0 * shared, "FFT": 60.0 * (ranks - 1), "coarse solve": 40.0 * math.log2(ranks)}
    sent = {"halo": 24.0 * 8 * 4 * nx * shared, "FFT": 60.0 * 8 * own * (1 - 1 / ranks), "coarse solve": 0.0}
    work = {
        "tangent": 11 * own, "halo": 12 * padded, "FFT": 60 * own * math.log2(unknowns),
        "coarse solve": 10 * own, "rest": 10 * own,
    }  # fmt: skip
    seconds = {
        name: COEFFICIENTS[name] * work[name]
        + (LATENCY * messages.get(name, 0.0) + sent.get(name, 0.0) / LINK if shared else 0.0)
        for name in work
    }
    counts = {
        "messages": {**{n: spread(v) for n, v in messages.items()}, "whole": spread(sum(messages.values()))},
        "bytes": {**{n: spread(v) for n, v in sent.items()}, "whole": spread(sum(sent.values()))},
        "reductions": {"whole": spread(0.0)},
        "collectives": {"whole": spread(0.0)},
    }
    useful = {"useful_seconds": spread(sum(COEFFICIENTS[n] * work[n] for n in work))}
    lattice = {"nt": nt, "nx": nx, "order_t": 4, "order_x": 4}
    told = {"lattice": lattice, "unknowns": unknowns, "calls": calls, "grid": grid, "digest": f"{ranks}-{nx}"}
    return row(ranks, seconds, **(told | counts | useful | more))
