"""One launch of `transfer_everywhere.py` for each number of ranks, shared by the tests that look at it."""

from __future__ import annotations

import json
import tempfile
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np

from tests.mpi import run_ranks
from tests.problems import Array

SCRIPT = Path(__file__).with_name("transfer_everywhere.py")
EVERY = (1, 2, 3, 5)


@cache
def _folder() -> Path:
    return Path(tempfile.mkdtemp(prefix="preconditioned-"))


@cache
def results(ranks: int) -> dict[str, Any]:
    """Return what the script prints on that number of ranks."""
    levels = ["levels"] if ranks in EVERY else []
    plain = {"LATTICE_KERNELS": "numpy"}  # on lattices this small, compiling would take nearly all the time
    done = run_ranks(ranks, SCRIPT, _folder(), *levels, timeout=200.0, env=plain)
    return dict(json.loads(done.stdout.splitlines()[-1]))


def applied(case: str, kind: str, ranks: int) -> Array:
    """Return the vector that a preconditioner made ("forward" or "transpose") on that number of ranks."""
    results(ranks)
    return np.asarray(np.load(_folder() / f"{case.replace(' ', '-')}-{kind}-{ranks}.npy"))
