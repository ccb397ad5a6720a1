"""A Numba compiler for functions whose array arguments share no memory that is written.

LLVM then vectorises their loops without comparing addresses first. Imported by generated modules only.
"""

from __future__ import annotations

from typing import Any

from numba.core.compiler import Compiler


class DistinctArrays(Compiler):  # type: ignore[misc]
    """Numba's compiler, promising LLVM that no array argument overlaps one that is written."""

    def define_pipelines(self) -> Any:
        """Return Numba's own passes."""
        self.state.flags.noalias = True
        return super().define_pipelines()
