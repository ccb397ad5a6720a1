"""What remains of a run that could not say itself how it ended: its summary from the files it left."""

from __future__ import annotations

import json
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.errors import LatticeError
from lattice.store.replacement import write_text_whole

if TYPE_CHECKING:
    from lattice.store.statemeta import StateMeta

JOB, STATE, SUMMARY = "job.toml", "state.h5", "summary.json"
Identity = tuple[int, int, int]


def identity(path: Path) -> Identity | None:
    """Return what changes when a file is replaced: never a time alone, since clocks jump."""
    try:
        found = path.stat()
    except OSError:
        return None
    return found.st_ino, found.st_mtime_ns, found.st_size


@dataclass(frozen=True)
class Before:
    """A run's folder before the run, to know afterwards what the run has written.

    Parameters
    ----------
    folder : Path
        The run's folder, which need not exist yet.
    job, state : tuple or None
        Identities of the files that were there.
    """

    folder: Path
    job: Identity | None
    state: Identity | None

    @classmethod
    def of(cls, folder: Path) -> Before:
        """Look at a folder."""
        return cls(folder, identity(folder / JOB), identity(folder / STATE))

    def wrote_state(self) -> bool:
        """Whether a state has been written since."""
        return identity(self.folder / STATE) not in (None, self.state)

    def says_nothing(self) -> bool:
        """Whether a run has begun since and left no summary."""
        began = identity(self.folder / JOB) not in (None, self.job)
        return began and identity(self.folder / SUMMARY) is None


def record_end(
    folder: Path, outcome: str, reason: str, ranks: int | None, has_state: bool, lost: bool = False
) -> None:
    """Write summary.json for a run that ended without one; where it cannot be written, nothing happens.

    Parameters
    ----------
    folder : Path
        The run's folder.
    outcome, reason : str
        As in `Summary`.
    ranks : int or None
        Number of MPI ranks, None where unknown.
    has_state : bool
        Whether the folder's state is this run's own; its numbers are then told.
    lost : bool
        Whether ranks or their launcher died without a word, as they do when a node fails.
    """
    content = _numbers(folder / STATE) if has_state else {}
    content = {"outcome": outcome, "reason": reason, "lost": lost, **content, "ranks": ranks}
    with suppress(OSError):
        text = json.dumps(content, indent=2, allow_nan=False, ensure_ascii=False)
        write_text_whole(folder / SUMMARY, text + "\n")


def kept_steps(folder: Path) -> int:
    """Return how many steps a folder's state has behind it; 0 where there is no state."""
    meta = _meta(folder / STATE)
    return len(meta.history) if meta else 0


def last_step(folder: Path) -> int | None:
    """Return the number of the step that a folder's state holds, None where it holds none."""
    meta = _meta(folder / STATE)
    return int(meta.history[-1]["step"]) if meta and meta.history else None


def _meta(state: Path) -> StateMeta | None:
    from lattice.store.statefile import read_meta

    try:
        return read_meta(state)
    except (LatticeError, OSError):
        return None


def _numbers(state: Path) -> dict[str, Any]:
    from lattice.store.runfolder import lattice_numbers
    from lattice.store.statemeta import plain

    meta = _meta(state)
    if meta is None:
        return {}
    steps: list[dict[str, Any]] = [dict(entry) for entry in meta.history]
    last = steps[-1] if steps else {}
    numbers: dict[str, Any] = plain(
        {
            "law": meta.law,
            "lattice": lattice_numbers(meta.lattice),
            "unknowns": meta.lattice.nodes * len(meta.components) + len(meta.free),
            "residual_rms": meta.residual_rms,
            "residual_max": meta.residual_max,
            "scalars": dict(meta.values),
            "mean_square": meta.mean_square,
            "newton_steps": last.get("step"),
            "linear_iterations": sum(entry.get("linear_iterations", 0) for entry in steps),
            "seconds": {"total": last.get("seconds")},
            "peak_memory_mb": last.get("peak_memory_mb"),
            "versions": dict(meta.versions),
        }
    )
    return numbers
