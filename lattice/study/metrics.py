"""Speed-up, efficiencies and the serial fraction of measured points, by their published definitions.

Notation: `T(p)` is the wall time of the slowest rank on `p` ranks, the shortest of the repeats; `p0` the
fewest ranks measured.

* Strong: speed-up `S = T(p0)/T(p)`, efficiency `E = p0 T(p0)/(p T(p))`.
* Weak: efficiency `E = T(p0)/T(p)` with the work per rank held [2]_; here also per linear iteration, which
  tells the machine's share of a loss from the method's.
* Karp and Flatt [3]_: with `s = S p0` relative to one rank, `e = (1/s - 1/p)/(1 - 1/p)`.
* POP's hierarchy [4]_: useful time is what a rank spends outside MPI; load balance = mean/max of useful
  time; communication efficiency = max useful time/run time; parallel efficiency = their product;
  computation scaling = useful time of all ranks at `p0` over that at `p` (for weak studies that per rank);
  global efficiency = parallel efficiency x computation scaling.

References
----------
All from memory.

.. [1] G. M. Amdahl, "Validity of the single processor approach to achieving large scale computing
   capabilities", AFIPS Conf. Proc. 30 (1967) 483-485.
.. [2] J. L. Gustafson, "Reevaluating Amdahl's law", Comm. ACM 31 (1988) 532-533.
.. [3] A. H. Karp, H. P. Flatt, "Measuring parallel processor performance", Comm. ACM 33 (1990) 539-543.
.. [4] POP Centre of Excellence, "POP Standard Metrics for Parallel Performance Analysis", 2016.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median
from typing import TYPE_CHECKING, Any

from lattice.study.rows import current_rows, rows_of

if TYPE_CHECKING:
    from lattice.study.points import Point
    from lattice.study.reader import Study

Row = dict[str, Any]
SPARE_LOAD = 1.0
"""Load beyond the cores that a study's own launcher and start may cause."""
LINE = 0.8
"""The efficiency that allocation committees usually ask for (common practice)."""


@dataclass(frozen=True)
class Pop:
    """POP's efficiencies of one point."""

    load_balance: float
    communication: float
    parallel: float
    computation_scaling: float
    whole: float


@dataclass(frozen=True)
class Standing:
    """One point with its metrics.

    Parameters
    ----------
    ranks : int
    oversubscribed : bool
        Cores were shared, by these ranks or with other work: times are shown, and enter no efficiency.
    best, middle : float
        Shortest and median over repeats of the slowest rank's wall time, s.
    repeats : int
    row : dict
        The repeat with the shortest time.
    speed_up, efficiency, per_iteration, karp_flatt : float or None
        None where oversubscribed or where there is nothing to compare with.
    pop : Pop or None
        None where MPI was not counted.
    """

    ranks: int
    oversubscribed: bool
    best: float
    middle: float
    repeats: int
    row: Row
    speed_up: float | None = None
    efficiency: float | None = None
    per_iteration: float | None = None
    karp_flatt: float | None = None
    pop: Pop | None = None


def seconds_of(row: Row) -> float:
    """Return the wall time of the slowest rank."""
    return float(row["seconds"]["whole"]["max"])


def is_disturbed(row: Row) -> bool:
    """Tell whether other work shared the cores while a row was measured, by the machine's load."""
    load = float(row["load_average"])
    return bool(load > row["cores"] + SPARE_LOAD and load > row["ranks"] + SPARE_LOAD)


def is_sound(row: Row) -> bool:
    """Tell whether a row's times may enter an efficiency: a core for every rank, and no other work."""
    return not row["oversubscribed"] and not is_disturbed(row)


def groups(rows: Sequence[Row]) -> list[list[Row]]:
    """Return rows by point, in the order they first appear."""
    found: dict[str, list[Row]] = {}
    for row in rows:
        found.setdefault(row["digest"], []).append(row)
    return list(found.values())


def standings(rows: Sequence[Row]) -> list[Standing]:
    """Return the points of one study with their metrics; `rows` are of that study alone."""
    bests = [min(group, key=seconds_of) for group in groups(rows)]
    times = [[seconds_of(row) for row in group] for group in groups(rows)]
    sound = [row for row in bests if is_sound(row)]
    reference = min(sound, key=lambda row: row["ranks"], default=None)
    return [
        _standing(row, taken, reference if row["kind"] != "refinement" else None)
        for row, taken in zip(bests, times, strict=True)
    ]


def _standing(row: Row, taken: Sequence[float], reference: Row | None) -> Standing:
    crowded = not is_sound(row)
    plain = Standing(row["ranks"], crowded, min(taken), median(taken), len(taken), row)
    if crowded or reference is None:
        return plain
    p0, p = reference["ranks"], row["ranks"]
    ratio = seconds_of(reference) / seconds_of(row)
    weak = row["kind"].startswith("weak")
    efficiency = ratio if weak else ratio * p0 / p
    return Standing(
        p, crowded, min(taken), median(taken), len(taken), row,
        speed_up=ratio * row["growth"] / reference["growth"] if weak else ratio,
        efficiency=efficiency,
        per_iteration=_per_iteration(row, reference, efficiency),
        karp_flatt=None if weak else karp_flatt(ratio * p0, p),
        pop=_pop(row, reference),
    )  # fmt: skip


def _per_iteration(row: Row, reference: Row, efficiency: float) -> float | None:
    """Return the efficiency as it were at the reference's number of iterations."""
    if not row.get("iterations") or not reference.get("iterations"):
        return None
    return float(efficiency * row["iterations"] / reference["iterations"])


def karp_flatt(speed_up: float, ranks: int) -> float | None:
    """Return the serial fraction that a speed-up over one rank is evidence of [3]_.

    Examples
    --------
    >>> round(karp_flatt(1.95, 2), 3), karp_flatt(1.0, 1)
    (0.026, None)
    """
    if ranks < 2:
        return None
    return (1.0 / speed_up - 1.0 / ranks) / (1.0 - 1.0 / ranks)


def _pop(row: Row, reference: Row) -> Pop | None:
    if "useful_seconds" not in row or "useful_seconds" not in reference:
        return None
    useful, before = row["useful_seconds"], reference["useful_seconds"]
    balance = useful["mean"] / useful["max"]
    communication = useful["max"] / seconds_of(row)
    weak = row["kind"].startswith("weak")
    each = 1.0 if weak else reference["ranks"] / row["ranks"]
    scaling = before["mean"] * each / useful["mean"]
    parallel = balance * communication
    return Pop(balance, communication, parallel, scaling, parallel * scaling)


def efficiency_of(study: Study, point: Point, rows: Sequence[Row]) -> float | None:
    """Return a point's efficiency, None where it has none (yet) to claim."""
    if not rows_of(point, rows):
        return None
    for standing in standings(current_rows(study, rows)):
        if standing.row["digest"] == point.digest:
            return standing.efficiency
    return None
