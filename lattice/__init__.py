"""Space-time periodic states of partial differential equations, solved on the whole lattice at once.

Names are imported when first used, so that `import lattice` neither starts MPI nor loads NumPy.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_PLACES = {
    "InputError": "lattice.errors",
    "Lattice": "lattice.geometry.lattice",
    "LatticeError": "lattice.errors",
    "Stepper": "lattice.starts.stepper",
    "System": "lattice.system.system",
    "check_state": "lattice.check.run",
    "excerpt_state": "lattice.starts.compose",
    "find_recurrences": "lattice.starts.recurrence",
    "job_to_toml": "lattice.job.writer",
    "law_names": "lattice.laws.catalogue",
    "load_job": "lattice.job.reader",
    "load_law": "lattice.laws.catalogue",
    "mosaic_states": "lattice.starts.compose",
    "open_state": "lattice.store.statefile",
    "plot_state": "lattice.show.pictures",
    "prepare": "lattice.environment",
    "read_campaign": "lattice.campaign",
    "read_law": "lattice.laws.catalogue",
    "run_campaign": "lattice.campaign",
    "run_job": "lattice.solve.run",
}

__all__ = [
    "InputError",
    "Lattice",
    "LatticeError",
    "Stepper",
    "System",
    "check_state",
    "excerpt_state",
    "find_recurrences",
    "job_to_toml",
    "law_names",
    "load_job",
    "load_law",
    "mosaic_states",
    "open_state",
    "plot_state",
    "prepare",
    "read_campaign",
    "read_law",
    "run_campaign",
    "run_job",
]


def __getattr__(name: str) -> Any:
    if name not in _PLACES:
        raise AttributeError(f"module 'lattice' has no attribute {name!r}")
    return getattr(import_module(_PLACES[name]), name)


def __dir__() -> list[str]:
    return __all__
