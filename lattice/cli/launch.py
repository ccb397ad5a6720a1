"""Start the ranks of a run with the MPI launcher of this machine, pass signals on, return its exit code."""

from __future__ import annotations

import contextlib
import os
import shlex
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import FrameType
from typing import Any

from lattice.batch.kinship import end_with_parent
from lattice.errors import InputError

STOP_GRACE = 25.0
"""Seconds the ranks have to keep their state after a termination signal; schedulers often grant 30."""
KILL_GRACE = 5.0
"""Seconds between the launcher's own termination and its end by force."""
POLL = 0.2


@dataclass(frozen=True)
class Launcher:
    """A program that starts MPI ranks.

    Parameters
    ----------
    command : tuple of str
        The program and the arguments that the user gave with it.
    flavour : str
        "openmpi", "mpich" (and those made from it), "slurm" or "unknown".
    version : str
        The first line the program says about its version.
    """

    command: tuple[str, ...]
    flavour: str
    version: str


def find_launcher(given: str | None = None) -> Launcher:
    """Return the launcher to use: the given command, else `LATTICE_LAUNCHER`, else `mpiexec`.

    Raises
    ------
    InputError
        Where it is not found or does not answer.
    """
    words = shlex.split(given or os.environ.get("LATTICE_LAUNCHER", "") or "mpiexec")
    program = shutil.which(words[0]) if words else None
    if program is None:
        raise InputError(
            f"needs an MPI launcher, and {words[0] if words else 'nothing'} is not found; load the site's"
            " MPI module, on Debian `apt install openmpi-bin`, or name another with --launcher",
            key="--ranks",
        )
    try:
        answer = subprocess.run(
            [program, "--version"], capture_output=True, text=True, timeout=30, check=False
        )
    except (OSError, subprocess.TimeoutExpired) as error:
        raise InputError(f"{program} --version gave no answer: {error}", key="--launcher") from None
    text = f"{answer.stdout}\n{answer.stderr}".strip()
    return Launcher((program, *words[1:]), flavour_of(text), text.partition("\n")[0])


def flavour_of(version: str) -> str:
    """Tell the kind of launcher by what it says about its version.

    Examples
    --------
    >>> flavour_of("mpiexec (OpenRTE) 4.1.4"), flavour_of("HYDRA build details:"), flavour_of("slurm 22.05.8")
    ('openmpi', 'mpich', 'slurm')
    """
    low = version.lower()
    if "open mpi" in low or "openrte" in low or "prrte" in low:
        return "openmpi"
    if "hydra" in low or "mpich" in low or "intel(r) mpi" in low:
        return "mpich"
    return "slurm" if low.startswith("slurm") else "unknown"


def launch_command(launcher: Launcher, ranks: int, program: Sequence[str]) -> list[str]:
    """Return the command line that runs a program on a number of ranks."""
    flags: list[str] = []
    if launcher.flavour == "openmpi":
        # Its own report of a rank's exit code would repeat, at length, what the run has said.
        flags.append("--quiet")
        if os.geteuid() == 0:
            flags.append("--allow-run-as-root")
        if is_oversubscribed(ranks):
            flags.append("--oversubscribe")
    return [*launcher.command, *flags, "-n", str(ranks), *program]


def is_oversubscribed(ranks: int) -> bool:
    """Tell whether there are more ranks than cores here; a scheduler's own allocation is never judged."""
    if any(name in os.environ for name in ("SLURM_JOB_ID", "PBS_NODEFILE", "LSB_JOBID", "PE_HOSTFILE")):
        return False
    return ranks > count_cores()


RANKS_PER_CORE = 16
"""Most ranks started on one core here: more only exhaust the machine's memory."""


def check_crowd(ranks: int) -> None:
    """Refuse far more ranks than this machine has cores.

    Raises
    ------
    InputError
        With the largest number that is started here.
    """
    most = RANKS_PER_CORE * count_cores()
    if is_oversubscribed(ranks) and ranks > most:
        raise InputError(
            f"must be at most {most} on the {count_cores()} core(s) here, got {ranks}; use fewer, or submit"
            " the job to a scheduler",
            key="--ranks",
        )


def count_cores(folder: Path = Path("/sys/devices/system/cpu")) -> int:
    """Return the cores this process may use; threads that share one count once, as Open MPI counts."""
    usable = os.sched_getaffinity(0)
    cores = set()
    for cpu in usable:
        try:
            cores.add((folder / f"cpu{cpu}" / "topology" / "thread_siblings_list").read_text())
        except OSError:
            return len(usable)
    return len(cores)


def run_ranks(
    command: Sequence[str], environ: Mapping[str, str], note: Callable[[str], None] = lambda text: None
) -> int:
    """Run a launcher to its end and return its exit code, 128 + n where signal n ended it.

    A first interrupt or termination reaches the ranks as SIGUSR1, on which they stop together at the
    next step and keep the state; Open MPI would kill them a second after SIGTERM. What the user did is
    told to `note` before.
    """
    with Relay(note) as relay:
        process = subprocess.Popen(
            list(command),
            stdin=subprocess.DEVNULL,
            env=dict(environ),
            # A terminal's Ctrl-C must reach this process only, which knows how to stop the ranks.
            start_new_session=True,
            preexec_fn=end_with_parent(),
        )
        return relay.wait(process)


class Relay:
    """Passes signals on to a launcher while its `with` block lasts, and waits for it.

    A user's Ctrl-C asks the ranks to stop; the next one terminates them, a third ends them by force.
    SIGTERM and SIGHUP do the same with a time limit on each stage.

    Parameters
    ----------
    note : callable
        Takes in words what asks for the stop, before the ranks are asked.
    """

    def __init__(self, note: Callable[[str], None] = lambda text: None) -> None:
        self._note_reason = note
        self._pending: list[int] = []
        self._stage = 0
        self._deadline: float | None = None
        self._before: dict[int, Any] = {}

    def __enter__(self) -> Relay:
        for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP, signal.SIGUSR1):
            self._before[number] = signal.signal(number, self._note)
        return self

    def __exit__(self, *failure: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    def _note(self, number: int, frame: FrameType | None) -> None:
        self._pending.append(number)

    def wait(self, process: subprocess.Popen[bytes]) -> int:
        """Return the exit code of the launcher, 128 + n where signal n ended it."""
        while True:
            with contextlib.suppress(subprocess.TimeoutExpired):
                code = process.wait(POLL)
                return code if code >= 0 else 128 - code
            while self._pending:
                self._answer(process, self._pending.pop(0))
            if self._deadline is not None and time.monotonic() > self._deadline:
                self._go_on(process, KILL_GRACE)

    def _answer(self, process: subprocess.Popen[bytes], number: int) -> None:
        if self._stage == 0 and number != signal.SIGUSR1:
            self._note_reason("Ctrl-C" if number == signal.SIGINT else signal.Signals(number).name)
        if number == signal.SIGUSR1:
            process.send_signal(signal.SIGUSR1)
        elif number == signal.SIGINT and self._stage == 0:
            self._go_on(process, None)
        else:
            self._go_on(process, STOP_GRACE if self._stage == 0 else KILL_GRACE)

    def _go_on(self, process: subprocess.Popen[bytes], grace: float | None) -> None:
        """Take the next of three stages: ask the ranks to stop, terminate, end by force."""
        self._stage += 1
        self._deadline = None if grace is None else time.monotonic() + grace
        if self._stage == 1:
            _say("stopping at the next step, the state is kept; Ctrl-C or SIGTERM again ends it at once")
            process.send_signal(signal.SIGUSR1)
        elif self._stage == 2:
            process.send_signal(signal.SIGTERM)
        else:
            with contextlib.suppress(ProcessLookupError):
                os.killpg(process.pid, signal.SIGKILL)


def _say(text: str) -> None:
    with contextlib.suppress(OSError):
        print(text, file=sys.stderr, flush=True)
