"""The panels a picture is made of: planes, lines, spectra, the header."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from lattice.show.colours import diverging
from lattice.show.planes import Plane, extent
from lattice.show.spectra import TOLERATED_ERROR, Spectrum
from lattice.show.verdict import is_solution, residual_text
from lattice.store.statemeta import COMPOSED, StateMeta

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.image import AxesImage

Real = npt.NDArray[np.float64]

NODES_AS_DOTS = 150
"""Most nodes of a line, or modes of a spectrum, that are drawn as dots too."""
FINE_POINTS = 1000
HIGH_LAST_THIRD = 1e-4
"""Share of the last third of a spectrum above which its panel asks for more nodes (common practice)."""
LINE_COLOURS = ("#0b5cad", "#d1490c", "#2a8a57", "#7a4fb0")
GOOD, BAD, FAINT = "#1b6e3c", "#b3261e", "#666666"
SYMBOLS = {
    "period": "T",
    "length_x": "L_x",
    "length_y": "L_y",
    "drift_x": "c_x",
    "drift_y": "c_y",
    "rotation": r"\Omega",
}
SPECTRUM_LABELS = {"t": r"frequency $\omega$", "y": "wavenumber $k_y$", "x": "wavenumber $k_x$"}

STYLE: dict[str, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "axes.titlesize": 9.5,
    "axes.titleweight": "normal",
    "axes.labelsize": 9.0,
    "axes.linewidth": 0.7,
    "axes.spines.top": True,
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "xtick.major.width": 0.7,
    "ytick.major.width": 0.7,
    "lines.linewidth": 1.3,
    "legend.fontsize": 8.0,
    "legend.frameon": False,
    "mathtext.fontset": "dejavusans",
    "svg.hashsalt": "lattice",
}


@dataclass(frozen=True)
class Limits:
    """Ends of a colour scale, symmetric about its centre.

    Parameters
    ----------
    centre : float
        0 where the field takes both signs, else its mean.
    half : float
        Distance of either end from the centre.
    """

    centre: float
    half: float

    @property
    def ends(self) -> tuple[float, float]:
        """Lowest and highest value."""
        return (self.centre - self.half, self.centre + self.half)


def symmetric_limits(values: Sequence[Real]) -> Limits:
    """Return the colour scale that shows all values.

    Examples
    --------
    >>> symmetric_limits([np.array([-1.0, 3.0])])
    Limits(centre=0.0, half=3.0)
    >>> symmetric_limits([np.array([1.0, 3.0])])
    Limits(centre=2.0, half=1.0)
    """
    low, high = min(float(v.min()) for v in values), max(float(v.max()) for v in values)
    centre = 0.0
    if low > 0.0 or high < 0.0:
        centre = sum(float(v.sum()) for v in values) / sum(v.size for v in values)
    half = max(high - centre, centre - low)
    # A constant has no scale of its own, and rounding errors are none to show.
    flat = half <= 1e-12 * abs(centre) or half == 0.0
    return Limits(centre, max(abs(centre), 1.0) if flat else half)


def field_panel(axes: Axes, plane: Plane, limits: Limits, lengths: tuple[float, float]) -> AxesImage:
    """Draw a plane over one period of both of its axes; `lengths` are those of rows and columns."""
    closed = np.pad(plane.values, ((0, 1), (0, 1)), mode="wrap")
    high, wide = lengths[0] / plane.values.shape[0], lengths[1] / plane.values.shape[1]
    image = axes.imshow(
        closed,
        origin="lower",
        aspect="auto",
        cmap=diverging(),
        vmin=limits.ends[0],
        vmax=limits.ends[1],
        extent=(-wide / 2, lengths[1] + wide / 2, -high / 2, lengths[0] + high / 2),
        interpolation="bilinear",
        interpolation_stage="data",
    )
    axes.set_xlim(0.0, lengths[1])
    axes.set_ylim(0.0, lengths[0])
    return image


def colour_bar(figure: Any, image: AxesImage, axes: Axes, component: str, limits: Limits) -> None:
    """Add the colour bar of a component, which says where its centre is unless that is 0."""
    bar = figure.colorbar(image, cax=axes.inset_axes((1.03, 0.0, 0.045, 1.0)))
    about = "" if limits.centre == 0.0 else f"\ncentred at its mean {limits.centre:.4g}"
    bar.set_label(f"{component} (dimensionless){about}")
    bar.outline.set_linewidth(0.7)


def line_panel(axes: Axes, positions: Real, values: Real, length: float, colour: str) -> None:
    """Draw a line over one period: the nodes where they can be told apart, and their interpolant."""
    fine = trigonometric(values, -(-FINE_POINTS // len(values)))
    axes.plot(np.linspace(0.0, length, len(fine)), fine, color=colour, linewidth=1.2)
    if len(values) <= NODES_AS_DOTS:
        axes.plot(positions, values, ".", color=colour, markersize=4)
    if values.min() < 0.0 < values.max():
        axes.axhline(0.0, color=FAINT, linewidth=0.5, zorder=0)
    axes.set_xlim(0.0, length)


def trigonometric(values: Real, factor: int) -> Real:
    """Return the trigonometric interpolant of periodic nodes, `factor` times finer and closed at its end.

    Examples
    --------
    >>> trigonometric(np.array([1.0, 0.0, -1.0, 0.0]), 2).round(6) + 0.0
    array([ 1.      ,  0.707107,  0.      , -0.707107, -1.      , -0.707107,
            0.      ,  0.707107,  1.      ])
    """
    nodes = len(values)
    if factor <= 1:
        return np.append(values, values[0])
    modes = np.fft.rfft(values)
    if nodes % 2 == 0:
        # The last mode of an even lattice stands for a pair, of which the finer one has both.
        modes[-1] *= 0.5
    fine = np.fft.irfft(modes, nodes * factor) * factor
    return np.append(fine, fine[0])


def axis_label(axis: str) -> str:
    """Return the label of an axis with its unit."""
    return f"{axis} (dimensionless)"


def spectrum_panel(axes: Axes, spectra: Sequence[Spectrum], order: int) -> None:
    """Draw the spectra of all components along one axis, with what the lattice resolves."""
    for spectrum, colour in zip(spectra, LINE_COLOURS * len(spectra), strict=False):
        _spectrum_line(axes, spectrum, colour)
    first = spectra[0]
    end = float(first.wavenumbers[-1])
    axes.set_xlim(0.0, end)
    _set_decades(axes, spectra)
    axes.axvspan(2.0 * end / 3.0, end, color="#000000", alpha=0.06, linewidth=0)
    axes.axvline(first.limit, color=BAD, linewidth=0.9, linestyle=(0, (4, 2)))
    axes.set_xlabel(f"{SPECTRUM_LABELS[first.axis]} (dimensionless)")
    axes.set_ylabel("mean square per mode")
    _annotate_limit(axes, first.limit, order)
    _annotate_last_third(axes, spectra)
    if len(spectra) > 1:
        axes.legend(loc="lower left", handlelength=1.2, borderaxespad=0.3)


def _spectrum_line(axes: Axes, spectrum: Spectrum, colour: str) -> None:
    shown = spectrum.energy > 0.0
    marker = "." if len(spectrum.energy) <= NODES_AS_DOTS else ""
    axes.semilogy(
        spectrum.wavenumbers[shown],
        spectrum.energy[shown],
        color=colour,
        marker=marker,
        markersize=3,
        linewidth=1.0,
        label=spectrum.component,
    )


def _set_decades(axes: Axes, spectra: Sequence[Spectrum]) -> None:
    """Show at most 36 decades, as double precision leaves nothing below, and not an empty last mode."""
    highest = max(float(s.energy.max()) for s in spectra)
    inner = np.concatenate([s.energy[:-1] if len(s.energy) > 2 else s.energy for s in spectra])
    lowest = float(inner[inner > 0.0].min()) if inner.any() else highest
    if highest > 0.0:
        axes.set_ylim(max(lowest, highest * 1e-36) / 10.0, highest * 10.0)


def _annotate_limit(axes: Axes, limit: float, order: int) -> None:
    """Name the resolution limit above the frame, where no curve passes."""
    axes.annotate(
        f"order {order}: {TOLERATED_ERROR * 100:.0f} % error",
        (limit, 1.0),
        xycoords=axes.get_xaxis_transform(),
        xytext=(0, 3),
        textcoords="offset points",
        ha="center",
        va="bottom",
        fontsize=7.5,
        color=BAD,
    )


def _annotate_last_third(axes: Axes, spectra: Sequence[Spectrum]) -> None:
    shares = [s.last_third for s in spectra if math.isfinite(s.last_third)]
    if not shares:
        return
    worst = max(shares)
    advice = "\nraise the nodes" if worst > HIGH_LAST_THIRD else ""
    axes.text(
        5.0 / 6.0,
        0.97,
        f"share of\nlast third\n{worst:.1e}{advice}",
        transform=axes.transAxes,
        ha="center",
        va="top",
        fontsize=7.5,
        color=BAD if advice else FAINT,
    )


def header(figure: Figure, meta: StateMeta, subject: str = "") -> None:
    """Write law, scalars and residual above the panels and keep that band free of them."""
    width, height = figure.get_size_inches()
    title = meta.title or meta.law
    faint, verdict = {"color": FAINT}, {"color": GOOD if is_solution(meta) else BAD, "fontweight": "bold"}
    rows: list[tuple[str, dict[str, Any]]] = [
        *(
            (line, {"fontsize": 11.5, "fontweight": "bold"})
            for line in wrapped(title.split(" "), " ", width * 9)
        ),
        *((line, {"fontweight": "bold"}) for line in ([subject] if subject else [])),
        *((line, {}) for line in wrapped(scalar_texts(meta), "    ", width * 15)),
        *((line, faint) for line in wrapped(lattice_texts(meta), ";  ", width * 14)),
        *((line, verdict) for line in wrapped(_verdict(meta).split(" "), " ", width * 12)),
    ]
    y = 0.28
    for text, look in rows:
        figure.text(
            0.12 / width, 1.0 - y / height, text, ha="left", va="baseline", **({"fontsize": 9.0} | look)
        )
        y += 0.195
    engine: Any = figure.get_layout_engine()
    engine.set(
        rect=(0.0, 0.0, 1.0, 1.0 - (y - 0.06) / height), w_pad=0.06, h_pad=0.05, wspace=0.03, hspace=0.04
    )


def _verdict(meta: StateMeta) -> str:
    composed = f"{COMPOSED}; " if meta.outcome == COMPOSED else ""
    return f"{composed}residual {residual_text(meta)}"


def wrapped(parts: Sequence[str], separator: str, letters: float) -> list[str]:
    """Join parts into as few lines of at most `letters` letters as their order allows.

    Examples
    --------
    >>> wrapped(["one", "two", "three"], ", ", 9)
    ['one, two', 'three']
    """
    lines: list[str] = []
    for part in parts:
        if lines and len(lines[-1]) + len(separator) + len(part) <= letters:
            lines[-1] += separator + part
        else:
            lines.append(part)
    return lines


def scalar_texts(meta: StateMeta) -> list[str]:
    """Return the scalars as `T = ...`, `L_x = ...`, and the parameters by name."""
    texts = []
    for name in [*SYMBOLS, *(name for name in meta.values if name not in SYMBOLS)]:
        if name not in meta.values or not _belongs(name, meta):
            continue
        value = meta.values[name]
        symbol = f"${SYMBOLS[name]}$" if name in SYMBOLS else name
        texts.append(f"{symbol} = {value:.7g}")
    return texts


def _belongs(name: str, meta: StateMeta) -> bool:
    if name == "period":
        return meta.lattice.nt > 1
    if name in ("length_y", "drift_y"):
        return meta.dimensions == 2
    return not name.startswith("source_")


def lattice_texts(meta: StateMeta) -> list[str]:
    """Return nodes, spacing and order of each axis of the lattice."""
    lattice = meta.lattice
    orders = {"t": lattice.order_t, "y": lattice.order_y, "x": lattice.order_x}
    axes = [axis for axis in meta.axes if axis != "t" or lattice.nt > 1]
    counts = dict(zip(meta.axes, meta.shape, strict=True))
    return [
        f"{axis}: {counts[axis]} nodes, spacing {extent(meta, axis) / counts[axis]:.3g}, order {orders[axis]}"
        for axis in axes
    ]
