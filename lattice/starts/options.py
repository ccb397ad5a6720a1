"""What the starts read from a job's `start` section.

The job's own models have the same attributes and are passed as they are; these serve Python callers.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

Report = Callable[[str], None]
"""Takes one progress line; called on rank 0 only."""


def silent(text: str) -> None:
    """Report nothing."""


@dataclass(frozen=True)
class MarchOptions:
    """A march from noise.

    Parameters
    ----------
    seed : int
        Seed of the noise.
    amplitude : float
        Root mean square of the noise.
    mean : mapping of str to float
        Value of each component the noise is added to, 0 where absent.
    spin_up : float
        Time marched before the window begins.
    dt : float, optional
        Time step; chosen from the flow unless given.
    blend : float
        Fraction of the period over which the window is mixed with its continuation, `0 <= blend < 1`.
    shape : sequence of int, optional
        Nodes of the marcher, (nx,) or (ny, nx); those of the lattice unless given.
    match_drift : sequence of str
        Axes ("x", "y") along which the drift is chosen so that the end of the window fits its start; for
        `nt = 1` so that the slice moves most nearly as a whole.
    match_rotation : bool
        Whether the rotation is chosen so, too.
    """

    seed: int = 0
    amplitude: float = 0.1
    mean: Mapping[str, float] = field(default_factory=dict)
    spin_up: float = 100.0
    dt: float | None = None
    blend: float = 0.3
    shape: Sequence[int] | None = None
    match_drift: Sequence[str] | None = ()
    match_rotation: bool | None = False


@dataclass(frozen=True)
class WindowOptions(MarchOptions):
    """A march of a box that may be larger than the job's, of which a window is cut.

    Parameters
    ----------
    march_length_x, march_length_y : float, optional
        Lengths of the marched box; those of the job's box unless given.
    blend_space : float
        Fraction of a cut axis over which the window is mixed with its continuation, `0 <= blend_space < 1`.
    """

    march_length_x: float | None = None
    march_length_y: float | None = None
    blend_space: float = 0.3


@dataclass(frozen=True)
class StateOptions:
    """A stored state: the path of its file."""

    file: str


@dataclass(frozen=True)
class ArrayOptions:
    """An array of the user's: the path of its file, and for HDF5 the dataset ("u" unless given)."""

    file: str
    dataset: str | None = None


@dataclass(frozen=True)
class WaveOptions:
    """One cosine, `amplitude * cos(2*pi*(kx*x/Lx + ky*y/Ly - kt*t/T) + phase)`, of a component.

    The component may be None where the law has one only.
    """

    component: str | None = None
    amplitude: float = 1.0
    kt: int = 0
    kx: int = 0
    ky: int = 0
    phase: float = 0.0


@dataclass(frozen=True)
class WavesOptions:
    """A sum of cosines, and the value of each component it is added to (0 where absent)."""

    modes: Sequence[WaveOptions]
    mean: Mapping[str, float] = field(default_factory=dict)
