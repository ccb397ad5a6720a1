"""A process of its own, on one rank or several, that measures or analyses and answers with JSON.

    python -m lattice.cli.sizing_probe TASK [FILE]

Started by `lattice.sizing.asking`; a failure of PETSc or MPI there is a message here.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice import environment

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.job.schema import Job


def main() -> int:
    """Do the task named on the command line."""
    environment.prepare()
    from mpi4py import MPI

    from lattice.sizing.asking import MARK
    from lattice.solve.petsc import start_petsc

    start_petsc([])
    comm = MPI.COMM_WORLD
    content = TASKS[sys.argv[1]](comm, *sys.argv[2:])
    if comm.Get_rank() == 0:
        sys.stdout.write(MARK + json.dumps(content) + "\n")
        sys.stdout.flush()
    return 0


def _measure(comm: MPI.Intracomm) -> dict[str, Any]:
    from lattice.sizing.measure import measure, measure_march

    samples = [asdict(sample) for sample in measure(comm)]
    march = [asdict(sample) for sample in measure_march()] if comm.Get_size() == 1 else []
    return {"samples": samples, "march": march}


def _read(path: str) -> tuple[Job, dict[str, Any]]:
    from lattice.job.schema import Job

    content = json.loads(Path(path).read_text(encoding="utf-8"))
    return Job.model_validate_json(content.pop("job")), content


def _analysis(comm: MPI.Intracomm, path: str) -> dict[str, Any]:
    """Analyse the LU of each lattice asked for."""
    from lattice.geometry.lattice import Lattice
    from lattice.job.subspace import subspace_of
    from lattice.sizing.analysis import analyse

    job, asked = _read(path)
    law, values = job.make_law(), job.make_values()
    subspace = subspace_of(job, law)
    fine = job.make_lattice()
    found = []
    for numbers, folded in asked["matrices"]:
        lattice = Lattice(**numbers)
        # The spacings count, not the box: a slab or a coarse lattice is cut from the same one.
        levels = lattice.nt / fine.nt if lattice.ny == fine.ny and lattice.nx == fine.nx else 1.0
        box = {**values, "period": values.get("period", 1.0) * levels}
        free = job.solve.free or ()
        found.append(analyse(law, lattice, box, free, comm, subspace if folded else None).record())
    return {"factors": found}


def _coarse(comm: MPI.Intracomm, path: str) -> dict[str, Any]:
    """Choose the coarse lattice of a small box like the job's."""
    from lattice.sizing.coarse_guess import choose_in_small

    job, _ = _read(path)
    return choose_in_small(job, comm)


TASKS: dict[str, Callable[..., dict[str, Any]]] = {
    "measure": _measure,
    "analysis": _analysis,
    "coarse": _coarse,
}

if __name__ == "__main__":
    sys.exit(main())
