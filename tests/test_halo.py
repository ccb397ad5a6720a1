"""The halo exchange of large blocks copies what PETSc's own scatter copies."""

from __future__ import annotations

import json
from pathlib import Path

from tests.mpi import ROOT, run_ranks


def test_halo_is_that_of_petscs_scatter(ranks: int) -> None:
    # Reference: DMGlobalToLocal of a periodic DMDA with a box stencil, corners included. Exact: only copies.
    found = json.loads(run_ranks(ranks, Path(ROOT, "tests", "exchange_everywhere.py")).stdout)
    assert len(found) >= 4
    assert set(found.values()) == {0.0}
