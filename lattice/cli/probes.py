"""Short programs that try one library each, run in processes of their own: a crash is an answer too."""

from __future__ import annotations

import json
import subprocess
import sys
import textwrap
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

MARK = "lattice-probe "
"""Begins the line of JSON that a probe answers with; libraries may print other lines."""


@dataclass(frozen=True)
class Answer:
    """What a probe found, or in `error` why it found nothing."""

    values: dict[str, Any] = field(default_factory=dict)
    error: str = ""


PROBES = {
    "packages": """
        from importlib import import_module
        from importlib.metadata import version
        answer = {}
        for name in ("numpy", "scipy", "sympy", "pydantic", "matplotlib", "tomli_w"):
            try:
                import_module(name)
                answer[name] = version(name)
            except Exception:
                answer[name] = None
        """,
    "mpi": """
        import mpi4py
        from mpi4py import MPI
        library = MPI.Get_library_version().partition(",")[0].partition("\\n")[0].strip()
        answer = {"version": mpi4py.__version__, "library": library}
        """,
    "petsc": """
        import petsc4py
        petsc4py.init([])
        from petsc4py import PETSc
        import numpy
        numbers = PETSc.Sys.getVersion()
        matrix = PETSc.Mat().createAIJ([2, 2], nnz=1, comm=PETSc.COMM_SELF)
        matrix.setValue(0, 0, 1.0)
        matrix.setValue(1, 1, 1.0)
        matrix.assemble()
        solvers = []
        for name in ("mumps", "superlu_dist"):
            solver = PETSc.KSP().create(PETSc.COMM_SELF)
            solver.setOperators(matrix)
            solver.setType("preonly")
            solver.getPC().setType("lu")
            solver.getPC().setFactorSolverType(name)
            try:
                solver.setUp()
                solvers.append(name)
            except PETSc.Error:
                pass
        answer = {
            "version": ".".join(map(str, numbers)),
            "version_numbers": list(numbers),
            "scalar": "complex" if numpy.issubdtype(PETSc.ScalarType, numpy.complexfloating) else "real",
            "index_bits": 8 * numpy.dtype(PETSc.IntType).itemsize,
            "solvers": solvers,
        }
        """,
    "slepc": """
        import slepc4py
        slepc4py.init([])
        from slepc4py import SLEPc
        answer = {"version": ".".join(map(str, SLEPc.Sys.getVersion()))}
        """,
    "hdf5": """
        import os
        os.environ["H5PY_ALWAYS_USE_MPI"] = "1"
        import h5py
        answer = {
            "version": h5py.version.version,
            "hdf5": h5py.version.hdf5_version,
            "mpi": bool(h5py.get_config().mpi),
        }
        """,
    "fft": """
        import mpi4py_fft
        answer = {"version": mpi4py_fft.__version__}
        """,
    "numba": """
        import importlib.util, os, pathlib, tempfile, time
        with tempfile.TemporaryDirectory() as folder:
            os.environ["NUMBA_CACHE_DIR"] = folder
            path = pathlib.Path(folder, "lattice_probe.py")
            path.write_text("import numba\\n@numba.njit(cache=True)\\ndef twice(x):\\n    return 2.0 * x\\n")
            spec = importlib.util.spec_from_file_location("lattice_probe", path)
            module = importlib.util.module_from_spec(spec)
            start = time.perf_counter()
            spec.loader.exec_module(module)
            assert module.twice(1.5) == 3.0
            seconds = time.perf_counter() - start
            if not any(pathlib.Path(folder).rglob("*.nbi")):
                raise RuntimeError("compiled code is not stored")
        import numba
        answer = {"version": numba.__version__, "seconds": seconds}
        """,
}
"""Each sets `answer`, what is known about the library, or raises."""

HELLO = f"""
import json
from mpi4py import MPI
ranks = MPI.COMM_WORLD.allreduce(1)
if MPI.COMM_WORLD.Get_rank() == 0:
    print({MARK!r} + json.dumps({{"ranks": ranks}}), flush=True)
"""

_FRAME = """
import json, sys
from lattice import environment
environment.prepare()
try:
{body}
except Exception as error:
    print({mark!r} + json.dumps({{"error": f"{{type(error).__name__}}: {{error}}"}}))
else:
    print({mark!r} + json.dumps({{"values": answer}}))
"""


def run_probe(name: str, timeout: float = 60.0) -> Answer:
    """Run one probe and return its answer."""
    body = textwrap.indent(textwrap.dedent(PROBES[name]).strip(), "    ")
    return run_command([sys.executable, "-c", _FRAME.format(body=body, mark=MARK)], timeout)


def run_command(command: Sequence[str], timeout: float) -> Answer:
    """Run a program that answers with a marked line of JSON."""
    try:
        done = subprocess.run(
            list(command),
            capture_output=True,
            text=True,
            timeout=timeout,
            check=False,
            stdin=subprocess.DEVNULL,
        )
    except subprocess.TimeoutExpired:
        return Answer(error=f"no answer within {timeout:g} s")
    except OSError as error:
        return Answer(error=str(error))
    return read_answer(done.stdout, done.stderr, done.returncode)


def read_answer(output: str, errors: str, code: int) -> Answer:
    """Return the answer in a probe's output, or the end of what it complained about."""
    lines = [line.removeprefix(MARK) for line in output.splitlines() if line.startswith(MARK)]
    if not lines:
        said = errors.strip().splitlines() or output.strip().splitlines()
        return Answer(error=f"ended with code {code}" + (f": {said[-1]}" if said else ""))
    content = json.loads(lines[-1])
    if "error" in content:
        return Answer(error=" ".join(content["error"].split()))
    return Answer(values=content.get("values", content))
