"""The generated loops of the 1D film law against NumPy slices, PETSc's MatMult and the roofline.

    python -m scaling.kernels [--nodes 2000] [--repeats 9] [--out FILE]

Everything is measured in one run: triad bandwidth [1]_ and a peak of fused multiply-adds first, then each
loop, best of repeats after a warm-up. The roofline of a loop is the larger of one read and one write of the
field at triad bandwidth and its operations at the measured peak.

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


def best(action: Callable[[], Any], repeats: int) -> float:
    """Return the shortest time of an action, its first call dropped."""
    action()
    times = []
    for _ in range(repeats):
        began = time.perf_counter()
        action()
        times.append(time.perf_counter() - began)
    return min(times)


def machine_peaks(repeats: int) -> tuple[float, float]:
    """Return triad bandwidth in byte/s and the rate of fused multiply-adds in operations/s, on one core."""
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
    bandwidth = 24.0 * TRIAD / best(lambda: triad(a, b, c, 0.5), repeats)
    small, factor = np.full(PEAK_LENGTH, 0.5), np.full(PEAK_LENGTH, 0.5)
    seconds = best(lambda: multiply_add(small, factor, PEAK_TURNS), repeats)
    return bandwidth, 16.0 * PEAK_LENGTH * PEAK_TURNS / seconds


def measure(nodes: int, repeats: int) -> dict[str, Any]:
    """Measure all loops on nodes x nodes; return seconds, ratios and roofline fractions."""
    import numpy as np
    from mpi4py import MPI

    from lattice.geometry.lattice import Lattice
    from lattice.kernels.build import Kernel
    from lattice.laws.catalogue import load_law
    from lattice.system.assembly import AssembledJacobian
    from lattice.system.operator import FieldOperator

    law = load_law("kuramoto-sivashinsky")
    operator = FieldOperator(law, Lattice(nt=nodes, ny=1, nx=nodes), MPI.COMM_SELF)
    values = {
        "period": 0.35 * nodes,
        "length_x": 0.5 * nodes,
        "drift_x": 0.1,
        "source_u": 0.0,
        **law.defaults,
    }
    u, v = operator.blocks.vector(), operator.blocks.vector()
    u.setRandom()
    v.setRandom()
    operator.linearise(u, values)
    bandwidth, peak = machine_peaks(repeats)
    padded = operator.padded_point()
    direction = padded.copy()
    result = np.empty(operator.blocks.shape)
    rows: dict[str, Any] = {"nodes": nodes, "bandwidth_gb_s": bandwidth / 1e9, "peak_gflop_s": peak / 1e9}
    count = float(nodes * nodes)
    for name, fields in (
        ("residual", (padded,)),
        ("tangent", (padded, direction)),
        ("adjoint", (padded, direction)),
    ):
        kernel = operator.kernel(name)
        kernel.prepare(operator.geometry(values), values)
        seconds = best(lambda kernel=kernel, fields=fields: kernel(result, *fields), repeats)  # type: ignore[misc]
        roofline = max(16.0 * count / bandwidth, kernel.source.flops * count / peak)
        rows[name] = {
            "seconds": seconds,
            "ns_per_node": 1e9 * seconds / count,
            "of_roofline": roofline / seconds,
        }
    scratch = operator.blocks.padded_vector()
    plain = Kernel(operator.forms["residual"], operator.scheme, compiled=False)
    plain.prepare(operator.geometry(values), values)
    rows["residual by slices"] = {"seconds": best(lambda: plain(result, padded), max(2, repeats // 3))}
    rows["halo exchange"] = {"seconds": best(lambda: operator.blocks.exchange(v, scratch), repeats)}
    small = FieldOperator(law, Lattice(nt=nodes // 2, ny=1, nx=nodes // 2), MPI.COMM_SELF)
    x, y = small.blocks.vector(), small.blocks.vector()
    x.setRandom()
    small.linearise(x, {**values, "period": values["period"] / 2, "length_x": values["length_x"] / 2})
    matrix = AssembledJacobian(small).update()
    multiply = best(lambda: matrix.mult(x, y), repeats)
    product = best(lambda: small.tangent(x, y), repeats)
    rows["MatMult"] = {"seconds": multiply, "nodes": nodes // 2, "tangent_seconds": product}
    rows["slices / residual"] = rows["residual by slices"]["seconds"] / rows["residual"]["seconds"]
    rows["MatMult / tangent"] = multiply / product
    return rows


def main() -> int:
    """Measure, print, write JSON."""
    from lattice.solve.petsc import start_petsc
    from scaling.record import describe

    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--nodes", type=int, default=2000, help="nodes per axis")
    parser.add_argument("--repeats", type=int, default=9)
    parser.add_argument("--out", default="scaling/results/kernels.json")
    options = parser.parse_args()
    start_petsc([])
    rows = measure(options.nodes, options.repeats)
    for name, row in rows.items():
        print(f"{name:20} {json.dumps(row)}")
    path = Path(options.out)
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps({"machine": describe(), "rows": rows}, indent=1) + "\n")
    return 0


if __name__ == "__main__":
    sys.exit(main())
