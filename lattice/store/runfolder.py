"""The folder of a run: its job, its steps, its summary, its state and picture.

job.toml       the job as resolved, with every default filled in
steps.jsonl    one line of JSON per nonlinear step, appended as the run goes
summary.json   outcome and numbers, replaced in one step
state.h5       the state after the last step
reference.h5   the field Newton's method began at: it fixes the phases of a run that goes on
field.png      its picture
"""

from __future__ import annotations

import errno
import json
import os
import resource
import sys
from collections.abc import Callable, Mapping, Sequence
from contextlib import suppress
from dataclasses import asdict, dataclass, field
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError, LatticeError
from lattice.geometry.lattice import Lattice
from lattice.store.aftermath import Before, record_end
from lattice.store.agreement import explain, explain_cause, raise_together
from lattice.store.lock import FolderLock
from lattice.store.replacement import discard, write_text_whole
from lattice.store.statemeta import plain
from lattice.store.stopnote import read_stop_note, remove_stop_note

if TYPE_CHECKING:
    from mpi4py import MPI


@dataclass(frozen=True)
class Summary:
    """What summary.json says.

    Parameters
    ----------
    outcome : str
        "converged", "not converged", "interrupted", "running" or another word for how the run stands.
    reason : str
        Why it ended so, in a sentence.
    law : str
        Name of the law.
    lattice : Lattice
        Nodes and orders.
    unknowns : int
        Field values and free scalars together.
    residual_rms, residual_max : float
        Of the last state; written as null where not finite.
    scalars : dict of str to float
        Period, lengths, drifts, sources and parameters by name.
    mean_square : float
        Mean over nodes of the sum over components of `u**2`.
    newton_steps, linear_iterations : int
        Nonlinear steps, and linear iterations over all of them.
    seconds : dict of str to float
        Wall time by phase.
    ranks : int
        Number of MPI ranks.
    peak_memory_mb : float
        Sum over ranks of the largest resident memory, in MB.
    versions : dict of str to str
        See `versions`.
    classification : dict
        Kind, repeats and symmetries of a converged state; else empty.
    stage : str
        The stage the run ended in: "damped", "newton" or "refine".
    stages : list of dict
        What was done one after another: stage, method, lattice, steps, linear_iterations, residual_rms after
        it, seconds, ending.
    """

    outcome: str
    reason: str
    law: str
    lattice: Lattice
    unknowns: int
    residual_rms: float
    residual_max: float
    scalars: dict[str, float]
    mean_square: float
    newton_steps: int
    linear_iterations: int
    seconds: dict[str, float]
    ranks: int
    peak_memory_mb: float
    versions: dict[str, str] = field(default_factory=dict)
    classification: dict[str, Any] = field(default_factory=dict)
    stage: str = ""
    stages: list[dict[str, Any]] = field(default_factory=list)

    def to_json(self) -> str:
        """Return the text of summary.json."""
        content = asdict(self) | {"lattice": lattice_numbers(self.lattice)}
        return json.dumps(plain(content), indent=2, allow_nan=False, ensure_ascii=False) + "\n"


def lattice_numbers(lattice: Lattice) -> dict[str, int]:
    """Return nodes and orders by name, those of y only in two space dimensions."""
    names = ["nt", "nx", "order_t", "order_x"]
    if lattice.dimensions == 2:
        names = ["nt", "nx", "ny", "order_t", "order_x", "order_y"]
    return {name: getattr(lattice, name) for name in names}


class RunFolder:
    """A run's folder, claimed by one run at a time.

    Every method is collective; rank 0 does the work and all ranks learn of a failure.

    Parameters
    ----------
    path : path-like
        The folder; it is made when it is claimed.
    comm : MPI.Intracomm
        The ranks of the run.
    """

    def __init__(self, path: str | os.PathLike[str], comm: MPI.Intracomm) -> None:
        self.path = Path(path)
        self.job = self.path / "job.toml"
        self.steps = self.path / "steps.jsonl"
        self.summary = self.path / "summary.json"
        self.state = self.path / "state.h5"
        self.reference = self.path / "reference.h5"
        self.picture = self.path / "field.png"
        self._comm = comm
        self._before: Before | None = None
        self._resumes = False
        self._lock = FolderLock(self.path / "run.lock")

    def __enter__(self) -> RunFolder:
        self.claim()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if error is not None:
            self._tell_failure(error)
        self.release()

    def claim(self) -> None:
        """Make the folder and keep other runs out of it.

        Raises
        ------
        LatticeError
            If another run is active in the folder, or it cannot be written.
        """
        self._on_root(self._claim, f"cannot use folder {self.path}")

    def release(self) -> None:
        """Let other runs in; not collective, so that it works after any failure."""
        if self._comm.rank == 0:
            if self._before is not None:
                remove_stop_note(self.path)
            self._lock.release()

    def begin(self, job_text: str, resume: bool = False) -> None:
        """Store the resolved job and remove the summary; unless `resume`, remove steps and picture, too.

        A run has no summary until it ends. An earlier state.h5 stays until the first new one replaces it.
        """
        self._on_root(lambda: self._begin(job_text, resume), f"cannot write to folder {self.path}")

    def append_step(self, entry: Mapping[str, Any]) -> None:
        """Append one step to steps.jsonl."""
        self._on_root(lambda: append_line(self.steps, entry), f"cannot write {self.steps}")

    def rewrite_steps(self, entries: Sequence[Mapping[str, Any]]) -> None:
        """Replace steps.jsonl: a resumed run goes on from its state, which may lie behind the last lines."""
        text = "".join(json.dumps(plain(e), allow_nan=False, ensure_ascii=False) + "\n" for e in entries)
        self._on_root(lambda: write_text_whole(self.steps, text), f"cannot write {self.steps}")

    def drop_reference(self) -> None:
        """Remove reference.h5: a solved state needs none."""
        self._on_root(lambda: discard(self.reference), f"cannot write to folder {self.path}")

    def write_summary(self, summary: Summary) -> None:
        """Replace summary.json."""
        self._on_root(
            lambda: write_text_whole(self.summary, summary.to_json()), f"cannot write {self.summary}"
        )

    def _claim(self) -> None:
        self.path.mkdir(parents=True, exist_ok=True)
        self._lock.take()

    def _begin(self, job_text: str, resume: bool) -> None:
        self._before, self._resumes = Before.of(self.path), resume
        discard(self.summary)
        remove_stop_note(self.path)
        if not resume:
            for old in (self.steps, self.picture, self.reference):
                discard(old)
        write_text_whole(self.job, job_text)

    def _tell_failure(self, error: BaseException) -> None:
        """Say in summary.json why the run ended, on rank 0 and where it has not done so; not collective."""
        if self._before is None or not self._before.says_nothing():
            return
        outcome, reason = "failed", explain_cause(error)
        if isinstance(error, KeyboardInterrupt):
            outcome, reason = "interrupted", f"stopped by {read_stop_note(self.path) or 'Ctrl-C'}"
        has_state = self._resumes or self._before.wrote_state()
        record_end(self.path, outcome, reason, self._comm.size, has_state)

    def _on_root(self, action: Callable[[], None], failure: str) -> None:
        error: Exception | None = None
        if self._comm.rank == 0:
            try:
                action()
            except OSError as caught:
                error = LatticeError(f"{failure}: {explain(caught)}; choose another folder with --out")
            except LatticeError as caught:
                error = caught
        raise_together(self._comm, error)


def append_line(path: Path, entry: Mapping[str, Any]) -> None:
    """Append one line whole or not at all; what a crash cut short before it stays a line of its own."""
    line = (json.dumps(plain(entry), allow_nan=False, ensure_ascii=False) + "\n").encode()
    descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_APPEND, 0o666)
    try:
        size = os.fstat(descriptor).st_size
        if size and os.pread(descriptor, 1, size - 1) != b"\n":
            line = b"\n" + line
        if os.write(descriptor, line) < len(line):
            os.ftruncate(descriptor, size)
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
    finally:
        os.close(descriptor)


def read_steps(path: str | os.PathLike[str]) -> list[dict[str, Any]]:
    """Return the entries of a steps.jsonl, without lines that a crash cut short."""
    entries = []
    for line in Path(path).read_text(encoding="utf-8", errors="replace").splitlines():
        with suppress(ValueError):
            entries.append(json.loads(line))
    return entries


def read_summary(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Return the content of a summary.json.

    Raises
    ------
    InputError
        If there is none, or it is not JSON.
    """
    try:
        content: dict[str, Any] = json.loads(Path(path).read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(f"cannot be read: {error.strerror}", file=str(path)) from error
    except ValueError as error:
        raise InputError(f"is not the summary of a run: {error}", file=str(path)) from error
    return content


def peak_memory_mb(comm: MPI.Intracomm) -> float:
    """Return the sum over ranks of the largest resident memory so far, in MB.

    Collective.
    """
    largest = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    # Linux counts kilobytes of 1024 bytes, macOS bytes: getrusage(2) of each.
    unit = 1 if sys.platform == "darwin" else 1024
    return float(comm.allreduce(largest * unit / 1e6))
