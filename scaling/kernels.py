"""The generated loops of the 1D film law against NumPy slices, PETSc's MatMult and the roofline.

    python -m scaling.kernels [--nodes 2000] [--repeats 9] [--out FILE]
    mpiexec -n 2 python -m scaling.kernels          all ranks at once, each on a lattice of its own

Everything is measured in one run: triad bandwidth [1]_ and a peak of fused multiply-adds first, then each
loop, the best of repeats that all ranks begin together; what is printed is the mean over ranks. The roofline
of a loop is the larger of its traffic at triad bandwidth (one read of each field it takes, one write of its
result) and its operations at the measured peak; `one_one` counts one read and one write whatever it takes.
Halo and smoother run on one lattice that the ranks share, of as many nodes a rank; theirs is one read and one
write of the field.

References
----------
.. [1] J. D. McCalpin, STREAM: a = b + q*c moves 24 bytes an element, write-allocate traffic not credited.
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from lattice.environment import prepare

prepare()

TRIAD = 20_000_000
PEAK_LENGTH, PEAK_TURNS = 1024, 20_000
LAW = "kuramoto-sivashinsky"


class Clock:
    """Times actions that all ranks begin together.

    Parameters
    ----------
    comm : MPI.Comm
    repeats : int
    """

    def __init__(self, comm: Any, repeats: int) -> None:
        self.comm, self.repeats = comm, repeats

    def best(self, action: Callable[[], Any], repeats: int | None = None) -> float:
        """Return this rank's shortest time of an action, its first call dropped."""
        action()
        times = []
        for _ in range(repeats or self.repeats):
            self.comm.Barrier()
            began = time.perf_counter()
            action()
            times.append(time.perf_counter() - began)
        return min(times)

    def mean(self, number: float) -> float:
        """Return the mean over ranks."""
        return float(self.comm.allreduce(number)) / float(self.comm.size)


def machine_peaks(clock: Clock) -> tuple[float, float]:
    """Return this rank's triad bandwidth in byte/s and rate of fused multiply-adds in operations/s."""
    import numba
    import numpy as np

    @numba.njit(fastmath={"contract", "nsz"})
    def triad(a: Any, b: Any, c: Any, q: float) -> None:
        for i in range(a.size):
            a[i] = b[i] + q * c[i]

    @numba.njit(fastmath={"contract", "nsz"})
    def multiply_add(a: Any, b: Any, turns: int) -> None:
        for _ in range(turns):
            for i in range(a.size):
                x = a[i]
                y = b[i]
                for _ in range(8):
                    x = x * y + y
                a[i] = x

    a, b, c = np.zeros(TRIAD), np.ones(TRIAD), np.ones(TRIAD)
    bandwidth = 24.0 * TRIAD / clock.best(lambda: triad(a, b, c, 0.5))
    small, factor = np.full(PEAK_LENGTH, 0.5), np.full(PEAK_LENGTH, 0.5)
    return bandwidth, 16.0 * PEAK_LENGTH * PEAK_TURNS / clock.best(
        lambda: multiply_add(small, factor, PEAK_TURNS)
    )


def film_operator(nt: int, nx: int, comm: Any) -> tuple[Any, dict[str, float]]:
    """Return the film law's operator at a random field, and the values of its scalars."""
    from lattice.geometry.lattice import Lattice
    from lattice.laws.catalogue import load_law
    from lattice.system.operator import FieldOperator

    law = load_law(LAW)
    operator = FieldOperator(law, Lattice(nt=nt, ny=1, nx=nx), comm)
    values = {
        "period": 0.35 * nt,
        "length_x": 0.5 * nx,
        "drift_x": 0.1,
        "source_u": 0.0,
        **law.defaults,
    }
    u = operator.blocks.vector()
    u.setRandom()
    operator.linearise(u, values)
    u.destroy()
    return operator, values


def loops(nodes: int, clock: Clock) -> dict[str, Any]:
    """Measure the loops of a lattice of nodes x nodes that this rank has for itself."""
    import numpy as np
    from mpi4py import MPI

    from lattice.kernels.build import Kernel

    bandwidth, peak = machine_peaks(clock)
    rows: dict[str, Any] = {
        "bandwidth_gb_s_a_rank": clock.mean(bandwidth) / 1e9,
        "peak_gflop_s_a_rank": clock.mean(peak) / 1e9,
    }
    operator, values = film_operator(nodes, nodes, MPI.COMM_SELF)
    padded = operator.padded_point()
    direction = padded.copy()
    result = np.empty(operator.blocks.shape)
    count = float(nodes * nodes)
    for name, fields in (
        ("residual", (padded,)),
        ("tangent", (padded, direction)),
        ("adjoint", (padded, direction)),
    ):
        kernel = operator.kernel(name)
        kernel.prepare(operator.geometry(values), values)
        seconds = clock.best(lambda kernel=kernel, fields=fields: kernel(result, *fields))  # type: ignore[misc]
        flops = kernel.source.flops * count / peak
        rows[name] = {
            "seconds": clock.mean(seconds),
            "ns_per_node": clock.mean(1e9 * seconds / count),
            "of_roofline": clock.mean(max(8.0 * (len(fields) + 1) * count / bandwidth, flops) / seconds),
            "of_roofline_one_one": clock.mean(max(16.0 * count / bandwidth, flops) / seconds),
        }
    plain = Kernel(operator.forms["residual"], operator.scheme, compiled=False)
    plain.prepare(operator.geometry(values), values)
    slices = clock.best(lambda: plain(result, padded), max(2, clock.repeats // 3))
    rows["residual by slices"] = {"seconds": clock.mean(slices)}
    rows["slices / residual"] = rows["residual by slices"]["seconds"] / rows["residual"]["seconds"]
    return rows


def products(nodes: int, clock: Clock) -> dict[str, Any]:
    """Measure the Jacobian product against MatMult of the assembled matrix, on nodes x nodes."""
    from mpi4py import MPI

    from lattice.system.assembly import AssembledJacobian

    operator, _ = film_operator(nodes, nodes, MPI.COMM_SELF)
    x, y = operator.blocks.vector(), operator.blocks.vector()
    x.setRandom()
    assembled = AssembledJacobian(operator)
    matrix = assembled.update()
    multiply = clock.mean(clock.best(lambda: matrix.mult(x, y)))
    product = clock.mean(clock.best(lambda: operator.tangent(x, y)))
    assembled.destroy()
    return {
        "MatMult": {"seconds": multiply, "nodes": nodes, "tangent_seconds": product},
        "MatMult / tangent": multiply / product,
    }


def shared(nodes: int, clock: Clock) -> dict[str, Any]:
    """Measure the halo exchange and the spectral smoother on a lattice the ranks share."""
    from lattice.solve.smoothers import SpectralSmoother
    from lattice.spectral.transform import Transform
    from lattice.system.constant_part import ConstantPart

    operator, _ = film_operator(nodes * clock.comm.size, nodes, clock.comm)
    x, y = operator.blocks.vector(), operator.blocks.vector()
    x.setRandom()
    padded = operator.blocks.padded_vector()
    halo = clock.best(lambda: operator.blocks.exchange(x, padded))
    transform, constant = Transform(operator.blocks), ConstantPart(operator)
    constant.update()
    smoother = SpectralSmoother(transform, constant, 1.0)
    smoother.update()
    smooth = clock.best(lambda: smoother.apply(x, y))
    product = clock.best(lambda: operator.tangent(x, y))
    count = float(nodes * nodes)
    return {
        "halo exchange": {"seconds": clock.mean(halo), "ns_per_node": 1e9 * clock.mean(halo) / count},
        "spectral smoother": {"seconds": clock.mean(smooth), "ns_per_node": 1e9 * clock.mean(smooth) / count},
        "tangent with halo": {
            "seconds": clock.mean(product),
            "ns_per_node": 1e9 * clock.mean(product) / count,
        },
    }


def measure(nodes: int, repeats: int, comm: Any) -> dict[str, Any]:
    """Measure everything; return seconds, ratios and roofline fractions."""
    clock = Clock(comm, repeats)
    rows = {"nodes": nodes, "ranks": comm.size}
    rows |= loops(nodes, clock) | products(nodes // 2, clock) | shared(nodes, clock)
    count = float(nodes * nodes)
    for name in ("halo exchange", "spectral smoother"):
        ideal = 16.0 * count / (rows["bandwidth_gb_s_a_rank"] * 1e9)
        rows[name]["of_roofline_one_one"] = ideal / rows[name]["seconds"]
    return rows


def main() -> int:
    """Measure, print, write JSON."""
    from mpi4py import MPI

    from lattice.solve.petsc import start_petsc
    from scaling.record import describe

    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--nodes", type=int, default=2000, help="nodes per axis")
    parser.add_argument("--repeats", type=int, default=9)
    parser.add_argument("--out", default="", help="default: scaling/results/kernels-RANKS.json")
    options = parser.parse_args()
    start_petsc([])
    comm = MPI.COMM_WORLD
    rows = measure(options.nodes, options.repeats, comm)
    if comm.rank:
        return 0
    for name, row in rows.items():
        print(f"{name:22} {json.dumps(row)}")
    path = Path(options.out or f"scaling/results/kernels-{comm.size}.json")
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps({"machine": describe(), "rows": rows}, indent=1) + "\n")
    return 0


if __name__ == "__main__":
    sys.exit(main())
