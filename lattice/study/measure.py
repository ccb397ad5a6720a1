"""Measures one point of a study on the ranks of a communicator, and gives its raw rows."""

from __future__ import annotations

import ctypes
import gc
import resource
from collections.abc import Callable, Iterator
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.geometry.timing import Ledger, event
from lattice.solve.stop import StopFlag
from lattice.starts import STARTS
from lattice.study import counters, probe
from lattice.study.works import Work, make_work
from lattice.system.system import System

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.study.points import Point
    from lattice.study.schema import StudySection

WHOLE = "rest"
"""Name of the phase around everything: what it used without the others is the rest."""
PETSC_EVENTS = (
    "KSPGMRESOrthog",
    "MatLUFactorSym",
    "MatLUFactorNum",
    "MatSolve",
    "VecScatterBegin",
    "SFBcastBegin",
)


def measure(point: Point, section: StudySection, comm: MPI.Intracomm, repeats: int) -> list[dict[str, Any]]:
    """Return the rows of a point, one for each repeat; the same on every rank.

    Collective. PETSc must have been started.
    """
    from petsc4py import PETSc

    PETSc.Log.begin()
    read, counts = counters.reader()
    job = point.job
    before = _memory_mb()
    system = System(
        job.make_law(), job.make_lattice(), job.make_values(), job.solve.free or (), job.solve.mean, comm
    )
    x = system.vector()
    owned, values = STARTS[job.start.kind](
        job.start, system.lattice, system.values, system.law, system.blocks.block, comm
    )
    system.pack(owned, values, x)
    del owned
    started = _memory_mb()
    with StopFlag(comm) as stop:
        work = make_work(section, system, x, job, stop)
        rows = list(_repeats(work, section.warm_ups, repeats, comm, read))
        if stop.agreed or stop.poll():
            raise KeyboardInterrupt  # what was cut short is no measurement
    machine = probe.probe_machine(comm)
    peak = _memory_mb()
    shared = {
        "unknowns": x.getSize(),
        "grid": list(system.blocks.grid),
        "halo": system.blocks.halo,
        "block": list(system.blocks.block.shape),
        "components": system.blocks.components,
        "counts_mpi": counts,
        "machine": machine,
    }
    for item in (work, x, system):
        item.destroy()
    del work, x, system, item
    shared["memory_mb"] = {
        "before": _spread(comm, before),
        "started": _spread(comm, started),
        "peak": _spread(comm, peak),
        "left": _spread(comm, _left_mb(comm)),
    }
    return [{**row, **shared} for row in rows]


def _repeats(
    work: Work, warm_ups: int, repeats: int, comm: MPI.Intracomm, read: Callable[[], Any]
) -> Iterator[dict[str, Any]]:
    for number in range(warm_ups + repeats):
        work.prepare()
        before = _petsc_numbers()
        comm.Barrier()
        with Ledger(read) as ledger, event(WHOLE):
            told = work.run()
        after = _petsc_numbers()
        local = {name: tuple(map(float, used)) for name, used in ledger.used.items()}
        facts = comm.bcast(told)
        lu = _lu_numbers(comm, work.lu_numbers())
        work.finish()
        row = {
            "repeat": number - warm_ups,
            "calls": dict(ledger.calls),
            **_phases(comm, local),
            "petsc": _petsc_spread(comm, before, after),
            "lu": lu,
            **facts,
        }
        if number >= warm_ups:
            yield row


def _phases(comm: MPI.Intracomm, local: dict[str, tuple[float, ...]]) -> dict[str, Any]:
    """Return every counter by phase, as minimum, median, maximum and mean over ranks, and the whole."""
    names = sorted({name for part in comm.allgather(tuple(local)) for name in part})
    mine = np.array([local.get(name, (0.0,) * len(counters.NAMES)) for name in names])
    every = np.array(comm.allgather(mine))  # ranks, phases, counters: a few numbers of each rank
    found: dict[str, Any] = {}
    for k, counter in enumerate(counters.NAMES):
        if np.isnan(every[..., k]).any():
            continue
        spread = {name: _statistics(every[:, i, k]) for i, name in enumerate(names)}
        spread["whole"] = _statistics(every[..., k].sum(axis=1))
        found[counter] = spread
    if "mpi_seconds" in found:
        found["useful_seconds"] = _statistics((every[..., 0] - every[..., 1]).sum(axis=1))
    return found


def _statistics(numbers: Any) -> dict[str, float]:
    return {
        "min": float(np.min(numbers)),
        "median": float(np.median(numbers)),
        "max": float(np.max(numbers)),
        "mean": float(np.mean(numbers)),
    }


def _spread(comm: MPI.Intracomm, number: float) -> dict[str, float]:
    return _statistics(comm.allgather(number))


def _petsc_numbers() -> dict[str, dict[str, float]]:
    """Return what PETSc's own events have counted so far on this rank."""
    from petsc4py import PETSc

    found = {name: dict(PETSc.Log.Event(name).getPerfInfo()) for name in PETSC_EVENTS}
    found["flops"] = {"flops": float(PETSc.Log.getFlops())}
    return found


def _petsc_spread(
    comm: MPI.Intracomm, before: dict[str, dict[str, float]], after: dict[str, dict[str, float]]
) -> dict[str, Any]:
    """Return by event what was added, as statistics over ranks; events that did not happen are left out."""
    own = {e: {k: after[e][k] - before[e][k] for k in after[e]} for e in after}
    every = comm.allgather(own)
    return {
        name: {key: _statistics([part[name][key] for part in every]) for key in own[name]}
        for name in own
        if any(part[name].get("count", 1.0) > 0 for part in every)
    }


def _lu_numbers(comm: MPI.Intracomm, own: dict[str, float]) -> dict[str, Any]:
    """Return entries and operations of the factors, and how they are spread over the ranks."""
    every = comm.allgather(own)
    if not all(every):
        return {}
    return {
        "entries": own["entries"],
        "flops": own["flops"],
        "own_entries": _statistics([part["own_entries"] for part in every]),
        "own_flops": _statistics([part["own_flops"] for part in every]),
    }


def _left_mb(comm: MPI.Intracomm) -> float:
    """Return what this process holds once all fields are freed: libraries and compiled loops, in MB."""
    from petsc4py import PETSc

    gc.collect()
    PETSc.garbage_cleanup(comm)
    with suppress(OSError, AttributeError):
        ctypes.CDLL(None).malloc_trim(0)
    with suppress(OSError):
        pages = int(Path("/proc/self/statm").read_text(encoding="ascii").split()[1])
        return pages * resource.getpagesize() / 1e6
    return _memory_mb()


def _memory_mb() -> float:
    """Return the largest resident memory of this process so far, in MB."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024 / 1e6
