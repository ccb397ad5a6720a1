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
class RecurrenceOptions(MarchOptions):
    """A near recurrence of a march.

    Parameters
    ----------
    march_time : float
        Time marched after the spin-up.
    every : float, optional
        Time between the slices compared; a fiftieth of the period's guess unless given.
    shortest, longest : float, optional
        Periods looked for; 0.5 and 1.5 times the period's guess unless given.
    pick : int
        Which recurrence, by rank; 1 is the closest.
    near_time : float, optional
        Take the recurrence that begins nearest to this time after the spin-up, instead of by rank.
    reflections : bool
        Whether the law's reflections count as well: a flow that returns reflected returns after twice the
        time.
    """

    march_time: float = 1000.0
    every: float | None = None
    shortest: float | None = None
    longest: float | None = None
    pick: int = 1
    near_time: float | None = None
    reflections: bool = True


@dataclass(frozen=True)
class NoiseOptions:
    """Smooth noise in space and time.

    Parameters
    ----------
    seed : int
        Seed of the noise.
    amplitude : float
        Root mean square of every evolving component.
    mean : mapping of str to float
        Value of each component the noise is added to, 0 where absent.
    wavenumber : float, optional
        About which the spectrum lies; the one that the law amplifies most unless given.
    width : float, optional
        Standard deviation of wavenumbers; 0.3 times `wavenumber` unless given.
    frequency : float, optional
        Standard deviation of angular frequencies; twice the fastest growth rate unless given.
    """

    seed: int = 0
    amplitude: float = 1.0
    mean: Mapping[str, float] = field(default_factory=dict)
    wavenumber: float | None = None
    width: float | None = None
    frequency: float | None = None


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
class ExcerptOptions:
    """A window of a stored state, or of an array of the user's.

    Parameters
    ----------
    file : str
        Path of the state file, .npy file or HDF5 file.
    dataset : str, optional
        The dataset of an HDF5 file that is no state file ("u" unless given).
    t, x, y : (float, float), optional
        Where the window begins and ends, in the file's coordinates; the whole axis unless given.
    blend, blend_space : float
        Fraction of the window that is mixed with its continuation, in time and in space, from 0 to below 1.
    covers_t, covers_x, covers_y : float, optional
        For an array: the box it covers, node distance times nodes.
    periodic : sequence of str
        For an array: axes along which it repeats.
    """

    file: str
    dataset: str | None = None
    t: Sequence[float] | None = None
    x: Sequence[float] | None = None
    y: Sequence[float] | None = None
    blend: float = 0.3
    blend_space: float = 0.5
    covers_t: float | None = None
    covers_x: float | None = None
    covers_y: float | None = None
    periodic: Sequence[str] = ()


@dataclass(frozen=True)
class MemberOptions:
    """A stored state as a mosaic uses it.

    Parameters
    ----------
    file : str
        Path of the state file.
    repeat_t, repeat_x, repeat_y : int
        How often the state is repeated in its cell.
    shift_t, shift_x, shift_y : float
        How much later, or further on, its field is taken.
    reflect : str, optional
        "x", "y", "xy" or "sign": a reflection, where the law allows it, before the shift.
    period, length_x, length_y : float, optional
        Its size, repeats included; that of the file unless given.
    """

    file: str
    repeat_t: int = 1
    repeat_x: int = 1
    repeat_y: int = 1
    shift_t: float = 0.0
    shift_x: float = 0.0
    shift_y: float = 0.0
    reflect: str | None = None
    period: float | None = None
    length_x: float | None = None
    length_y: float | None = None


@dataclass(frozen=True)
class MosaicOptions:
    """Stored states arranged in time and space.

    Parameters
    ----------
    rows : sequence of str
        Names of members, the earliest row first; lines along y parted by slashes.
    members : mapping of str to MemberOptions
    blend : float
        Width of the zone that neighbours share, as a fraction of the shorter one, from 0 to below 1.
    """

    rows: Sequence[str]
    members: Mapping[str, MemberOptions]
    blend: float = 0.5


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
