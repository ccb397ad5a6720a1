"""The points of a study: for every rank count or refinement the job that is measured."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from lattice.job.schema import Job
    from lattice.study.schema import StudySection

AXES = (("nt", "period"), ("ny", "length_y"), ("nx", "length_x"))
_GROWING = {"strong": "", "weak-area": "tyx", "weak-time": "t", "weak-space": "yx", "refinement": ""}


@dataclass(frozen=True)
class Point:
    """One point of a study.

    Parameters
    ----------
    number : int
        In the order they are measured, the largest last.
    ranks : int
    growth : float
        Of the box, over the job's.
    factor : float
        Of the nodes per axis, over the job's.
    job : Job
        Resolved, on the point's own lattice.
    digest : str
        Of all that decides what is measured; it tells whether stored rows are of this point.
    """

    number: int
    ranks: int
    growth: float
    factor: float
    job: Job
    digest: str

    @property
    def label(self) -> str:
        """What a line of progress calls it."""
        lattice = self.job.lattice
        shape = [lattice.nt, *([lattice.ny] if lattice.ny else []), lattice.nx]
        return f"{self.ranks} rank(s), {' x '.join(str(n) for n in shape)} nodes"


def make_points(study: StudySection, base: Job, counts: Sequence[int]) -> tuple[Point, ...]:
    """Return the points of a study, smallest first."""
    if study.kind == "refinement":
        pairs = [(ranks, factor) for ranks in sorted(counts) for factor in sorted(study.factors)]
    else:
        pairs = [(ranks, 1.0) for ranks in sorted(counts)]
    least = min(counts)
    return tuple(
        _point(number, ranks, ranks / least, factor, study, base)
        for number, (ranks, factor) in enumerate(pairs)
    )


def _point(number: int, ranks: int, growth: float, factor: float, study: StudySection, base: Job) -> Point:
    growth = growth if _GROWING[study.kind] else 1.0
    job = grown_job(base, _GROWING[study.kind], growth, factor)
    told = {
        # Without defaults: a key that a later version adds does not make rows another job's.
        "job": job.model_dump(mode="json", exclude={"output"}, exclude_defaults=True),
        "ranks": ranks,
        "measure": [study.measure, study.newton_steps, study.warm_ups],
    }
    digest = hashlib.sha256(json.dumps(told, sort_keys=True).encode()).hexdigest()[:16]
    return Point(number, ranks, growth, factor, job, digest)


def grown_job(base: Job, growing: str, growth: float, factor: float) -> Job:
    """Return a job whose box has grown along some axes together by `growth`, the spacings kept.

    Nodes are even numbers, and the box has just so many spacings; `factor` multiplies the nodes alone. A
    coarse lattice that the job gives grows with the box, and is not refined.
    """
    from lattice.job.resolve import changed

    present = [axis for axis in growing if axis != "y" or base.lattice.ny]
    each = growth ** (1.0 / len(present)) if present else 1.0
    nodes: dict[str, Any] = {}
    box: dict[str, Any] = {}
    coarse: dict[str, Any] = {}
    for axis, (count, extent) in zip("tyx", AXES, strict=True):
        own = getattr(base.lattice, count)
        if own is None or own == 1:
            continue
        grown = even(own * each) if axis in present else own
        nodes[count] = even(grown * factor) if factor != 1.0 else grown
        if axis in present:
            box[extent] = getattr(base.box, extent) * (grown / own)
        given = getattr(base.solve.coarse, count)
        if given is not None:
            coarse[count] = even(given * grown / own) if axis in present else given
    solve = changed(base.solve, coarse=changed(base.solve.coarse, **coarse)) if coarse else base.solve
    return changed(
        base,
        lattice=changed(base.lattice, **nodes),
        box=changed(base.box, **box) if box else base.box,
        solve=solve,
    )


def even(number: float) -> int:
    """Return the nearest even integer, at least 8.

    Examples
    --------
    >>> even(141.42), even(3.0)
    (142, 8)
    """
    return max(8, 2 * math.floor(number / 2 + 0.5))
