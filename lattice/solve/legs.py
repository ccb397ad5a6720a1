"""The legs of a run: which method is used on which lattice, one after another."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

from lattice.geometry.lattice import Lattice

STAGES = ("damped", "newton", "refine")
TIGHTER = 1e-3
"""Factor of the residual at which damped steps end where Newton's method has failed.

Near the end of a family of states Newton's method needs the length that they find."""


@dataclass(frozen=True)
class Leg:
    """One method on one lattice.

    Parameters
    ----------
    stage : str
        "damped", "newton" or "refine".
    method : str
        "damped" or "newton".
    factor : float
        Nodes of every axis over those of the leg before.
    halvings : int
        How often the job's lattice is halved instead (nested iteration); -1 where it is not.
    tighter : float
        Factor of the residual at which damped steps end.
    again : bool
        Newton's method has failed here before.
    held : bool
        Damped steps have stalled here before with lengths that moved; now they are held.
    """

    stage: str
    method: str
    factor: float = 1.0
    halvings: int = -1
    tighter: float = 1.0
    again: bool = False
    held: bool = False

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return asdict(self)


def plan_legs(stages: Sequence[str], options: Any) -> tuple[Leg, ...]:
    """Return the legs of given stages.

    Parameters
    ----------
    stages : sequence of str
        In the order of `STAGES`.
    options : object
        The job's solve section: nested, refine.

    Examples
    --------
    >>> from lattice.job.schema import SolveSection
    >>> [(leg.stage, leg.factor) for leg in plan_legs(STAGES, SolveSection())]
    [('damped', 1.0), ('newton', 1.0), ('refine', 1.4), ('refine', 1.4)]
    """
    legs: list[Leg] = []
    if "damped" in stages:
        legs.append(Leg("damped", "damped"))
    if "newton" in stages:
        nest = range(options.nested, -1, -1) if options.nested else ()
        legs += [Leg("newton", "newton", halvings=n) for n in nest] or [Leg("newton", "newton")]
    if "refine" in stages:
        legs += [Leg("refine", "newton", factor=options.refine.factor)] * options.refine.count
    return tuple(legs)


def retry(legs: tuple[Leg, ...], failed: int) -> tuple[Leg, ...] | None:
    """Return the legs with damped steps before another try at one where Newton's method failed.

    None where there is no damped stage in the run, or this was the second try.
    """
    leg = legs[failed]
    if leg.again or not any(known.method == "damped" for known in legs[:failed]):
        return None
    damped = Leg(leg.stage, "damped", tighter=TIGHTER)
    return (*legs[:failed], damped, replace(leg, factor=1.0, again=True), *legs[failed + 1 :])


def retry_held(legs: tuple[Leg, ...], stalled: int) -> tuple[Leg, ...]:
    """Return the legs with a stalled damped one once more, its lengths held."""
    return (*legs[:stalled], replace(legs[stalled], held=True), *legs[stalled + 1 :])


def halved(lattice: Lattice, times: int) -> Lattice:
    """Return a lattice with the nodes of every axis halved so many times.

    Examples
    --------
    >>> halved(Lattice(nt=64, ny=1, nx=100), 1).shape
    (32, 1, 50)
    """
    counts = {name: max(1, getattr(lattice, name) // 2**times) for name in ("nt", "ny", "nx")}
    return replace(lattice, **counts)


def legs_of(records: Sequence[Mapping[str, Any]]) -> tuple[Leg, ...]:
    """Return the legs that `Leg.record` wrote."""
    return tuple(Leg(**record) for record in records)
