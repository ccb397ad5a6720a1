"""What a sizing assumes and what it finds."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any


@dataclass(frozen=True)
class Assumptions:
    """Counts that are known only once the run is made; None is a default from experience.

    Parameters
    ----------
    steps, iterations : int or None
        Newton steps of a lattice, and linear iterations of a step.
    damped_steps, damped_iterations : int or None
        The same of the damped stage.
    stages : tuple of str or None
        Where the job does not say: what is done from the start on.
    """

    steps: int | None = None
    iterations: int | None = None
    damped_steps: int | None = None
    damped_iterations: int | None = None
    stages: tuple[str, ...] | None = None


@dataclass(frozen=True)
class LegEstimate:
    """One stage on one lattice.

    Parameters
    ----------
    stage, method : str
    nodes : tuple of int
        (nt, ny, nx).
    unknowns : int
    preconditioner : str
    coarse : tuple of int or None
        Nodes of the coarse lattice.
    memory_mb : dict of str to float
        Of the fullest rank, by part.
    all_ranks_mb : float
    step_seconds : dict of str to float
        By part; empty without a calibration.
    steps, iterations : int
        Assumed.
    seconds : float or None
        Of the leg.
    lu_origin : str
        How the size of the factors is known.
    """

    stage: str
    method: str
    nodes: tuple[int, int, int]
    unknowns: int
    preconditioner: str
    coarse: tuple[int, int, int] | None
    memory_mb: dict[str, float]
    all_ranks_mb: float
    step_seconds: dict[str, float]
    steps: int
    iterations: int
    seconds: float | None
    lu_origin: str

    @property
    def rank_mb(self) -> float:
        """Memory of the fullest rank."""
        return sum(self.memory_mb.values())

    @property
    def one_step(self) -> float | None:
        """Seconds of one step, None without a calibration."""
        return sum(self.step_seconds.values()) if self.step_seconds else None


@dataclass(frozen=True)
class Estimate:
    """What a job needs on a number of ranks.

    Parameters
    ----------
    ranks : int
    legs : tuple of LegEstimate
    rank_mb, all_ranks_mb : float
        Largest memory of the fullest rank, and of all ranks together.
    start_up_seconds, start_seconds, seconds : float or None
        Of the program, of making the start, and of the whole run; None without a calibration.
    core_hours : float or None
        On as many cores as ranks.
    state_mb, scratch_mb : float
        A state file, and the most the run's folder holds.
    assumptions : tuple of str
        In words.
    """

    ranks: int
    legs: tuple[LegEstimate, ...]
    rank_mb: float
    all_ranks_mb: float
    start_up_seconds: float | None
    start_seconds: float | None
    seconds: float | None
    core_hours: float | None
    state_mb: float
    scratch_mb: float
    assumptions: tuple[str, ...]

    @property
    def longest_step(self) -> float | None:
        """Seconds of the longest step, the least a wall clock must leave; None without a calibration."""
        return max((leg.one_step for leg in self.legs if leg.one_step is not None), default=None)

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return asdict(self)
