"""Judge the states of a folder on every rank; rank 0 prints what it finds as JSON.

Arguments: the folder with one .npz file per state (field, law, dimensions, values).
"""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any

from lattice import environment

environment.prepare()

import numpy as np
from mpi4py import MPI

from lattice.classify.canonical import canonical, compare, primitive
from lattice.classify.distributed import DistributedState, make_state
from lattice.classify.kind import classify
from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.solve.petsc import start_petsc

COMM = MPI.COMM_WORLD


def loaded(path: Path) -> DistributedState:
    """Read a state of a test."""
    with np.load(path, allow_pickle=False) as file:
        law, field = load_law(str(file["law"])), file["field"]
        values = {**law.defaults, **json.loads(str(file["values"]))}
    return make_state(law, Lattice(*field.shape[:3], law.dimensions), values, field, COMM)


def gathered(state: DistributedState) -> Any:
    whole = np.empty((*state.lattice.shape, state.blocks.components))
    for block, part in COMM.allgather((state.blocks.block, state.owned)):
        whole[block.slices] = part
    return whole


def judged(state: DistributedState) -> dict[str, Any]:
    found = classify(state.law, state.lattice, state.values, state.owned, state.blocks, COMM)
    small, still = primitive(state), canonical(state)
    result = {
        **found.record(),
        "primitive": [*small.lattice.shape, small.values["period"], small.values["length_x"]],
        "origin": gathered(still)[0, 0, 0].tolist(),
    }
    small.destroy()
    still.destroy()
    return result


def main() -> None:
    """Judge every state, and compare it with its image where there is one."""
    start_petsc([])
    folder = Path(sys.argv[1])
    found = {}
    for path in sorted(folder.glob("*.npz")):
        if path.stem.endswith("-image"):
            continue
        state = loaded(path)
        found[path.stem] = judged(state)
        image = folder / f"{path.stem}-image.npz"
        if image.exists():
            other = loaded(image)
            one, moved = canonical(state), canonical(other)
            apart = compare(state, other)
            found[path.stem] |= {
                "distance": apart.distance,
                "scalars": apart.scalars,
                "canonical": float(np.abs(gathered(one) - gathered(moved)).max()),
                "drifts": [one.values.get("drift_x", 0.0), moved.values.get("drift_x", 0.0)],
            }
            for item in (other, one, moved):
                item.destroy()
        state.destroy()
    if COMM.rank == 0:
        print(json.dumps(found))


main()
