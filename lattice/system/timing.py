"""The phases of `lattice.geometry.timing`, where this layer and those above look for them."""

from __future__ import annotations

from lattice.geometry.timing import event

__all__ = ["event"]
