"""Starts: the fields a solve may begin from.

A start is a function of one module here and one line of `STARTS`; modules are imported when first used.
"""

from __future__ import annotations

from collections.abc import Callable
from importlib import import_module
from typing import Any

KINDS = ("march", "window", "recurrence", "noise", "state", "excerpt", "mosaic", "waves", "array")

Start = Callable[..., Any]
"""`start(job_start, lattice, values, law, block, comm, report=silent) -> (owned, values)`, collective."""


def _lazy(name: str) -> Start:
    def start(*arguments: Any, **options: Any) -> Any:
        return getattr(import_module(f"{__name__}.{name}"), name)(*arguments, **options)

    start.__name__ = name
    return start


STARTS: dict[str, Start] = {name: _lazy(name) for name in KINDS}
"""Every start by its `start.kind` in a job file."""
