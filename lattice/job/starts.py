"""The start section of a job file, one model for each kind of start."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from lattice.job.section import Count, Name, Positive, Section
from lattice.job.section import key as _key


class MarchKeys(Section):
    """A march of the law in time, from noise."""

    kind: str
    seed: int = _key("seed of the noise", 0, ge=0)
    amplitude: Positive = _key("root mean square of the noise", 0.1)
    mean: dict[str, float] = _key(
        "value of each component the noise is added to", {}, shown="`solve.mean`, else 0"
    )
    spin_up: float = _key("time marched before the window is cut", 100.0, ge=0)
    dt: Positive | None = _key("time step of the march", None, shown="chosen from the law and lattice")
    blend: float = _key(
        "fraction of the period over which the window's end is blended into its start", 0.3, ge=0, lt=1
    )
    match_drift: tuple[Literal["x", "y"], ...] | None = _key(
        "axes along which the drift is chosen so that the window's end fits its start",
        None,
        shown="axes whose drift is free and not given in [box]",
    )
    match_rotation: bool | None = _key(
        "choose the rotation, too, so that the window's end fits its start",
        None,
        shown="true where the rotation is free and not given in [box]",
    )
    shape: tuple[Count, ...] | None = _key(
        "nodes of the marcher, `[nx]` or `[ny, nx]`",
        None,
        shown="from the lattice",
        min_length=1,
        max_length=2,
    )


class MarchStart(MarchKeys):
    """Start from a march of the law in time, from noise."""

    kind: Literal["march"]


class WindowStart(MarchKeys):
    """Start from a window of a march of a box that may be larger: cut in time and in space."""

    kind: Literal["window"]
    march_length_x: Positive | None = _key(
        "length in x of the marched box, at least `1 + blend_space` times `box.length_x`",
        None,
        shown="`box.length_x`",
    )
    march_length_y: Positive | None = _key("the same in y", None, shown="`box.length_y`")
    blend_space: float = _key(
        "fraction of a length that is cut over which the window is blended into what follows it",
        0.3,
        ge=0,
        lt=1,
    )


class RecurrenceStart(MarchKeys):
    """Start from a near recurrence of a march, up to shifts and reflections; it gives period and drift."""

    kind: Literal["recurrence"]
    march_time: Positive = _key("time marched after the spin-up, and scanned", 1000.0)
    pick: Count = _key("which recurrence, by rank: 1 is the closest (`lattice recurrences` lists them)", 1)
    near_time: float | None = _key(
        "take the recurrence that begins nearest to this time after the spin-up, instead of by rank",
        None,
        shown="none",
        ge=0,
    )
    shortest: Positive | None = _key("shortest period looked for", None, shown="half of `box.period`")
    longest: Positive | None = _key("longest period looked for", None, shown="1.5 times `box.period`")
    every: Positive | None = _key(
        "time between the slices compared", None, shown="a fiftieth of `box.period`"
    )
    reflections: bool = _key(
        "also look where the flow returns reflected, which makes the period twice as long", True
    )


class NoiseStart(Section):
    """Start from smooth noise in space and time, about the waves the law amplifies most."""

    kind: Literal["noise"]
    seed: int = _key("seed of the noise", 0, ge=0)
    amplitude: Positive = _key("root mean square of the noise", 1.0)
    mean: dict[str, float] = _key(
        "value of each component the noise is added to", {}, shown="`solve.mean`, else 0"
    )
    wavenumber: Positive | None = _key(
        "wavenumber about which the spectrum lies", None, shown="the one that grows fastest"
    )
    width: Positive | None = _key(
        "standard deviation of the wavenumbers", None, shown="0.3 times `wavenumber`"
    )
    frequency: Positive | None = _key(
        "standard deviation of the angular frequencies", None, shown="twice the fastest growth rate"
    )


class StateStart(Section):
    """Start from a stored state; values the job's box leaves out come from it too."""

    kind: Literal["state"]
    file: Name = _key("the state file, relative to the job file or the current folder")


class Wave(Section):
    """One cosine, `amplitude * cos(2*pi*(kx*x/Lx + ky*y/Ly - kt*t/T) + phase)`."""

    component: Name | None = _key("the component", None, shown="the law's only one")
    amplitude: float = _key("its amplitude")
    kt: int = _key("periods in time", 0)
    kx: int = _key("wavelengths in x", 0)
    ky: int = _key("wavelengths in y", 0)
    phase: float = _key("phase in radians", 0.0)


class WavesStart(Section):
    """Start from a sum of cosines."""

    kind: Literal["waves"]
    modes: tuple[Wave, ...] = _key("the waves, one table each", min_length=1)
    mean: dict[str, float] = _key(
        "value of each component the waves are added to", {}, shown="`solve.mean`, else 0"
    )


class ArrayStart(Section):
    """Start from an array of the user's, shape (nt, ny, nx, components)."""

    kind: Literal["array"]
    file: Name = _key("a NumPy or HDF5 file, relative to the job file or the current folder")
    dataset: Name | None = _key("name of the dataset in an HDF5 file", None, shown="`u`")


Ends = Annotated[tuple[float, ...], Field(min_length=2, max_length=2)]


class ExcerptStart(Section):
    """Start from a window of a stored state or of an array, made periodic; it gives period and lengths."""

    kind: Literal["excerpt"]
    file: Name = _key("a state file, or a NumPy or HDF5 file, found like that of a state")
    t: Ends | None = _key("`[from, to]` in the file's time", None, shown="the whole period")
    x: Ends | None = _key("`[from, to]` in the file's x", None, shown="the whole length")
    y: Ends | None = _key("`[from, to]` in the file's y", None, shown="the whole length")
    blend: float = _key("fraction of the window's time that is blended with what follows it", 0.3, ge=0, lt=1)
    blend_space: float = _key("the same in x and y", 0.5, ge=0, lt=1)
    dataset: Name | None = _key("name of the dataset in an HDF5 file of your own", None, shown="`u`")
    covers_t: Positive | None = _key(
        "for an array: the distance between its levels times their number", None, shown="none"
    )
    covers_x: Positive | None = _key("the same in x", None, shown="none")
    covers_y: Positive | None = _key("the same in y", None, shown="none")
    periodic: tuple[Literal["t", "x", "y"], ...] = _key("for an array: axes along which it repeats", ())


class MemberTable(Section):
    """A stored state as a mosaic uses it: `[start.members]` has one table for each name."""

    file: Name = _key("the state file, found like that of a state")
    repeat_t: Count = _key("how often it is repeated in its cell, in time", 1)
    repeat_x: Count = _key("the same in x", 1)
    repeat_y: Count = _key("the same in y", 1)
    shift_t: float = _key("how much later in the file its field is taken", 0.0)
    shift_x: float = _key("how much further on in x its field is taken", 0.0)
    shift_y: float = _key("the same in y", 0.0)
    reflect: Literal["x", "y", "xy", "sign"] | None = _key(
        "reflect it along these axes, or change its sign, where that is a symmetry of the law",
        None,
        shown="none",
    )
    period: Positive | None = _key("its duration, repeats included", None, shown="the file's")
    length_x: Positive | None = _key("its length in x, repeats included", None, shown="the file's")
    length_y: Positive | None = _key("its length in y, repeats included", None, shown="the file's")


class MosaicStart(Section):
    """Start from stored states arranged in time and space; they give period and lengths."""

    kind: Literal["mosaic"]
    rows: tuple[Name, ...] = _key(
        "names of members, one text for each time, **the earliest first**; in it the names follow x, and in"
        " two dimensions `/` parts the lines along y, the one of smallest y first",
        min_length=1,
    )
    members: dict[str, MemberTable] = _key("the members by name, one table each", min_length=1)
    blend: float = _key(
        "width of the zone that neighbours share, as a fraction of the shorter one", 0.5, ge=0, lt=1
    )


Start = Annotated[
    MarchStart
    | WindowStart
    | RecurrenceStart
    | NoiseStart
    | StateStart
    | ExcerptStart
    | MosaicStart
    | WavesStart
    | ArrayStart,
    Field(discriminator="kind"),
]
START_MODELS: dict[str, type[Section]] = {
    "march": MarchStart,
    "window": WindowStart,
    "recurrence": RecurrenceStart,
    "noise": NoiseStart,
    "state": StateStart,
    "excerpt": ExcerptStart,
    "mosaic": MosaicStart,
    "waves": WavesStart,
    "array": ArrayStart,
}
