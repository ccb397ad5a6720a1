"""The cost model: seconds of every phase from exact counts and a few calibrated coefficients.

Of every phase the slowest rank is modelled,

    seconds = coefficient * work / share + latency * (messages + rounds) + bytes / bandwidth

where the work is counted (nodes times applications; LU operations and entries of the fullest rank, as MUMPS
counts them, whose share of the whole on many ranks is the critical path of the elimination tree; operations
of the orthogonalisation, as PETSc counts them), the share is what a core keeps of its memory bandwidth where
others use it too (triad), and `rounds` is `2*ceil(log2 p)` per reduction or other collective. Coefficients
are fitted to measured points that are not oversubscribed; latency and bandwidth are measured or the site's.

References
----------
All from memory.

.. [1] S. Williams, A. Waterman, D. Patterson, "Roofline", Comm. ACM 52 (2009) 65-76.
.. [2] R. W. Hockney, "The communication challenge for MPP", Parallel Computing 20 (1994) 389-398.
.. [3] R. Thakur, R. Rabenseifner, W. Gropp, "Optimization of collective communication operations in MPICH",
   Int. J. High Perform. Comput. Appl. 19 (2005) 49-66.
.. [4] A. George, "Nested dissection of a regular finite element mesh", SIAM J. on Numerical
   Analysis 10 (1973) 345-363.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

Row = dict[str, Any]
LEAST_SPREAD = 0.1
"""Smallest relative error that a phase's prediction is given: timings repeat no better."""


@dataclass(frozen=True)
class Machine:
    """What the model needs of a machine.

    Parameters
    ----------
    latency : float
        Seconds of an empty message.
    link : float
        Bytes per second between two ranks.
    triad : float
        Bytes per second of memory bandwidth one rank has while all others use theirs.
    source : str
        Where these numbers come from.
    """

    latency: float
    link: float
    triad: float
    source: str


@dataclass(frozen=True)
class Load:
    """What one phase does on its busiest rank in one repeat.

    Parameters
    ----------
    work : float
        In the phase's own unit.
    messages, bytes, collectives : float
        Sent to others; collective calls of any kind.
    """

    work: float
    messages: float = 0.0
    bytes: float = 0.0
    collectives: float = 0.0


def orthogonalisation(row: Row) -> float:
    """Return the seconds of Krylov orthogonalisation on the slowest rank, by PETSc's event."""
    found = row["petsc"].get("KSPGMRESOrthog")
    return float(found["time"]["max"]) if found else 0.0


def phase_seconds(row: Row) -> dict[str, float]:
    """Return the seconds of every phase on its slowest rank: disjoint, and together about the whole."""
    own = {name: float(s["max"]) for name, s in row["seconds"].items() if name != "whole"}
    found = {
        "loops": sum(own.get(n, 0.0) for n in ("residual", "tangent", "adjoint")),
        "halo": own.get("halo", 0.0),
        "FFT": own.get("FFT", 0.0),
        "transfer": own.get("transfer", 0.0),
        "smoother": own.get("smoother", 0.0) + own.get("smoother set-up", 0.0),
        "coarse set-up": own.get("coarse set-up", 0.0),
        "coarse solve": own.get("coarse solve", 0.0),
        "orthogonalisation": orthogonalisation(row),
        "files": own.get("write", 0.0) + own.get("read", 0.0),
    }
    found["rest"] = max(0.0, own.get("rest", 0.0) - found["orthogonalisation"])
    return {name: seconds for name, seconds in found.items() if seconds > 0.0}


_SOURCES = {
    "loops": ("residual", "tangent", "adjoint"),
    "smoother": ("smoother", "smoother set-up"),
    "files": ("write", "read"),
}


def _counted(row: Row, counter: str, phase: str) -> float:
    names = _SOURCES.get(phase, (phase,))
    table = row.get(counter, {})
    return sum(float(table[name]["max"]) for name in names if name in table)


def _calls(row: Row, *names: str) -> float:
    return float(sum(row["calls"].get(name, 0) for name in names))


def owned_nodes(row: Row) -> float:
    """Return the most numbers of the field that one rank owns."""
    lattice, grid = row["lattice"], row["grid"]
    shape = (lattice["nt"], lattice.get("ny", 1), lattice["nx"])
    return float(np.prod([math.ceil(n / p) for n, p in zip(shape, grid, strict=True)])) * float(
        row["components"]
    )


def _work(row: Row, phase: str) -> float:
    nodes, lu = owned_nodes(row), row.get("lu") or {}
    own_flops = float(lu.get("own_flops", {}).get("max", 0.0))
    own_entries = float(lu.get("own_entries", {}).get("max", 0.0))
    orthogonal = row["petsc"].get("KSPGMRESOrthog", {}).get("flops", {}).get("max", 0.0)
    units: dict[str, Callable[[], float]] = {
        "loops": lambda: _calls(row, "residual", "tangent", "adjoint") * nodes,
        "halo": lambda: _calls(row, "halo") * halo_nodes(row),
        "FFT": lambda: _calls(row, "FFT") * nodes * math.log2(max(2.0, row["unknowns"])),
        "transfer": lambda: _calls(row, "transfer") * nodes,
        "smoother": lambda: _calls(row, "smoother", "smoother set-up") * nodes,
        "coarse set-up": lambda: own_flops**0.75 if own_flops else nodes,
        "coarse solve": lambda: _calls(row, "coarse solve") * (own_entries or nodes),
        "orthogonalisation": lambda: float(orthogonal),
        "files": lambda: nodes,
        "rest": lambda: max(1.0, row.get("iterations", 1)) * nodes,
    }
    return units[phase]()


def halo_nodes(row: Row) -> float:
    """Return the numbers in a rank's halo, whether they come from another rank or its own other end."""
    lattice, grid, halo = row["lattice"], row["grid"], row["halo"]
    shape = (lattice["nt"], lattice.get("ny", 1), lattice["nx"])
    own = [math.ceil(n / p) for n, p in zip(shape, grid, strict=True)]
    wide = [n + 2 * halo if whole > 1 else n for n, whole in zip(own, shape, strict=True)]
    # Copying the block into its padded array is as much of the time as the halo itself.
    return float(np.prod(wide)) * float(row["components"])


def load_of(row: Row, phase: str) -> Load:
    """Return what a phase of a measured row did on its busiest rank."""
    collectives = _counted(row, "reductions", phase) + _counted(row, "collectives", phase)
    return Load(
        _work(row, phase), _counted(row, "messages", phase), _counted(row, "bytes", phase), collectives
    )


def communication(load: Load, ranks: int, machine: Machine) -> float:
    """Return the seconds that messages, bytes and collectives take [2]_ [3]_."""
    if ranks == 1:
        return 0.0
    rounds = 2.0 * math.ceil(math.log2(ranks)) * load.collectives
    return machine.latency * (load.messages + rounds) + load.bytes / machine.link


@dataclass(frozen=True)
class Phase:
    """One calibrated phase: seconds per unit of work at the reference's bandwidth, its relative spread."""

    coefficient: float
    spread: float
    samples: int


@dataclass(frozen=True)
class Model:
    """A calibrated model.

    Parameters
    ----------
    phases : dict of str to Phase
    triad : float
        Bandwidth of a rank that the coefficients hold for.
    points : int
        Points it was calibrated on.
    """

    phases: Mapping[str, Phase]
    triad: float
    points: int


def machine_of(row: Row) -> Machine:
    """Return the machine numbers measured beside a row."""
    found = row["machine"]
    return Machine(
        1e-6 * found.get("latency_us", 1.0),
        1e9 * found.get("link_gb_s", 5.0),
        1e9 * found["triad_gb_s"],
        "measured beside the point",
    )


def calibrate(rows: Sequence[Row]) -> Model:
    """Fit the coefficient of every phase to rows, one per point, none of them oversubscribed.

    The coefficient is the geometric mean of what the rows give: relative errors count alike.
    """
    triad = float(np.median([row["machine"]["triad_gb_s"] for row in rows])) * 1e9
    ratios: dict[str, list[float]] = {}
    for row in rows:
        machine = machine_of(row)
        for phase, seconds in phase_seconds(row).items():
            load = load_of(row, phase)
            left = seconds - communication(load, row["ranks"], machine)
            share = min(1.0, machine.triad / triad)
            if load.work > 0.0:
                ratios.setdefault(phase, []).append(max(left, 0.05 * seconds) * share / load.work)
    phases = {}
    for phase, found in ratios.items():
        logs = np.log(found)
        spread = float(np.std(logs, ddof=1)) if len(found) > 1 else 0.3
        phases[phase] = Phase(float(np.exp(logs.mean())), max(LEAST_SPREAD, spread), len(found))
    return Model(phases, triad, len(rows))


def predict_phase(model: Model, phase: str, load: Load, ranks: int, machine: Machine) -> float:
    """Return the seconds of one phase on its slowest rank."""
    share = min(1.0, machine.triad / model.triad)
    known = model.phases.get(phase)
    compute = known.coefficient * load.work / share if known else 0.0
    return compute + communication(load, ranks, machine)


@dataclass(frozen=True)
class Trial:
    """One phase of one point that was held back: what the model says and what was measured, s."""

    row: Row
    phase: str
    predicted: float
    measured: float
    weight: float

    @property
    def error(self) -> float:
        """Relative error of the prediction."""
        return abs(self.predicted / self.measured - 1.0)


MAIN = 0.1
"""Share of the time from which on a phase counts in the back-test."""


def back_test(rows: Sequence[Row]) -> list[Trial]:
    """Fit on the smaller half of the points, predict the larger ones, phase by phase.

    Size is ranks times unknowns: what a proposal extrapolates along.
    """
    ordered = sorted(rows, key=lambda row: (row["unknowns"] * row["ranks"], row["ranks"]))
    if len(ordered) < 3:
        return []
    held = max(1, len(ordered) // 2)
    model = calibrate(ordered[:-held])
    trials = []
    for row in ordered[-held:]:
        phases = phase_seconds(row)
        whole = sum(phases.values())
        for phase, seconds in phases.items():
            if seconds >= MAIN * whole:
                said = predict_phase(model, phase, load_of(row, phase), row["ranks"], machine_of(row))
                trials.append(Trial(row, phase, said, seconds, seconds / whole))
    return trials
