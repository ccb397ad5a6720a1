"""Ends a run on all ranks with one readable message, whatever fails on whichever rank."""

from __future__ import annotations

import signal
import sys
import time
import traceback
from collections.abc import Callable
from types import FrameType
from typing import TYPE_CHECKING

from lattice.batch.codes import REFUSED
from lattice.cli.exits import exit_code, explain, root_cause
from lattice.errors import RemoteFailure

if TYPE_CHECKING:
    from mpi4py import MPI

PATIENCE = 3.0
"""Seconds a failed rank waits for the others to fail likewise before it ends them."""


def run_guarded(comm: MPI.Intracomm, work: Callable[[], int], debug: bool) -> int:
    """Call `work` on every rank and return its exit code, or end all ranks with one message.

    Collective. Where the input is refused on all ranks, one of them tells and the exit code is
    returned. Any other failure on several ranks ends in `MPI_Abort`, since ranks that are well may
    wait in a collective call for ever.
    """
    if comm.Get_size() == 1:
        return work()
    watch = comm.Dup()
    try:
        return work()
    except SystemExit:
        raise
    except BaseException as error:  # noqa: BLE001 - every failure must end the other ranks too
        return _end(watch, error, debug)


def _end(watch: MPI.Comm, error: BaseException, debug: bool) -> int:
    if not _all_failed(watch):
        if not _is_remote(error):
            _tell(error, watch, debug)
        watch.Abort(exit_code(error))
    codes = watch.allgather((_is_remote(error), exit_code(error), explain(error, debug)))
    teller = min(range(len(codes)), key=lambda rank: (codes[rank][0], rank))
    alike = len(set(codes)) == 1
    if watch.Get_rank() == teller:
        _tell(error, watch, debug, alike)
    watch.Barrier()
    if not alike or exit_code(error) != REFUSED:
        if watch.Get_rank() != teller:
            time.sleep(PATIENCE)  # the teller's exit code is the one to be seen
        watch.Abort(exit_code(error))
    return REFUSED


def _all_failed(watch: MPI.Comm) -> bool:
    """Tell whether every rank comes here within the patience; some may be in another collective."""
    request = watch.Ibarrier()
    deadline = time.monotonic() + PATIENCE
    while time.monotonic() < deadline:
        if request.Test():
            return True
        time.sleep(0.01)
    return False


def _tell(error: BaseException, watch: MPI.Comm, debug: bool, alike: bool = False) -> None:
    where = "" if alike else f"rank {watch.Get_rank()} of {watch.Get_size()}: "
    if debug:
        traceback.print_exception(error)
    print(where + explain(error, debug), file=sys.stderr, flush=True)


def _is_remote(error: BaseException) -> bool:
    return isinstance(root_cause(error), RemoteFailure)


def stop_on_signals(alone: bool) -> None:
    """Make SIGUSR1, and SIGTERM where alone, end the program like Ctrl-C until the solver takes them over.

    SIGTERM is also how a launcher ends the other ranks after one has failed: they have nothing to say.
    """
    for number in (signal.SIGUSR1, signal.SIGTERM) if alone else (signal.SIGUSR1,):
        signal.signal(number, _interrupt)


def _interrupt(number: int, frame: FrameType | None) -> None:
    raise KeyboardInterrupt
