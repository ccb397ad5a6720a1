"""March any law in time on one periodic slice: pseudo-spectral in space, ETDRK4 in time.

The constant-coefficient part is integrated exactly, the rest by the fourth-order exponential
Runge-Kutta scheme of Cox and Matthews (see `lattice.starts.phi`). The frame is that of the laboratory.
Everything is serial NumPy and SciPy and gives the same bits on every rank count.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Iterable, Iterator
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError, LatticeError
from lattice.laws.law import Law
from lattice.starts.operator import SpectralOperator
from lattice.starts.phi import Weights, weights
from lattice.starts.stability import stable_step

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Values: TypeAlias = dict[str, float]

BLOW_UP = 1e8
"""Growth of the largest coefficient within one call that counts as a blow-up."""
STEPS_BETWEEN_LOOKS = 16
WEIGHTS_KEPT = 6
STEPS_BETWEEN_MEASURES = 32
FIRST_STEP_RATE = 0.5
"""First guess of the step, as a fraction of the shortest time scale."""
LARGEST_STEP_RATE = 2.0
"""Largest step, in the same measure: much beyond it a step may look exact where the flow is at rest."""
STEP_CHANGES = 40
"""Halvings or doublings before a search for the step is given up: a factor of 1e12."""


class Stepper:
    """Time stepping of a law on one slice.

    Spectra hold the evolving components only; leading axes are independent slices marched together.

    Parameters
    ----------
    law : Law
        Any law; constraint equations must be linear with constant coefficients.
    shape : tuple of int
        Nodes (ny, nx); `ny = 1` in one space dimension.
    lengths : tuple of float
        Lengths (Ly, Lx) of the box.
    values : dict of str to float
        Parameters of the law and uniform sources by name; absent parameters take their defaults.
    dt : float
        Time step.

    Raises
    ------
    InputError
        Where the law cannot be marched: a constraint that is not linear, short waves that grow, a step
        that is not positive.

    Examples
    --------
    >>> from lattice.laws.catalogue import read_law
    >>> law = read_law("own", ("u_t - nu*u_xx = 0",), ("u",), {"nu": 0.5}, 1)
    >>> stepper = Stepper(law, (1, 16), (1.0, 2 * np.pi), {}, dt=0.1)
    >>> u = np.cos(np.arange(16) * np.pi / 8).reshape(1, 16, 1)
    >>> later = stepper.to_field(stepper.advance(stepper.to_spectrum(u), 2.0))
    >>> round(float(later[0, 0, 0]), 12), round(float(np.exp(-1.0)), 12)
    (0.367879441171, 0.367879441171)
    """

    def __init__(
        self, law: Law, shape: tuple[int, int], lengths: tuple[float, float], values: Values, dt: float
    ) -> None:
        self.operator = SpectralOperator(law, shape, lengths, values)
        self.modes = self.operator.modes
        self.dt = _positive(dt)
        self.fastest_growth = _fastest_growth(self.operator)
        self._matrices = not _is_diagonal(self.operator.linear)
        self._weights: OrderedDict[float, Weights] = OrderedDict()

    def to_spectrum(self, field: Real) -> Complex:
        """Return the evolving spectra of `field`, shape (..., ny, nx, C); Nyquist modes are dropped."""
        nodes = np.moveaxis(np.asarray(field, dtype=float), -1, -3)[..., self.operator.evolving, :, :]
        return self.modes.from_nodes(nodes)

    def to_field(self, spectrum: Complex, shape: tuple[int, int] | None = None) -> Real:
        """Return the field of all components on `shape` nodes, shape (..., ny, nx, C)."""
        nodes = self.modes.to_nodes(self.operator.complete(spectrum), shape)
        return np.ascontiguousarray(np.moveaxis(nodes, -3, -1))

    def step(self, spectrum: Complex, dt: float | None = None) -> Complex:
        """Return the spectrum one step later."""
        w, n = self._scheme(self.dt if dt is None else dt), self.operator.nonlinear
        times = _multiply_matrices if self._matrices else np.multiply
        at_start = n(spectrum)
        half, stage = times(w.half, spectrum), times(w.stage, at_start)
        a = half + stage
        at_a = n(a)
        b = half + times(w.stage, at_a)
        at_b = n(b)
        d = times(w.half, a) + times(w.stage, 2.0 * at_b - at_start)
        out: Complex = times(w.whole, spectrum)
        out += times(w.first, at_start)
        out += times(w.middle, at_a + at_b)
        out += times(w.last, n(d))
        self.modes.restore_symmetry(out)
        return out

    def advance(self, spectrum: Complex, time: float, began: float = 0.0) -> Complex:
        """Return the spectrum `time` later: the fewest equal steps of at most `dt`.

        `began` is the time of a march before this call, for messages.

        Raises
        ------
        LatticeError
            When the field grows beyond all bounds, with the time.
        """
        steps = steps_within(time, self.dt)
        dt = time / steps if steps else self.dt
        start = spectrum
        with np.errstate(over="ignore", invalid="ignore"):
            for n in range(1, steps + 1):
                spectrum = self.step(spectrum, dt)
                if n % STEPS_BETWEEN_LOOKS == 0 or n == steps:
                    self._look(spectrum, start, began + n * dt)
        return spectrum

    def march(self, spectrum: Complex, times: Iterable[float]) -> Iterator[Real]:
        """Yield the field at each of `times`, which rise from the spectrum's own time 0.

        Evenly spaced times are hit by equal steps, so that one set of weights serves all.
        """
        now = 0.0
        for time in times:
            if time < now:
                raise InputError(f"times of a march must rise, got {time:g} after {now:g}")
            spectrum = self.advance(spectrum, time - now, now)
            now = time
            yield self.to_field(spectrum)

    def halving_error(self, spectrum: Complex, time: float) -> float:
        """Return how far a march over `time` is from one with half the step.

        The measure is `rms(u_dt - u_dt/2)/rms(u_dt/2)`; the scheme being of fourth order, the error of the
        march with the smaller step is about a fifteenth of it.
        """
        steps = max(1, steps_within(time, self.dt))
        return self._relative_error(spectrum, time / steps, steps)

    def step_error(self, spectrum: Complex, dt: float) -> float:
        """Return the relative error of one step of size `dt`, measured by halving it."""
        return self._relative_error(spectrum, dt, 1)

    def with_step(self, dt: float) -> Stepper:
        """Return a stepper of the same law and slice with another step; they share what they can."""
        other = object.__new__(type(self))
        other.__dict__.update(self.__dict__)
        other.dt = _positive(dt)
        return other

    def _relative_error(self, spectrum: Complex, dt: float, steps: int) -> float:
        whole = halves = spectrum
        with np.errstate(over="ignore", invalid="ignore"):
            for _ in range(steps):
                whole = self.step(whole, dt)
                halves = self.step(self.step(halves, 0.5 * dt), 0.5 * dt)
            error, size = np.linalg.norm(whole - halves), np.linalg.norm(halves)
        if not (np.isfinite(error) and np.isfinite(size)):
            return float("inf")
        return float(error / size) if size else 0.0

    def _scheme(self, dt: float) -> Weights:
        # Evenly spaced times differ in their last bits, and each difference would cost new weights.
        dt = float(f"{dt:.12e}")
        if dt not in self._weights:
            linear = self.operator.linear
            if not self._matrices:
                linear = np.einsum("iiyx->iyx", linear)
            self._weights[dt] = weights(linear, dt, self._matrices)
            if len(self._weights) > WEIGHTS_KEPT:
                self._weights.popitem(last=False)
        return self._weights[dt]

    def _look(self, spectrum: Complex, start: Complex, time: float) -> None:
        largest = np.abs(spectrum).max()
        bound = BLOW_UP * (1.0 + np.abs(start).max())
        if not largest <= bound:
            raise LatticeError(
                f"the march of law {self.operator.law.name} must stay bounded, and grew beyond {bound:.1e} "
                f"at time {time:.6g} with dt = {self.dt:.3g}; take a smaller start.dt, more nodes or a "
                "smaller amplitude, and check the signs of the law's highest derivatives"
            )


def suggest_dt(stepper: Stepper, spectrum: Complex, tolerance: float = 1e-6) -> float:
    """Return the largest step, up to powers of two, that is accurate to a tolerance and stable.

    The first guess is a fraction of the shortest of two time scales, linear growth and nonlinear change
    (`rms(u)/rms(N(u))`: for advection the time to cross a wavelength); it is then halved or doubled by the
    error of one step, measured by halving; at last it is halved until it is stable (`stable_step`).

    Parameters
    ----------
    stepper : Stepper
        Of the law and slice; its own step is not used.
    spectrum : ndarray
        A spectrum typical of the march.
    tolerance : float
        Largest relative error of one step.

    Raises
    ------
    LatticeError
        When no step is small enough.
    """
    return stable_step(stepper, spectrum, _accurate_step(stepper, spectrum, tolerance))


def _accurate_step(stepper: Stepper, spectrum: Complex, tolerance: float) -> float:
    rate = _fastest_rate(stepper, spectrum)
    dt = FIRST_STEP_RATE / rate
    within = stepper.step_error(spectrum, dt) <= tolerance
    for _ in range(STEP_CHANGES):
        other = dt * 2.0 if within else dt * 0.5
        if within and other * rate > LARGEST_STEP_RATE:
            return dt
        fits = stepper.step_error(spectrum, other) <= tolerance
        if fits != within:
            return dt if within else other
        dt = other
    raise LatticeError(
        f"no time step brings the error of one step of law {stepper.operator.law.name} to {tolerance:g}; "
        f"tried down to {dt:.3g}; give start.dt or a smaller amplitude"
    )


def settle(
    stepper: Stepper, spectrum: Complex, time: float, tolerance: float = 1e-6, began: float = 0.0
) -> tuple[Complex, float]:
    """March over `time` while the step follows the flow, and return the spectrum and the last step.

    The error of one step is measured every 32 steps and the step halved or doubled by it; where the field
    blows up, the march goes back that far and tries half the step. `began` is the time marched before, for
    messages.

    Raises
    ------
    LatticeError
        When the field blows up with any step.
    """
    dt, now, failures = suggest_dt(stepper, spectrum, tolerance), 0.0, 0
    while now < time:
        stretch = min(STEPS_BETWEEN_MEASURES * dt, time - now)
        try:
            later = stepper.with_step(dt).advance(spectrum, stretch, began + now)
        except LatticeError:
            failures += 1
            if failures > STEP_CHANGES:
                raise
            dt *= 0.5
            continue
        # A remainder below round-off would leave the loop no progress.
        now = time if stretch == time - now else now + stretch
        spectrum, dt = later, followed_step(stepper, later, dt, tolerance)
    return spectrum, dt


def followed_step(stepper: Stepper, spectrum: Complex, dt: float, tolerance: float) -> float:
    """Return the step for the next stretch of a march from the flow where it has come to.

    The error of one step falls as dt**5; it is halved beyond the tolerance, doubled far within, and always
    stable.
    """
    error = stepper.step_error(spectrum, dt)
    if error > 32.0 * tolerance:
        return suggest_dt(stepper, spectrum, tolerance)
    may_grow = error < tolerance / 64.0 and 2.0 * dt <= LARGEST_STEP_RATE / _fastest_rate(stepper, spectrum)
    wanted = 0.5 * dt if error > tolerance else 2.0 * dt if may_grow else dt
    return stable_step(stepper, spectrum, wanted)


def steps_within(time: float, dt: float) -> int:
    """Return the fewest equal steps of at most `dt` that make up `time`, round-off forgiven.

    Examples
    --------
    >>> steps_within(1.0, 0.1), steps_within(1.0, 0.3), steps_within(0.0, 0.1)
    (10, 4, 0)
    """
    if time <= 0.0:
        return 0
    return max(1, int(np.ceil(time / dt * (1.0 - 1e-10))))


def _positive(dt: float) -> float:
    if not (np.isfinite(dt) and dt > 0.0):
        raise InputError(f"the time step must be positive and finite, got {dt}")
    return float(dt)


def _multiply_matrices(matrices: Complex, vectors: Complex) -> Complex:
    product: Complex = np.einsum("ijyx,...jyx->...iyx", matrices, vectors)
    return product


def _is_diagonal(linear: Complex) -> bool:
    size = linear.shape[0]
    return not any(np.any(linear[i, j]) for i in range(size) for j in range(size) if i != j)


def _fastest_growth(operator: SpectralOperator) -> float:
    """Return the largest linear growth rate; refuse slices whose shortest waves grow fastest."""
    rates, modes = operator.growth_rates(), operator.modes
    k = np.hypot(modes.kx, modes.ky)
    long_waves = rates[k <= 0.5 * k.max()].max()
    fastest = float(rates.max())
    if fastest > 0.0 and rates[k >= 0.9 * k.max()].max() > max(0.0, 1.01 * long_waves):
        raise InputError(
            f"time stepping of law {operator.law.name} needs short waves that decay; on {modes.shape[1]} x "
            f"{modes.shape[0]} nodes the shortest wave grows at rate {fastest:.3g}, faster than longer ones; "
            "raise the nodes, or check the signs of the highest derivatives"
        )
    return fastest


def _fastest_rate(stepper: Stepper, spectrum: Complex) -> float:
    operator = stepper.operator
    at_rest = operator.nonlinear(np.zeros_like(spectrum))
    size = np.linalg.norm(spectrum)
    change = np.linalg.norm(operator.nonlinear(spectrum) - at_rest) / size if size else 0.0
    forced = np.linalg.norm(at_rest) / size if size else 0.0
    rate = max(stepper.fastest_growth, change, min(forced, 1.0 / max(stepper.modes.lengths)))
    return float(rate) if rate > 0.0 and np.isfinite(rate) else 1.0
