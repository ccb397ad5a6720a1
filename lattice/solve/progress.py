"""Where a run stands: what a state file keeps besides field and history, and how a run goes on from it."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError, StateFileError
from lattice.solve.legs import Leg, legs_of
from lattice.solve.memory import Memory
from lattice.store.statefile import read_meta
from lattice.store.statemeta import StateMeta

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.store.runfolder import RunFolder

LIMITS = {
    "solve": ("residual_rms", "newton_steps", "linear_iterations"),
    "damped": ("steps", "residual_rms", "linear_iterations", "stall_steps", "stall_fall", "attempts"),
}
"""Keys that may differ between a run and the one that goes on with it."""


@dataclass(frozen=True)
class Progress:
    """Where a run stands.

    Parameters
    ----------
    legs : tuple of Leg
    leg : int
        The present one.
    first : int
        Index in the history of the present leg's first entry.
    made_with : dict of str to float
        Scalars that the present system was made with; they are the units of its unknowns.
    spacings : dict of str to float
        Spacings that the damped stage keeps, by axis.
    memory : Memory
        Of the damped stage.
    coarse : dict
        The coarse lattice that was chosen, as keys of solve.coarse; empty where there is none.
    reports : tuple of dict
        What the legs before did, as in summary.json.
    """

    legs: tuple[Leg, ...] = ()
    leg: int = 0
    first: int = 0
    made_with: dict[str, float] = field(default_factory=dict)
    spacings: dict[str, float] = field(default_factory=dict)
    memory: Memory = field(default_factory=Memory)
    coarse: dict[str, Any] = field(default_factory=dict)
    reports: tuple[dict[str, Any], ...] = ()

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return {
            **vars(self),
            "legs": [leg.record() for leg in self.legs],
            "memory": self.memory.record(),
            "reports": list(self.reports),
        }

    @classmethod
    def of_record(cls, record: Mapping[str, Any]) -> Progress:
        """Return the progress that `record` wrote, also after JSON."""
        return cls(
            **{
                **record,
                "legs": legs_of(record["legs"]),
                "memory": Memory.of_record(record["memory"]),
                "reports": tuple(record["reports"]),
            }
        )


def kept_state(files: RunFolder, job_text: str, comm: MPI.Intracomm) -> StateMeta | None:
    """Return the record of the state a folder's run can go on from, None where there is none.

    Collective.

    Raises
    ------
    InputError
        If the run in the folder was made from another job.
    """
    found: tuple[StateMeta | None, str] = (None, "")
    if comm.rank == 0 and files.state.exists():
        with suppress(StateFileError):
            found = _judged(read_meta(files.state), job_text)
    meta, difference = comm.bcast(found)
    if difference:
        raise InputError(
            f"{files.path} holds a run of another job: {difference} differs; choose another --out, or"
            " begin anew with --force",
            key="--resume",
        )
    kept: StateMeta | None = meta
    return kept


def _judged(meta: StateMeta, job_text: str) -> tuple[StateMeta | None, str]:
    if not (meta.history and meta.progress):
        return None, ""
    return meta, difference(meta.job_text, job_text)


def difference(before: str, now: str) -> str:
    """Return the first key in which two jobs differ beyond limits and output, nothing where none does.

    Examples
    --------
    >>> difference("box.length_x = 22.0", "box.length_x = 23.0")
    'box.length_x'
    """
    return _difference(_without_limits(before), _without_limits(now), "")


def _without_limits(text: str) -> dict[str, Any]:
    tables = tomllib.loads(text)
    tables.pop("output", None)
    solve = tables.get("solve", {})
    for table, keys in ((solve, LIMITS["solve"]), (solve.get("damped", {}), LIMITS["damped"])):
        for key in keys:
            table.pop(key, None)
    return tables


def _difference(before: Any, now: Any, place: str) -> str:
    if isinstance(before, dict) and isinstance(now, dict):
        for key in sorted({*before, *now}):
            inner = _difference(before.get(key), now.get(key), f"{place}.{key}" if place else key)
            if inner:
                return inner
        return ""
    return "" if before == now else place
