"""How a run on several ranks ended, told by the process that started them where they could not."""

from __future__ import annotations

import signal
import sys
from pathlib import Path

from lattice.batch.codes import CONVERGED, FAILED, INTERRUPTED, KNOWN, STOPPED_EARLY
from lattice.store.aftermath import Before, last_step, record_end
from lattice.store.stopnote import read_stop_note, remove_stop_note, write_stop_note


class Ending:
    """Watches a run's folder from before its start, to say in the end what the ranks could not say.

    Parameters
    ----------
    folder : Path
        The run's folder.
    ranks : int
        Number of MPI ranks.
    resumes : bool
        Whether the folder's state from before belongs to this run.
    """

    def __init__(self, folder: Path, ranks: int, resumes: bool = False) -> None:
        self.folder, self.ranks, self.resumes = folder, ranks, resumes
        self.before = Before.of(folder)
        self.asked = ""

    def note(self, reason: str) -> None:
        """Remember what asks for a stop, and tell the ranks, which repeat it as their reason.

        Where a note is there already, its writer has sent the signal that comes through here.
        """
        self.asked = read_stop_note(self.folder) or reason
        if self.folder.is_dir():
            write_stop_note(self.folder, self.asked)

    def conclude(self, code: int) -> int:
        """Return the run's exit code for that of its launcher, with summary.json written where it is missing.

        A launcher that was ended by force has a code of its own; what counts then is whether the run has
        left a state, and whether somebody had asked for the end.
        """
        unsaid = code not in KNOWN or (code != CONVERGED and self.before.says_nothing())
        if unsaid:
            code = self._tell(code, self.asked or read_stop_note(self.folder))
        remove_stop_note(self.folder)
        return code

    def _tell(self, code: int, asked: str) -> int:
        usable = self.resumes or self.before.wrote_state()
        step = last_step(self.folder) if usable else None
        kept = f"the state of step {step} is kept" if step is not None else "there is no state yet"
        if asked:
            self._record("interrupted", f"stopped by {asked} within a step; {kept}", step is not None)
            return STOPPED_EARLY if step is None else INTERRUPTED
        self._record("failed", f"{_cause(code)}; {kept}", step is not None, lost=code not in KNOWN)
        return code if code in KNOWN else FAILED

    def _record(self, outcome: str, reason: str, has_state: bool, lost: bool = False) -> None:
        if self.before.says_nothing():
            record_end(self.folder, outcome, reason, self.ranks, has_state, lost)
            sys.stderr.write(f"{outcome}: {reason}; files in {self.folder}\n")


def _cause(code: int) -> str:
    if code in KNOWN:
        return "a rank failed, its message is in the run's output"
    if code <= 128 or code - 128 not in set(signal.Signals):
        return f"the ranks' launcher ended with code {code}"
    name = signal.Signals(code - 128).name
    advice = ", often for want of memory" if name == "SIGKILL" else ""
    return f"a rank or the launcher was ended by {name}{advice}"
