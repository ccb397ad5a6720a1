"""Patterns at rest: Swift-Hohenberg branches and Maxwell points, uniform Gray-Scott states.

Branches: leading amplitude 2 sqrt(r/3), Cross and Hohenberg, Rev. Mod. Phys. 65 (1993) 851 (from memory); all
further digits are an independent recomputation, not published.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest
from scipy.optimize import fsolve

from lattice.geometry.lattice import Lattice
from tests.solving import TURN, Real, Solved, jacobian, limit, mean_square, nodes, observed_order, solve


@pytest.fixture(autouse=True)
def interpreted(monkeypatch: pytest.MonkeyPatch) -> None:
    """Evaluate by NumPy: on lattices this small, compiling the kernels would take nearly all the time."""
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


BRANCH = [
    (0.1, 0.365243301471, 0.066701352691, 0.3650533018),
    (0.5, 0.817550739608, 0.334196848715, 0.8154346530),
]


def pattern(r: float, nx: int) -> Solved:
    """Return one wave of the cubic law's pattern at the wavenumber 1, its crest near x = 0."""
    start = 2.0 * np.sqrt(r / 3.0) * np.cos(nodes(nx, TURN))
    return solve("swift-hohenberg", Lattice(1, 1, nx, order_x=8), start, ("drift_x",), length_x=TURN, r=r)


@pytest.mark.parametrize(("r", "first", "square", "crest"), BRANCH)
def test_cubic_pattern_is_on_its_exact_branch(r, first, square, crest):
    counts = (16, 24, 32)
    found = [pattern(r, n) for n in counts]
    firsts = [2.0 * abs(np.fft.rfft(s.field[0, 0, :, 0], norm="forward")[1]) for s in found]
    squares = [mean_square(s.field, TURN) for s in found]
    assert observed_order(counts, [q - square for q in squares]) == pytest.approx(8.0, abs=0.5)
    # The finest lattice errs by 2e-8 at most: two terms of the error taken away leave a hundredth.
    assert limit(counts, squares, 8) == pytest.approx(square, abs=1e-9)
    assert limit(counts, firsts, 8) == pytest.approx(first, abs=1e-9)
    assert limit(counts, [s.field.max() for s in found], 8) == pytest.approx(crest, abs=1e-9)
    assert firsts[-1] == pytest.approx(2.0 * np.sqrt(r / 3.0), rel=0.01)
    assert all(abs(s.values["drift_x"]) < 1e-11 for s in found)


@pytest.mark.parametrize("waves", [2, 3])
def test_flat_state_becomes_unstable_on_the_neutral_curve(waves):
    # r = (1 - k^2)^2 (derived): growth r - (1 - k^2)^2 of a wave k, the Jacobian's eigenvalue to its order.
    length, nx, r = 15.0, 64, 0.2
    matrix = jacobian("swift-hohenberg", Lattice(1, 1, nx, order_x=8), np.zeros(nx), length_x=length, r=r)
    k = TURN * waves / length
    wave = np.cos(k * nodes(nx, length))
    assert -(matrix @ wave) == pytest.approx((r - (1.0 - k * k) ** 2) * wave, abs=1e-6)


@dataclass(frozen=True)
class Maxwell:
    """A law with a flat state and a pattern of equal energy at r and wavenumber k."""

    law: str
    factor: dict[str, float]
    potential: Callable[[Real], Real]
    guess: float
    mean: float
    published: float
    r: float
    k: float


# r_M published from memory, all digits recomputed. Burke and Knobloch, Chaos 17 (2007) 037102, and Phys. Lett. A
# 360 (2007) 681 (from memory).
MAXWELL = [
    Maxwell(
        "swift-hohenberg-23", {"quadratic": 1.8}, lambda u: -0.6 * u**3 + u**4 / 4.0,
        -0.3, 0.3, -0.3128, -0.312767528, 0.9920377,
    ),
    Maxwell(
        "swift-hohenberg-35", {"cubic": 2.0}, lambda u: -(u**4) / 2.0 + u**6 / 6.0,
        -0.65, 0.0, -0.6752, -0.675269677, 0.9998508,
    ),
]  # fmt: skip


def energy_and_slope(
    u: Real, length: float, r: float, potential: Callable[[Real], Real]
) -> tuple[float, float]:
    """Return the mean energy F of a pattern and its derivative in the length, by Fourier series.

    F = <((1 + d_xx) u)^2/2 - r u^2/2 + potential(u)>, of which the law is the gradient flow. On a steady state
    F does not change with u to first order, so that dF/dL is that at fixed u(x/L).
    """
    spectrum = np.abs(np.fft.rfft(u, norm="forward")) ** 2
    j = np.arange(spectrum.size)
    k, weight = TURN * j / length, np.where((j > 0) & (2 * j < u.size), 2.0, 1.0)
    energy = 0.5 * np.sum(weight * spectrum * (1.0 - k**2) ** 2) + np.mean(potential(u) - 0.5 * r * u**2)
    return float(energy), float(np.sum(weight * spectrum * (1.0 - k**2) * 2.0 * k**2 / length))


@pytest.mark.parametrize("case", MAXWELL, ids=lambda case: case.law)
def test_pattern_and_flat_state_have_equal_energy_at_the_maxwell_point(case):
    # Fronts between the two rest there: F(pattern) = F(0) = 0 at the wavelength of least energy.
    nx = 32
    u = case.mean + 1.2 * np.cos(nodes(nx, TURN))

    def excess(unknowns: Real) -> tuple[float, float]:
        nonlocal u
        r, length = unknowns
        lattice = Lattice(1, 1, nx, order_x=8)
        found = solve(case.law, lattice, u, ("drift_x",), length_x=length, r=r, **case.factor)
        u = found.field[0, 0, :, 0]
        return energy_and_slope(u, length, r, case.potential)

    r, length = fsolve(excess, [case.guess, TURN], xtol=1e-11)
    assert max(map(abs, excess((r, length)))) < 1e-10
    assert np.ptp(u) > 1.0
    assert r == pytest.approx(case.published, abs=1e-4)
    # Energies at a steady state err by the square of its own error, (1e-8)^2; r_M is given to 1e-9. The wavenumber
    # follows from the slope, and errs as the state does.
    assert r == pytest.approx(case.r, abs=2e-9)
    assert TURN / length == pytest.approx(case.k, abs=3e-7)


# Gray-Scott. Pearson, Science 261 (1993) 189 (the model, from memory); the states are one-line algebra.
FEED, DECAY = 0.04, 0.05


def test_uniform_reaction_has_its_exact_concentrations():
    # u = (1 - sqrt(1 - 4 (F + k)^2/F))/2, v = F (1 - u)/(F + k).
    u = (1.0 - np.sqrt(1.0 - 4.0 * (FEED + DECAY) ** 2 / FEED)) / 2.0
    exact = [u, FEED * (1.0 - u) / (FEED + DECAY)]
    assert exact == pytest.approx([0.2820550528, 0.3190866432], abs=1e-10)
    start = 0.3 + 0.02 * np.cos(TURN * np.arange(12) / 12)[:, None]
    case = {"length_x": 1.0, "F": FEED, "k": DECAY}
    found = solve("gray-scott", Lattice(1, 1, 12), np.tile(start, (1, 2)), residual_rms=1e-14, **case)
    # The slowest decay is 0.02: a residual of 1e-14 leaves less than 1e-12.
    assert np.abs(found.field - exact).max() < 1e-12


def test_uniform_reactions_meet_in_a_fold():
    # At k = sqrt(F)/2 - F = 0.06 both states are u = 1/2, v = F/(2 (F + k)), and the Jacobian is singular there.
    k = np.sqrt(FEED) / 2.0 - FEED
    assert k == pytest.approx(0.06, abs=1e-15)
    field = np.tile([0.5, FEED / (2.0 * (FEED + k))], (12, 1))
    matrix = jacobian("gray-scott", Lattice(1, 1, 12), field, length_x=1.0, F=FEED, k=k).toarray()
    sizes = np.sort(np.abs(np.linalg.eigvals(matrix)))
    assert sizes[0] < 1e-15
    assert sizes[1] > 1e-3
