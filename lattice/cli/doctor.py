"""`lattice doctor`: tell what this machine is missing, and how to get it."""

from __future__ import annotations

import argparse
import os
import shutil
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

from lattice import environment
from lattice.cli.probes import PROBES, Answer, run_probe

OK, WARN, MISSING = "ok", "warn", "missing"
DISK_WANTED_GB = 1.0

EPILOG = """\
Each line is ok, warn (works, with a remark) or missing (must be put right). Exit code 0 when nothing
is missing, 1 otherwise.
"""


@dataclass(frozen=True)
class Finding:
    """One line of the report.

    Parameters
    ----------
    status : str
        "ok", "warn" or "missing".
    subject, text : str
        What was looked at, and what was found.
    remedy : str
        How to get it, where it is not ok.
    """

    status: str
    subject: str
    text: str
    remedy: str = ""

    def line(self) -> str:
        """Return the finding as it is printed."""
        first = f"{self.status:<8}{self.subject:<12}{self.text}"
        return f"{first}\n{'':20}-> {self.remedy}" if self.remedy else first


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("--launcher", metavar="COMMAND", help="the MPI launcher to try, as for solve")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code: 0 where nothing is missing, else 1."""
    missing = 0
    for finding in examine(options.launcher):
        print(finding.line(), flush=True)
        missing += finding.status == MISSING
    print("all that a solve needs is here" if not missing else f"{missing} thing(s) missing")
    return 1 if missing else 0


def examine(launcher: str | None = None) -> Iterator[Finding]:
    """Yield the findings one by one, cheap ones first; libraries are tried in processes of their own."""
    yield _python()
    for name in PROBES:
        yield from _JUDGES[name](run_probe(name))
    yield from _parallel(launcher)
    yield _threads()
    yield from _disk()


def _python() -> Finding:
    version = ".".join(map(str, sys.version_info[:3]))
    return Finding(OK, "Python", f"{version} at {sys.executable}")


def _packages(answer: Answer) -> Iterator[Finding]:
    if answer.error:
        yield Finding(MISSING, "packages", answer.error, "pip install .")
        return
    absent = [name for name, version in answer.values.items() if version is None]
    found = ", ".join(f"{name} {version}" for name, version in answer.values.items() if version is not None)
    if absent:
        text = f"not importable: {', '.join(absent)}; found {found}"
        yield Finding(MISSING, "packages", text, "pip install .")
    else:
        yield Finding(OK, "packages", found)


def _petsc(answer: Answer) -> Iterator[Finding]:
    if answer.error:
        yield Finding(MISSING, "PETSc", answer.error, _petsc_remedy("petsc4py", "PETSC_DIR"))
        return
    values = answer.values
    scalar, index = values["scalar"], values["index_bits"]
    text = f"{values['version']}, {scalar} scalars, {index}-bit indices"
    if scalar != "real":
        yield Finding(MISSING, "PETSc", text, "a build with real scalars (Debian: python3-petsc4py-real)")
    elif values["version_numbers"] < [3, 18]:
        yield Finding(MISSING, "PETSc", text, "PETSc 3.18 or newer")
    else:
        yield Finding(OK, "PETSc", text)
    yield _sparse_lu(values["solvers"])


def _sparse_lu(solvers: list[str]) -> Finding:
    names = {"mumps": "MUMPS", "superlu_dist": "SuperLU_DIST"}
    found = [names[solver] for solver in names if solver in solvers]
    if "mumps" in solvers:
        return Finding(OK, "sparse LU", ", ".join(found))
    remedy = "for large boxes a PETSc configured with --download-mumps --download-scalapack"
    if found:
        return Finding(WARN, "sparse LU", f"{found[0]}, without MUMPS", remedy)
    return Finding(WARN, "sparse LU", "PETSc's own only: one rank factorises the whole matrix", remedy)


def _slepc(answer: Answer) -> Iterator[Finding]:
    if answer.error:
        yield Finding(WARN, "SLEPc", answer.error, _petsc_remedy("slepc4py", "SLEPC_DIR"))
    else:
        yield Finding(OK, "SLEPc", answer.values["version"])


def _petsc_remedy(package: str, variable: str) -> str:
    library = {"petsc4py": "PETSc", "slepc4py": "SLEPc"}[package]
    set_to = os.environ.get(variable)
    if set_to and not Path(set_to).is_dir():
        return f"{variable} = {set_to} is no folder: correct it or unset it"
    return (
        f"Debian: apt install python3-{package}-real; on a cluster load the site's {library} module and"
        f" `pip install {package}==<its version>`, or set {variable} to a build that holds {package}"
    )


def _mpi(answer: Answer) -> Iterator[Finding]:
    if answer.error:
        remedy = "Debian: apt install python3-mpi4py; on a cluster load the MPI module and pip install mpi4py"
        yield Finding(MISSING, "MPI", answer.error, remedy)
    else:
        yield Finding(OK, "MPI", f"{answer.values['library']}, mpi4py {answer.values['version']}")


def _hdf5(answer: Answer) -> Iterator[Finding]:
    remedy = "Debian: apt install python3-h5py-mpi; on a cluster build h5py with HDF5_MPI=ON"
    if answer.error:
        yield Finding(MISSING, "HDF5", answer.error, remedy)
    elif answer.values["mpi"]:
        yield Finding(OK, "HDF5", f"h5py {answer.values['version']}, HDF5 {answer.values['hdf5']}, parallel")
    else:
        text = f"h5py {answer.values['version']} without MPI: states are written through one rank"
        yield Finding(WARN, "HDF5", text, remedy)


def _fft(answer: Answer) -> Iterator[Finding]:
    if answer.error:
        remedy = "Debian: apt install python3-mpi4py-fft; elsewhere pip install mpi4py-fft"
        yield Finding(WARN, "FFT", answer.error, remedy)
    else:
        yield Finding(OK, "FFT", f"mpi4py-fft {answer.values['version']}")


def _numba(answer: Answer) -> Iterator[Finding]:
    if answer.error:
        remedy = "pip install numba; without it the loops run in NumPy, several times slower"
        yield Finding(WARN, "Numba", answer.error, remedy)
    else:
        values = answer.values
        yield Finding(
            OK, "Numba", f"{values['version']}, compiled and stored a loop in {values['seconds']:.1f} s"
        )


_JUDGES: dict[str, Callable[[Answer], Iterator[Finding]]] = {
    "packages": _packages,
    "mpi": _mpi,
    "petsc": _petsc,
    "slepc": _slepc,
    "hdf5": _hdf5,
    "fft": _fft,
    "numba": _numba,
}


def _parallel(given: str | None) -> Iterator[Finding]:
    """Start two ranks and look whether they see each other."""
    from lattice.cli.launch import find_launcher, launch_command
    from lattice.cli.probes import HELLO, run_command
    from lattice.errors import InputError

    if environment.find_launch() is not None:
        yield Finding(WARN, "launcher", "not tried: this process was itself started in parallel")
        return
    try:
        launcher = find_launcher(given)
    except InputError as error:
        yield Finding(MISSING, "launcher", error.message)
        return
    command = launch_command(launcher, 2, [sys.executable, "-c", HELLO])
    answer = run_command(command, timeout=60.0)
    if answer.error:
        remedy = "only where MPI runs are allowed: on many clusters not on the login node"
        yield Finding(MISSING, "launcher", f"{launcher.version}: {answer.error}", remedy)
    elif answer.values["ranks"] != 2:
        remedy = "use the launcher that belongs to the MPI library of mpi4py"
        yield Finding(MISSING, "launcher", f"{launcher.version} starts ranks apart from each other", remedy)
    else:
        yield Finding(OK, "launcher", f"{launcher.version}, ran 2 ranks")


def _threads() -> Finding:
    counts = {name: os.environ.get(name, "") for name in environment.THREAD_COUNTS}
    many = [f"{name}={count}" for name, count in counts.items() if count != "1"]
    if many:
        remedy = "one thread per rank is right unless ranks are fewer than cores: set them to 1"
        return Finding(WARN, "threads", ", ".join(many), remedy)
    return Finding(OK, "threads", "one per rank")


def _disk() -> Iterator[Finding]:
    yield _space("folder", Path.cwd(), "run where there is room, or give --out")
    cache = Path(os.environ.get("NUMBA_CACHE_DIR", str(environment.cache_folder(os.environ))))
    yield _space("kernels", cache, "set NUMBA_CACHE_DIR to a folder of your own")


def _space(subject: str, folder: Path, remedy: str) -> Finding:
    existing = folder
    while not existing.exists():
        existing = existing.parent
    free = shutil.disk_usage(existing).free / 1e9
    text = f"{folder}, {free:.1f} GB free"
    if not os.access(existing, os.W_OK):
        return Finding(MISSING, subject, f"{folder} cannot be written to", remedy)
    if free < DISK_WANTED_GB:
        return Finding(WARN, subject, text, remedy)
    return Finding(OK, subject, text)
