"""What one damped step leaves to the next, and a checkpoint keeps."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from typing import Any

LONGEST = 200
SPECTRAL_FROM = 1e-3
"""Damping, as a share of the size of J^T J, from which on the spectral preconditioner serves."""


@dataclass(frozen=True)
class Memory:
    """The state of the damped stage between two steps.

    Parameters
    ----------
    step : int
        Steps kept so far.
    damping : float
        mu of the next step; 0 where there was none yet.
    spectral_from : float
        mu from which on the spectral preconditioner serves; 0 where it is not known yet.
    residuals : tuple of float
        Root mean square residuals of the last steps, the latest last.
    refused : bool
        No damping gave a step.
    """

    step: int = 0
    damping: float = 0.0
    spectral_from: float = 0.0
    residuals: tuple[float, ...] = ()
    refused: bool = False

    def begun(self, residual_rms: float) -> Memory:
        """Return the memory at the start, or on a new lattice, with the residual there."""
        return replace(self, residuals=(residual_rms,))

    def on_new_lattice(self) -> Memory:
        """Return the memory without residuals: those of another lattice cannot be compared."""
        return replace(self, residuals=())

    def scaled(self, scale: float) -> Memory:
        """Return the memory with what is still unknown set by the size of J^T J."""
        return replace(
            self,
            damping=self.damping or scale,
            spectral_from=self.spectral_from or SPECTRAL_FROM * scale,
        )

    def after(self, residual_rms: float, damping: float) -> Memory:
        """Return the memory after a kept step."""
        kept = (*self.residuals, residual_rms)[-LONGEST:]
        return replace(self, step=self.step + 1, damping=damping, residuals=kept)

    def with_damping(self, damping: float, refused: bool = False) -> Memory:
        """Return the memory after steps that were not kept."""
        return replace(self, damping=damping, refused=refused)

    def is_flat(self, steps: int, fall: float) -> bool:
        """Tell whether the residual fell by less than a share over the last steps.

        Examples
        --------
        >>> Memory(residuals=(1.0, 0.95, 0.92)).is_flat(2, 0.1), Memory(residuals=(1.0, 0.95)).is_flat(2, 0.1)
        (True, False)
        """
        if len(self.residuals) <= steps:
            return False
        return self.residuals[-1] > (1.0 - fall) * self.residuals[-1 - steps]

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return asdict(self)

    @classmethod
    def of_record(cls, record: Mapping[str, Any]) -> Memory:
        """Return the memory that `record` wrote, also after JSON."""
        return cls(**{**record, "residuals": tuple(record["residuals"])})
