"""Machine numbers measured beside every point: memory bandwidth, latency and bandwidth between ranks.

References
----------
.. [1] J. D. McCalpin, "Memory bandwidth and machine balance in current high performance computers", IEEE
   TCCA Newsletter, 1995 (STREAM; from memory): a = b + q*c moves 24 bytes an element.
"""

from __future__ import annotations

import time
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from mpi4py import MPI

ELEMENTS = 4_000_000
TURNS = 5
SHORT, LONG = 8, 1 << 20
TAG = 4300


def probe_machine(comm: MPI.Intracomm) -> dict[str, float]:
    """Return triad bandwidth per rank (all ranks at once), and latency and bandwidth of ranks 0 and 1.

    Collective; takes a fraction of a second. NumPy needs two passes for the triad, 40 bytes an element.
    """
    comm.Barrier()
    bandwidth = comm.allreduce(_triad()) / comm.size
    found = {"triad_gb_s": bandwidth / 1e9}
    if comm.size > 1:
        short, long = _ping(comm, SHORT, 200), _ping(comm, LONG, 10)
        found |= {"latency_us": 1e6 * short, "link_gb_s": LONG / max(long - short, 1e-9) / 1e9}
    return found


def _triad() -> float:
    a, b, c = np.zeros(ELEMENTS), np.ones(ELEMENTS), np.ones(ELEMENTS)
    best = np.inf
    for _ in range(TURNS):
        began = time.perf_counter()
        np.multiply(c, 0.5, out=a)
        np.add(a, b, out=a)
        best = min(best, time.perf_counter() - began)
    return 40.0 * ELEMENTS / best


def _ping(comm: MPI.Intracomm, size: int, turns: int) -> float:
    """Return the seconds of one message of a size from rank 0 to rank 1, half of there and back."""
    buffer = np.zeros(size, dtype=np.uint8)
    best = np.inf
    for _ in range(turns):
        began = time.perf_counter()
        if comm.rank == 0:
            comm.Send(buffer, 1, TAG)
            comm.Recv(buffer, 1, TAG)
        elif comm.rank == 1:
            comm.Recv(buffer, 0, TAG)
            comm.Send(buffer, 0, TAG)
        best = min(best, (time.perf_counter() - began) / 2)
    return float(comm.bcast(best))
