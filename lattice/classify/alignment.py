"""The shift and turn that bring one field nearest to another, by the peak of their correlation.

The correlation over all shifts by whole nodes is one inverse transform; its peak is then found between the
nodes by Newton's method on sums over the modes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lattice.classify.spectra import Complex, Real, Spectra

TURN = 2.0 * np.pi
NEWTON_STEPS = 12


@dataclass(frozen=True)
class Alignment:
    """How a field is moved onto another, and how far apart they stay.

    Parameters
    ----------
    shift : tuple of float
        For every axis of the spectra a fraction s of its period, 0 <= s < 1: the moved field is u(. + s).
    angle : float
        Radians by which the rotating pair is turned; 0 without one.
    distance : float
        Root mean square of what is left, over the root mean square of both fields about their means.
    """

    shift: tuple[float, ...]
    angle: float
    distance: float


class Aligner:
    """Aligns fields of one lattice.

    Parameters
    ----------
    spectra : Spectra
    shiftable : tuple of str
        Axes along which fields may be shifted.
    pair : tuple of int, optional
        Indices of two components that may be turned.
    """

    def __init__(self, spectra: Spectra, shiftable: tuple[str, ...], pair: tuple[int, int] | None) -> None:
        self.spectra, self.pair = spectra, pair
        self.free = [axis for axis, name in enumerate(spectra.axes) if name in shiftable]

    def align(self, wanted: Complex, moving: Complex, start: tuple[float, ...] | None = None) -> Alignment:
        """Return how `moving` comes nearest to `wanted`, both coefficients. Collective.

        Parameters
        ----------
        wanted, moving : ndarray
            Coefficients.
        start : tuple of float, optional
            Where to look for the peak; without it at all nodes.
        """
        shift, angle, _ = self.peak(self._correlation(wanted, moving), start)
        moved = self.moved(moving, tuple(shift), angle)
        apart = self.spectra.total(self.spectra.energies(wanted - moved).sum())
        size = 0.5 * (self._square(wanted) + self._square(moving))
        distance = float(np.sqrt(apart / size)) if size > 0.0 else float(np.sqrt(apart))
        return Alignment(tuple(float(s % 1.0) for s in shift), angle, distance)

    def peak(
        self, parts: Complex, start: tuple[float, ...] | None = None
    ) -> tuple[tuple[float, ...], float, float]:
        """Return where `plain + cos(angle)*cosine + sin(angle)*sine` is largest, the angle, and its value.

        Collective.

        Parameters
        ----------
        parts : ndarray, shape (3, modes ...)
            Coefficients of the three fields.
        start : tuple of float, optional
            Where to look; without it at all nodes.
        """
        shift = np.array(self._best_node(parts) if start is None else start)
        shift, angle = self._climbed(parts, shift, self._angle(parts, shift))
        value = self._derivatives(parts, shift, angle)[0]
        return tuple(float(s) for s in shift), float(angle), value

    def moved(self, coefficients: Complex, shift: tuple[float, ...], angle: float) -> Complex:
        """Return the coefficients of u(. + shift), turned by an angle. Not collective."""
        moved = coefficients * self._phases(np.array(shift))[..., None]
        if self.pair and angle:
            a, b = self.pair
            first, second = moved[..., a].copy(), moved[..., b].copy()
            moved[..., a] = np.cos(angle) * first - np.sin(angle) * second
            moved[..., b] = np.sin(angle) * first + np.cos(angle) * second
        return moved

    def _square(self, coefficients: Complex) -> float:
        energies = self.spectra.energies(coefficients)
        fixed = self.spectra.is_mean() & (self.pair is None)
        return float(self.spectra.total(energies[~fixed].sum()))

    def _phases(self, shift: Real) -> Complex:
        turns = sum((s * m for s, m in zip(shift, self.spectra.modes, strict=True)), np.zeros(1))
        return np.asarray(np.exp(1j * TURN * turns))

    def _correlation(self, wanted: Complex, moving: Complex) -> Complex:
        """Return the modes of three correlations: plain, and with cosine and sine of the turn."""
        plain = (wanted.conj() * moving).copy()
        zero = np.zeros(plain.shape[:-1], dtype=complex)
        if self.pair is None:
            return np.stack([plain.sum(axis=-1), zero, zero])
        a, b = self.pair
        cosine = plain[..., a] + plain[..., b]
        sine = wanted[..., b].conj() * moving[..., a] - wanted[..., a].conj() * moving[..., b]
        plain[..., [a, b]] = 0.0
        return np.stack([plain.sum(axis=-1), cosine, sine])

    def _best_node(self, parts: Complex) -> tuple[float, ...]:
        """Return the shift by whole nodes of the largest correlation."""
        blocks = self.spectra.blocks
        fields = []
        for part in parts if self.pair else parts[:1]:
            spectrum = self.spectra.transform.empty_spectrum()
            spectrum[...] = 0.0
            spectrum[..., 0] = part
            fields.append(self.spectra.backward(spectrum)[..., 0])
        found = fields[0] + (np.hypot(fields[1], fields[2]) if self.pair else 0.0)
        starts = (blocks.block.t0, blocks.block.y0, blocks.block.x0)
        for axis in range(3):
            if blocks.axes.count(axis) and blocks.axes.index(axis) not in self.free:
                places = np.arange(found.shape[axis]) + starts[axis]
                here = (places == 0).reshape([-1 if a == axis else 1 for a in range(3)])
                found = np.where(here, found, -np.inf)
        best = np.unravel_index(int(np.argmax(found)), found.shape)
        node = tuple(int(n) + s for n, s in zip(best, starts, strict=True))
        _, node = max(
            ((value, place) for value, place in blocks.comm.allgather((float(found[best]), node))),
            key=lambda item: (item[0], [-n for n in item[1]]),
        )
        return tuple(node[a] / blocks.lattice.shape[a] for a in blocks.axes)

    def _angle(self, parts: Complex, shift: Real) -> float:
        if self.pair is None:
            return 0.0
        moved = (self.spectra.weights * self._phases(shift) * parts[1:]).real
        cosine, sine = self.spectra.total([part.sum() for part in moved])
        return float(np.arctan2(sine, cosine))

    def _climbed(self, parts: Complex, shift: Real, angle: float) -> tuple[Real, float]:
        """Return the peak near a shift and an angle, by Newton's method as long as it rises."""
        best, kept = -np.inf, (shift, angle)
        for _ in range(NEWTON_STEPS):
            value, slope, curvature = self._derivatives(parts, shift, angle)
            if not value > best - 1e-14 * abs(value):
                return kept
            best, kept = value, (shift, angle)
            # A peak along a line (a travelling wave) is left along it: least squares.
            step = -np.linalg.lstsq(curvature, slope, rcond=1e-9)[0]
            if not np.isfinite(step).all() or slope @ step <= 0.0:
                return kept
            shift = shift.copy()
            shift[self.free] += step[: len(self.free)]
            angle += float(step[-1]) if self.pair else 0.0
        return kept

    def _derivatives(self, parts: Complex, shift: Real, angle: float) -> tuple[float, Real, Real]:
        """Return correlation, gradient and second derivatives by the free shifts and the angle."""
        phases = self.spectra.weights * self._phases(shift)
        plain, cosine, sine = (part * phases for part in parts)
        along = np.cos(angle) * cosine + np.sin(angle) * sine
        across = np.cos(angle) * sine - np.sin(angle) * cosine
        waves = [TURN * self.spectra.modes[axis] for axis in self.free]
        count = len(waves) + 1
        sums = [(plain + along).real.sum()]
        sums += [-(k * (plain + along).imag).sum() for k in waves] + [across.real.sum()]
        sums += [-(p * q * (plain + along).real).sum() for p in waves for q in waves]
        sums += [-(k * across.imag).sum() for k in waves] + [-along.real.sum()]
        numbers = self.spectra.total(sums)
        curvature = np.zeros((count, count))
        curvature[:-1, :-1] = numbers[1 + count : -count].reshape(count - 1, count - 1)
        curvature[-1] = curvature[:, -1] = numbers[-count:]
        size = count if self.pair else count - 1
        return float(numbers[0]), numbers[1 : 1 + size], curvature[:size, :size]
