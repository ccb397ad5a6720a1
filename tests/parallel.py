"""One launch for each number of ranks, shared by the tests that look at its results."""

from __future__ import annotations

import atexit
import json
import shutil
import tempfile
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from scipy.integrate import solve_ivp

from tests.mpi import run_ranks
from tests.problems import TURN, Array

SCRIPT = Path(__file__).with_name("compute_everywhere.py")


@cache
def folder() -> Path:
    """Return the folder that the runs read their start from and leave their states in."""
    path = Path(tempfile.mkdtemp(prefix="parallel-"))
    atexit.register(shutil.rmtree, path, ignore_errors=True)
    np.save(path / "film.npy", attracting_film(levels=32, nodes=32)[:, None, :, None])
    return path


def attracting_film(levels: int, nodes: int, length: float = 17.631, period: float = 17.672) -> Array:
    """Return one period of an odd film state, shape (levels, nodes), marched until it has settled.

    P. Zgliczynski, Found. Comput. Math. 4 (2004) 157-185 (from memory): at nu = 0.127, length
    2*pi/sqrt(nu), an attracting periodic state of the odd Kuramoto-Sivashinsky equation exists; its period
    17.672 by independent recomputation.
    """
    x = np.arange(nodes) * (length / nodes)
    k = 1j * TURN / length * np.arange(nodes // 2 + 1)

    def rate(t: float, u: Array) -> Array:
        spectrum, square = np.fft.rfft(u), np.fft.rfft(0.5 * u**2)
        found = np.fft.irfft(-k * square - (k**2 + k**4) * spectrum, nodes)
        return 0.5 * (found - np.roll(found[::-1], 1))  # odd: rounding must not break the symmetry

    start = sum(a * np.sin(TURN * m * x / length) for m, a in ((1, 0.1), (2, 1.0), (3, 0.2)))
    times = 150.0 + np.arange(levels) * (period / levels)
    done = solve_ivp(rate, (0.0, times[-1]), start, "LSODA", times, rtol=1e-4, atol=1e-6)
    return np.asarray(done.y.T)


@cache
def results(ranks: int) -> dict[str, Any]:
    """Return what `compute_everywhere.py` prints on that number of ranks."""
    done = run_ranks(ranks, SCRIPT, folder(), timeout=300.0)
    return dict(json.loads(done.stdout.splitlines()[-1]))


def state(case: str, kind: str, ranks: int) -> Array:
    """Return a state solved on that number of ranks, shape (nt, ny, nx, components)."""
    results(ranks)
    return np.asarray(np.load(folder() / f"{case}-{kind}-{ranks}.npy"))
