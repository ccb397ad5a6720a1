"""Which software a run used."""

from __future__ import annotations

import importlib.metadata
import platform
import re
from contextlib import suppress
from pathlib import Path

PACKAGE = "lattice-spacetime"


def versions() -> dict[str, str]:
    """Return versions by name: this package, Python, NumPy, h5py, HDF5, the MPI library, PETSc, MUMPS.

    Imports what it reports; whatever is not installed is left out.
    """
    import numpy

    found = {"lattice": package_version(), "python": platform.python_version(), "numpy": numpy.__version__}
    for part in (_hdf5_versions, _mpi_versions, _petsc_versions):
        with suppress(ImportError):
            found |= part()
    return found


def package_version() -> str:
    """Return this package's version, "not installed" where it runs from a bare source tree."""
    try:
        return importlib.metadata.version(PACKAGE)
    except importlib.metadata.PackageNotFoundError:
        return "not installed"


def _hdf5_versions() -> dict[str, str]:
    import h5py

    parallel = " with MPI" if h5py.get_config().mpi else ""
    return {"h5py": str(h5py.__version__), "hdf5": str(h5py.version.hdf5_version) + parallel}


def _mpi_versions() -> dict[str, str]:
    import mpi4py
    from mpi4py import MPI

    library = MPI.Get_library_version().strip("\0\n ")
    return {"mpi4py": str(mpi4py.__version__), "mpi": re.split(r"[,\n]", library)[0].strip()}


def _petsc_versions() -> dict[str, str]:
    from petsc4py import PETSc

    found = {"petsc": ".".join(str(number) for number in PETSc.Sys.getVersion())}
    if PETSc.Sys.hasExternalPackage("mumps"):
        found["mumps"] = _mumps_version()
    return found


def _mumps_version() -> str:
    """Return the version in the file name of the MUMPS library this process has loaded (Linux)."""
    with suppress(OSError):
        mapped = Path("/proc/self/maps").read_text(encoding="utf-8", errors="replace")
        named = re.search(r"libdmumps[-.](?:so\.)?(\d+\.\d+)", mapped)
        if named:
            return named[1]
    return "unknown"
