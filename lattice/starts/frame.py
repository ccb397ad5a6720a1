"""The frame in which a flow repeats or rests, from two slices or from one.

It moves with a drift along homogeneous axes; where a pair of components (a, b) may be turned, it turns
with a rotation, too. A state then is `A(t, x) = exp(i*rotation*t) B(t, x - drift*t)` with A = a + i b.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from lattice.starts.modes import Modes

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Pair = tuple[int, int]

FINER = 4
"""Refinement of the grid on which the peak of the correlation is looked for."""
NEWTON_STEPS = 8
INDEPENDENT = 1e-10
"""Relative size below which a combination of slopes counts as zero."""


def frame_that_aligns(
    modes: Modes, first: Complex, last: Complex, time: float, axes: tuple[str, ...], pair: Pair | None = None
) -> dict[str, float]:
    """Return the drift along `axes`, and the rotation of `pair`, for which `last`, moved back, fits `first`.

    The shift s is the peak of the correlation `<u_first(x) u_last(x + s)>`, every component divided by its
    variance; the drift is s/time with `|s|` at most half a length. A pair that may turn adds the modulus of
    its complex correlation `C = <conj(A_first(x)) A_last(x + s)>`; the rotation is the angle of C over the
    time, the angle at most half a turn.

    Parameters
    ----------
    modes : Modes
        Of the spectra.
    first, last : ndarray, shape (E, *modes.spectrum_shape)
        Spectra of two slices, `time` apart, in the frame of the laboratory.
    axes : tuple of str
        "x", "y", both or none.
    pair : (int, int), optional
        Rows of the components that turn; none where the rotation is held.
    """
    parts = _correlations(modes, first, last, pair)
    rows, columns = modes.shape
    surface = _joined(modes.to_nodes(parts, (FINER * rows if modes.my else 1, FINER * columns)))
    surface = surface[:, :1] if "x" not in axes else surface
    surface = surface[:1] if "y" not in axes else surface
    peak = np.unravel_index(int(np.argmax(surface)), surface.shape)
    turns = [int(place) / nodes for place, nodes in zip(peak, surface.shape, strict=True)]
    start = {axis: turns["yx".index(axis)] * modes.lengths["yx".index(axis)] for axis in axes}
    shift = _climbed(modes, parts, start)
    found = {}
    for axis, place in shift.items():
        length = modes.lengths["yx".index(axis)]
        found[f"drift_{axis}"] = (place - length * round(place / length)) / time
    if pair is not None:
        (_, along, across), _, _ = _sums(modes, parts, shift)
        found["rotation"] = float(np.arctan2(across, along)) / time
    return found


def _correlations(modes: Modes, first: Complex, last: Complex, pair: Pair | None) -> Complex:
    """Return the spectra, as functions of the shift, of the plain correlation and of Re C and Im C."""
    fluctuation = first.copy()
    fluctuation[:, 0, 0] = 0.0
    weighted = scaled(fluctuation, modes.mean_product(fluctuation, fluctuation))
    if pair is None:
        alone: Complex = (weighted.conj() * last).sum(axis=0)[None]
        return alone
    weighted[list(pair)] = 0.0
    # The mean of a pair turns with it and so is part of its correlation.
    size = modes.mean_product(first[list(pair)], first[list(pair)]).sum()
    (a, b), (later_a, later_b) = first[list(pair)].conj() / (size or 1.0), last[list(pair)]
    plain = (weighted.conj() * last).sum(axis=0)
    return np.stack([plain, a * later_a + b * later_b, a * later_b - b * later_a])


def _joined(parts: Real) -> Real:
    """Return the plain correlation plus the modulus of the complex one."""
    joined: Real = parts[0] + np.hypot(parts[1], parts[2]) if len(parts) > 1 else parts[0]
    return joined


def _sums(modes: Modes, parts: Complex, shift: dict[str, float]) -> tuple[Real, Real, Real]:
    """Return value, gradient and second derivatives of every part at `shift`, the part's axis first."""
    k = [modes.kx + 0.0 * modes.ky if axis == "x" else modes.ky + 0.0 * modes.kx for axis in shift]
    moved = parts * np.exp(1j * sum(s * q for s, q in zip(shift.values(), k, strict=True)))
    # Modes with kx > 0 stand for two, the other being the conjugate.
    both = np.where(modes.kx > 0.0, 2.0, 1.0) * moved
    value = both.real.sum(axis=(1, 2))
    slope = np.array([-(q * both.imag).sum(axis=(1, 2)) for q in k]).T.reshape(len(parts), len(k))
    curvature = np.array([[-(p * q * both.real).sum(axis=(1, 2)) for p in k] for q in k])
    return value, slope, np.moveaxis(curvature.reshape(len(k), len(k), len(parts)), -1, 0)


def _climbed(modes: Modes, parts: Complex, shift: dict[str, float]) -> dict[str, float]:
    """Return the peak of the joined correlation near `shift`, by Newton's method."""
    place = dict(shift)
    for _ in range(NEWTON_STEPS if place else 0):
        slope, curvature = _joined_derivatives(*_sums(modes, parts, place))
        if np.linalg.eigvalsh(curvature).max() >= 0.0:
            break
        step = np.linalg.solve(curvature, slope)
        place = {axis: float(s - d) for (axis, s), d in zip(place.items(), step, strict=True)}
    return place


def _joined_derivatives(value: Real, slope: Real, curvature: Real) -> tuple[Real, Real]:
    """Return gradient and second derivatives of the joined correlation from those of its parts.

    With m = |C|: m m' = Re(conj(C) C') and m m'' = Re(conj(C) C'' + conj(C') C') - m'^2.
    """
    if len(value) == 1 or not np.hypot(value[1], value[2]) > 0.0:
        return slope[0], curvature[0]
    modulus = np.hypot(value[1], value[2])
    along = value[1:] @ slope[1:] / modulus
    bent: Real = np.tensordot(value[1:], curvature[1:], 1) + slope[1:].T @ slope[1:] - np.outer(along, along)
    return slope[0] + along, curvature[0] + bent / modulus


def frame_of_slice(
    modes: Modes,
    spectrum: Complex,
    rate: Complex,
    held: Mapping[str, float],
    free: tuple[str, ...],
    pair: Pair | None = None,
) -> dict[str, float]:
    """Return the free scalars of the frame in which a slice is most nearly at rest.

    The least-squares solution of `u_t + cx*u_x + cy*u_y - rotation*(-b, a) = 0`, every component divided by
    its variance, a pair by its joint one.

    Parameters
    ----------
    modes : Modes
        Of the spectra.
    spectrum, rate : ndarray, shape (E, *modes.spectrum_shape)
        The slice and its time derivative.
    held : mapping of str to float
        Scalars of the frame that are given.
    free : tuple of str
        Those to find: "drift_x", "drift_y", "rotation".
    pair : (int, int), optional
        Rows of the components that turn.
    """
    sizes = modes.mean_product(spectrum, spectrum)
    if pair is not None:
        sizes[list(pair)] = sizes[list(pair)].sum()
    rest = rate - sum(value * _move(modes, spectrum, name, pair) for name, value in held.items())
    moves = [_move(modes, spectrum, name, pair) for name in free]
    weighted = [scaled(move, sizes) for move in moves]
    matrix = np.array([[modes.mean_product(a, b).sum() for b in moves] for a in weighted])
    right = np.array([modes.mean_product(a, rest).sum() for a in weighted])
    solution = np.linalg.lstsq(matrix, right, rcond=INDEPENDENT)[0]
    return dict(zip(free, (float(c) for c in solution), strict=True))


def _move(modes: Modes, spectrum: Complex, name: str, pair: Pair | None) -> Complex:
    """Return the rate of a slice that moves with a scalar of the frame, per unit of the scalar."""
    if name != "rotation":
        move: Complex = -spectrum * modes.derivative(int(name == "drift_x"), int(name == "drift_y"))
        return move
    move = np.zeros_like(spectrum)
    if pair is not None:
        move[pair[0]], move[pair[1]] = -spectrum[pair[1]], spectrum[pair[0]]
    return move


class MeanTurn:
    """The mean rate at which a pair turns along a march, to tell a rotation from one with whole turns more.

    Parameters
    ----------
    modes : Modes
        Of the spectra.
    pair : (int, int)
        Rows of the components that turn.
    """

    def __init__(self, modes: Modes, pair: Pair) -> None:
        self.modes, self.pair = modes, pair
        self._sums = np.zeros(4)

    def look(self, spectrum: Complex, rate: Complex) -> None:
        """Take a slice of the march, with its rate, into the mean."""
        turn = _move(self.modes, spectrum, "rotation", self.pair)
        slopes = [_move(self.modes, spectrum, f"drift_{axis}", self.pair) for axis in "xy"]
        self._sums += [self.modes.mean_product(turn, other).sum() for other in (turn, rate, *slopes)]

    def with_whole_turns(self, frame: Mapping[str, float], time: float) -> float:
        """Return the frame's rotation plus the whole turns in `time` that bring it nearest to the mean rate.

        In a frame that lags whole turns behind a state repeats as well, but turns in between.
        """
        size, by_time, by_x, by_y = self._sums
        rate = by_time - frame["drift_x"] * by_x - frame["drift_y"] * by_y
        turn, mean = 2.0 * np.pi / time, rate / size if size else 0.0
        return float(frame["rotation"] + turn * round((mean - frame["rotation"]) / turn))


def turned(spectrum: Complex, pair: Pair | None, angle: float) -> Complex:
    """Return spectra with the pair (a, b) turned by an angle, from a towards b."""
    if pair is None or angle == 0.0:
        return spectrum
    result, (a, b) = spectrum.copy(), pair
    result[a] = np.cos(angle) * spectrum[a] - np.sin(angle) * spectrum[b]
    result[b] = np.sin(angle) * spectrum[a] + np.cos(angle) * spectrum[b]
    return result


def scaled(spectrum: Complex, sizes: Real) -> Complex:
    """Return spectra of components divided by their mean squares; components at rest stay zero."""
    scale = np.divide(1.0, sizes, out=np.zeros_like(sizes), where=sizes > 0.0)
    product: Complex = spectrum * scale[:, None, None]
    return product
