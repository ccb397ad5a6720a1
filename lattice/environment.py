"""Sets the environment that PETSc, HDF5, Numba and the BLAS read when they are first imported.

Call `prepare` before NumPy is imported. Standard library only.
"""

from __future__ import annotations

import importlib.util
import os
import re
import sys
import tempfile
from collections.abc import Mapping, MutableMapping
from dataclasses import dataclass
from pathlib import Path

THREAD_COUNTS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")


@dataclass(frozen=True)
class Launch:
    """How a parallel launcher started this process.

    Parameters
    ----------
    launcher : str
        The launcher's usual name.
    rank, ranks : int
        This process and how many there are, from its environment.
    """

    launcher: str
    rank: int
    ranks: int


_LAUNCHES = (
    ("Open MPI's mpiexec", "OMPI_COMM_WORLD_RANK", "OMPI_COMM_WORLD_SIZE"),
    ("MPICH's mpiexec", "PMI_RANK", "PMI_SIZE"),
    ("srun", "SLURM_PROCID", "SLURM_STEP_NUM_TASKS"),
)


def find_launch(environ: Mapping[str, str] | None = None) -> Launch | None:
    """Return how this process was launched in parallel, or None where it was started alone.

    A batch script or an interactive shell of a scheduler is not a parallel launch: it sets the rank,
    but no step with several tasks.

    Examples
    --------
    >>> find_launch({"PMI_RANK": "1", "PMI_SIZE": "4"})
    Launch(launcher="MPICH's mpiexec", rank=1, ranks=4)
    >>> find_launch({"SLURM_PROCID": "0", "SLURM_NTASKS": "64"}) is None
    True
    """
    environ = os.environ if environ is None else environ
    for launcher, rank, ranks in _LAUNCHES:
        if environ.get(rank, "").isdigit() and environ.get(ranks, "").isdigit():
            launch = Launch(launcher, int(environ[rank]), int(environ[ranks]))
            if launcher != "srun" or launch.ranks > 1:
                return launch
    return None


def prepare() -> None:
    """Fill in what the user has not set: PETSc's folder, thread counts, HDF5 driver, kernel cache.

    Every variable that is set already is left alone. Does nothing the second time.
    """
    _find_debian_build("petsc4py", "PETSC_DIR", Path("/usr/lib/petscdir"), "petsc")
    _find_debian_build("slepc4py", "SLEPC_DIR", Path("/usr/lib/slepcdir"), "slepc")
    set_defaults(os.environ)


LAUNCHER_VARIABLES = (
    "OMPI_COMM_WORLD_",
    "OMPI_MCA_orte_",
    "OMPI_MCA_ess",
    "PMIX_",
    "PMI_",
    "HYDI_",
    "MPI_LOCAL",
)
"""Beginnings of variables by which a launcher tells a process that it is a rank."""


def without_launcher(environ: Mapping[str, str]) -> dict[str, str]:
    """Return the environment of a process that is not a rank of whatever started this one.

    A process in which MPI has been started has such variables too, and a launcher run by it would fail.
    """
    return {name: value for name, value in environ.items() if not name.startswith(LAUNCHER_VARIABLES)}


def set_defaults(environ: MutableMapping[str, str]) -> None:
    """Set thread counts, HDF5 driver and kernel cache where they are absent.

    One thread per rank: the ranks share the cores. Debian's h5py chooses between its serial and its MPI
    build when imported, by what it finds in the environment.
    """
    for name in THREAD_COUNTS:
        environ.setdefault(name, "1")
    launch = find_launch(environ)
    if launch is not None and launch.ranks > 1:
        environ.setdefault("H5PY_ALWAYS_USE_MPI", "1")
    environ.setdefault("NUMBA_CACHE_DIR", str(cache_folder(environ)))


def cache_folder(environ: Mapping[str, str]) -> Path:
    """Return the user's own folder for what may be thrown away, below one that can be written to."""
    home = Path(environ.get("XDG_CACHE_HOME") or Path(environ.get("HOME", "")) / ".cache")
    if home.is_absolute() and _can_write_below(home):
        return home / "lattice"
    shared = Path(tempfile.gettempdir()) / f"lattice-{os.getuid()}"
    # Kernels found there are run: never take a folder that somebody else has put there.
    foreign = shared.exists() and shared.stat().st_uid != os.getuid()
    return shared.with_name(f"{shared.name}-{os.getpid()}") if foreign else shared


def _can_write_below(folder: Path) -> bool:
    while not folder.exists() and folder != folder.parent:
        folder = folder.parent
    return os.access(folder, os.W_OK)


def newest_build(base: Path, prefix: str) -> Path | None:
    """Return Debian's newest real build below `base`, such as `petsc3.18/x86_64-linux-gnu-real`."""
    builds = [path for path in base.glob(f"{prefix}*/*-real") if path.is_dir()]
    return max(builds, key=_version, default=None)


def _version(build: Path) -> tuple[int, ...]:
    return tuple(int(number) for number in re.findall(r"\d+", build.parent.name))


def _find_debian_build(package: str, variable: str, base: Path, prefix: str) -> None:
    """Point `variable` to Debian's versioned folder, unless it is set or the package is found without."""
    if not os.environ.get(variable):
        if importlib.util.find_spec(package) is not None:
            return
        build = newest_build(base, prefix)
        if build is None:
            return
        os.environ[variable] = str(build)
    # Debian's own start-up file did this for the folder that was set when Python started.
    modules = str(Path(os.environ[variable]) / "lib" / "python3" / "dist-packages")
    if Path(modules).is_dir() and modules not in sys.path:
        sys.path.append(modules)
