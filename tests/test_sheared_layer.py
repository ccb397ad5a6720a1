"""Kolmogorov flow: two-dimensional Navier-Stokes driven by sin(n y), on [0, 2 pi]^2.

Chandler and Kerswell, J. Fluid Mech. 722 (2013) 554-595 and Lucas and Kerswell, J. Fluid Mech. 750 (2014)
518-554 (scaling; Re_c = 9.9669 at n = 4 from memory). Thresholds with more digits and the first steady state
are an independent recomputation (linear stability in Fourier modes; pseudo-spectral simulation on 48^2 nodes,
good to about 1e-6), not published.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.sparse import csc_array, diags_array
from scipy.sparse.linalg import eigs

from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.starts.noise import random_field
from lattice.starts.stepper import Stepper
from tests.solving import TURN, Real, Solved, jacobian, limit, nodes, observed_order, solve

LAW = "kolmogorov"
BOX = {"length_x": TURN, "length_y": TURN}
FORCED = 4
"""Waves of the force along y."""
SECOND = {2: (2, -1), 8: (205 / 72, -8 / 5, 1 / 5, -8 / 315, 1 / 560)}
"""Central second derivative, one side, sign changed: Fornberg, Math. Comp. 51 (1988) 699 (recomputed)."""


def laminar(shape: tuple[int, int], re: float, order: int) -> Real:
    """Return the lattice's own laminar flow, vorticity and streamfunction.

    om = -(Re/n) cos(n y) where -lap cos(n y) = n^2 cos(n y); the difference gives n_h^2 instead, and with it
    om = -(n Re/n_h^2) cos(n y), psi = om/n_h^2 (derived); for order 2, n_h^2 = (2 - 2 cos(n h))/h^2.
    """
    h = TURN / shape[0]
    square = sum((2 if j else 1) * w * np.cos(FORCED * h * j) for j, w in enumerate(SECOND[order])) / h**2
    om = np.tile(-(FORCED * re / square) * np.cos(FORCED * nodes(shape[0], TURN))[:, None], (1, shape[1]))
    return np.stack([om, om / square], axis=-1)


def flat(shape: tuple[int, int], order: int = 8) -> Lattice:
    """Return a steady lattice."""
    return Lattice(1, *shape, dimensions=2, order_x=order, order_y=order)


@pytest.mark.parametrize("order", [2, 8])
def test_laminar_flow_has_its_exact_discrete_form(order, monkeypatch):
    if order == 2:
        monkeypatch.setenv("LATTICE_KERNELS", "numpy")  # compiling would take longer than solving
    shape, re = (20, 12), 8.0
    exact = laminar(shape, re, order)
    y, x = nodes(shape[0], TURN)[:, None], nodes(shape[1], TURN)
    disturbed = exact + 0.1 * np.stack([np.cos(x + y), np.sin(x - 2.0 * y)], axis=-1)
    found = solve(LAW, flat(shape, order), disturbed, (), residual_rms=1e-12, **BOX, Re=re)
    # What is left is the residual, 1e-12 at most, over the slowest decay, 1/Re.
    assert np.abs(found.field[0] - exact).max() < 1e-11
    # Five nodes on a wave: -om(0) is the published Re/n up to (4 h)^p times a small factor.
    assert -found.field[0, 0, 0, 0] == pytest.approx(re / FORCED, rel={2: 0.2, 8: 5e-3}[order])


def fastest_growth(re: float, shape: tuple[int, int]) -> float:
    """Return the fastest growth about the laminar flow, from J v = -rate M v with M zero for constraints."""
    matrix = csc_array(jacobian(LAW, flat(shape), laminar(shape, re, 8), **BOX, Re=re))
    mass = diags_array(np.tile([1.0, 0.0], shape[0] * shape[1])).tocsc()
    # Nearest to a small decay: the pair that becomes unstable, the neutral mean vorticity, one wave more.
    start = np.random.default_rng(0).standard_normal(matrix.shape[0])
    rates, vectors = eigs(matrix, k=4, M=mass, sigma=-0.02, v0=start)
    om = vectors[::2]
    is_wave = np.abs(om.mean(axis=0)) < 0.5 * np.sqrt(np.mean(np.abs(om) ** 2, axis=0))
    return float(-rates[is_wave].real.min())


def test_laminar_flow_loses_stability_at_the_critical_reynolds_number():
    counts = (24, 32, 40)
    found = [brentq(lambda re, n=n: fastest_growth(re, (n, n // 2)), 9.5, 10.5, xtol=1e-7) for n in counts]
    assert observed_order(counts, [re - 9.9669226705 for re in found]) == pytest.approx(8.0, abs=0.5)
    # The finest lattice errs by 9e-5; six nodes on a wave of the coarsest make extrapolation good to a hundredth.
    assert limit(counts, found, 8) == pytest.approx(9.9669226705, abs=3e-6)
    assert limit(counts, found, 8) == pytest.approx(9.9669, abs=1e-4)


COUNTS = (20, 24, 28, 32)
RE = 11.0


@pytest.fixture(scope="module")
def steady() -> list[Solved]:
    """March noise towards the first steady state, and solve for it on lattices of growing resolution."""
    law, shape = load_law(LAW), (16, 16)
    stepper = Stepper(law, shape, (TURN, TURN), {"Re": RE, "n": float(FORCED)}, 0.2)
    spectrum = stepper.to_spectrum(random_field(law, shape, (TURN, TURN), 1, 1.0))
    spectrum = stepper.advance(spectrum, 60.0)
    return [
        solve(LAW, flat((n, n)), stepper.to_field(spectrum, (n, n)), ("drift_x",), **BOX, Re=RE)
        for n in COUNTS
    ]


def test_first_steady_state_dissipates_what_simulations_say(steady):
    # D = <|grad u|^2>/Re = <om^2>/Re over D_lam = Re/(2 n^2): 0.765660 by independent recomputation.
    ratios = [np.mean(s.field[..., 0] ** 2) / RE / (RE / (2.0 * FORCED**2)) for s in steady]
    assert observed_order(COUNTS, [r - 0.765660 for r in ratios]) == pytest.approx(8.0, abs=0.6)
    assert limit(COUNTS[1:], ratios[1:], 8) == pytest.approx(0.765660, abs=4e-6)


def test_first_steady_state_has_the_energy_simulations_give(steady):
    # E = <|u|^2>/2 = <psi om>/2 over E_lam = Re^2/(4 n^4): 0.970342 by independent recomputation.
    ratios = [np.mean(s.field[..., 0] * s.field[..., 1]) / 2.0 / (RE**2 / (4.0 * FORCED**4)) for s in steady]
    assert limit(COUNTS[1:], ratios[1:], 8) == pytest.approx(0.970342, abs=3e-6)


def test_first_steady_state_takes_up_what_it_dissipates(steady):
    # <u sin n y> = <|grad u|^2>/Re on a steady state (derived); u = psi_y, so <u sin n y> = -n <psi cos n y>.
    errors = []
    for state, n in zip(steady, COUNTS, strict=True):
        om, psi = state.field[0, ..., 0], state.field[0, ..., 1]
        power = -FORCED * np.mean(psi * np.cos(FORCED * nodes(n, TURN))[:, None])
        errors.append(power / (np.mean(om**2) / RE) - 1.0)
        assert abs(state.values["drift_x"]) < 1e-11
        assert abs(om.mean()) < 1e-12
        assert abs(psi.mean()) < 1e-9
    # The truncation of several terms, still of mixed order on these lattices.
    assert abs(errors[-1]) < 3e-4
    assert observed_order(COUNTS, errors) > 6.0
