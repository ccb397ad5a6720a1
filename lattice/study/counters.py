"""What a rank says to others and how long it spends in MPI, counted by a small library in front of MPI.

The library is compiled with the machine's own `mpicc` when a study first needs it; without a compiler or
MPI's headers a study goes on with times only, and says so.
"""

from __future__ import annotations

import ctypes
import hashlib
import os
import shutil
import subprocess
import time
from collections.abc import Callable, Sequence
from functools import cache
from pathlib import Path

import numpy as np

from lattice.environment import cache_folder
from lattice.geometry.timing import Counters

NAMES = ("seconds", "mpi_seconds", "messages", "bytes", "reductions", "collectives")
"""Of the counters that `reader` reads, in order."""
SOURCE = Path(__file__).with_name("mpi_counter.c")
SYMBOL = "lattice_mpi_counters"


@cache
def counter_library() -> tuple[Path | None, str]:
    """Return the compiled library and why there is none, else an empty text."""
    compiler = shutil.which(os.environ.get("MPICC", "mpicc"))
    if compiler is None:
        return None, "no mpicc found; on Debian `apt install libopenmpi-dev`"
    text = SOURCE.read_bytes() + _version(compiler)
    folder = cache_folder(os.environ)
    library = folder / f"mpi-counter-{hashlib.sha256(text).hexdigest()[:16]}.so"
    if library.exists():
        return library, ""
    folder.mkdir(parents=True, exist_ok=True)
    partial = library.with_suffix(f".{os.getpid()}")
    error = ""
    for flags in (_fortran_flags(), ["-DWITHOUT_FORTRAN"]):
        command = [compiler, "-O2", "-shared", "-fPIC", "-o", str(partial), str(SOURCE), *flags, "-ldl"]
        done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)
        if done.returncode == 0:
            partial.replace(library)
            return library, ""
        error = (done.stderr.strip().splitlines() or ["no message"])[0]
    return None, f"mpicc failed: {error}"


def _fortran_flags() -> list[str]:
    """Return what links MPI's Fortran library, whose entry points are to be found behind ours."""
    compiler = shutil.which("mpifort")
    if compiler is None:
        return ["-DWITHOUT_FORTRAN"]
    done = subprocess.run([compiler, "-show"], capture_output=True, text=True, timeout=60, check=False)
    words = [word for word in done.stdout.split() if word.startswith(("-L", "-l", "-Wl,-rpath"))]
    return ["-Wl,--no-as-needed", *words]


def _version(compiler: str) -> bytes:
    """Return what tells one MPI's compiler from another's."""
    done = subprocess.run([compiler, "-show"], capture_output=True, timeout=60, check=False)
    return compiler.encode() + done.stdout


def counted(program: Sequence[str]) -> list[str]:
    """Return a rank's command line with the library in front of MPI, unchanged where there is none."""
    library, _ = counter_library()
    if library is None:
        return list(program)
    before = os.environ.get("LD_PRELOAD", "")
    return ["env", f"LD_PRELOAD={library}{':' + before if before else ''}", *program]


def reader() -> tuple[Callable[[], Counters], bool]:
    """Return what reads this process's counters, and whether MPI's are among them: else they are nan."""
    try:
        array = (ctypes.c_double * (len(NAMES) - 1)).in_dll(ctypes.CDLL(None), SYMBOL)
    except ValueError:
        return _clock_alone, False
    view = np.ctypeslib.as_array(array)

    def read() -> Counters:
        return np.concatenate(([time.perf_counter()], view))

    return read, True


def _clock_alone() -> Counters:
    return np.array([time.perf_counter(), *[np.nan] * (len(NAMES) - 1)])
