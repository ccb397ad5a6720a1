"""Campaigns: many starts from one file, run, resumed, compared and counted."""

from __future__ import annotations

from importlib import import_module
from typing import Any

_PLACES = {
    "Campaign": "lattice.campaign.reader",
    "Member": "lattice.campaign.reader",
    "read_campaign": "lattice.campaign.reader",
    "run_campaign": "lattice.campaign.run",
}

__all__ = ["Campaign", "Member", "read_campaign", "run_campaign"]


def __getattr__(name: str) -> Any:
    if name not in _PLACES:
        raise AttributeError(f"module 'lattice.campaign' has no attribute {name!r}")
    return getattr(import_module(_PLACES[name]), name)
