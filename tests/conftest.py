"""Prepare the environment before NumPy, MPI or PETSc is first imported; name the rank counts to try."""

from __future__ import annotations

import os
from pathlib import Path

import hypothesis
import pytest

from lattice import environment

# Compiled kernels are kept between runs, apart from the user's own.
CACHE = Path(__file__).resolve().parents[1] / ".pytest_cache" / "kernels"
os.environ.setdefault("NUMBA_CACHE_DIR", str(CACHE))
os.environ.setdefault("MPLBACKEND", "Agg")
environment.prepare()

# The same examples every time: a run that fails can be repeated. Compiling breaks any deadline.
hypothesis.settings.register_profile("repeatable", derandomize=True, deadline=None, print_blob=True)
hypothesis.settings.load_profile("repeatable")


@pytest.fixture(params=[1, 2, 3, 5])
def ranks(request: pytest.FixtureRequest) -> int:
    """Return each number of ranks the package must work on; 3 and 5 give uneven blocks."""
    return int(request.param)
