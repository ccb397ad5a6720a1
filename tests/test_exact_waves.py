"""Periodic waves known in closed form, as states of the space-time lattice."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np
import pytest
from mpi4py import MPI
from scipy.special import ellipj, ellipk

from lattice.geometry.lattice import Lattice
from lattice.job.reader import load_job
from lattice.job.writer import job_to_toml
from lattice.laws.catalogue import read_law
from lattice.solve.run import run_job
from tests.solving import TURN, Real, Solved, limit, mean_square, nodes, observed_order, residual, solve


@dataclass(frozen=True)
class EllipticWave:
    """u = c - 1 - 60 P(xi) - 60 P'(xi), xi = x - c t, of u_t + u u_x + u_xx + 4 u_xxx + u_xxxx = 0.

    Kudryashov, Phys. Lett. A 147 (1990) 287 (from memory; coefficients re-derived, residual < 1e-38). P is
    Weierstrass' function with g2 = 1/12 and any g3 between -1/216 and 1/216, shifted by its imaginary half
    period: P = e3 + (e2 - e3) sn^2(w xi | m), e1 > e2 > e3 the roots of 4 z^3 - z/12 - g3, w = sqrt(e1 - e3),
    m = (e2 - e3)/(e1 - e3), L = 2 K(m)/w. Lengths, speeds, periods and mean squares below are an independent
    recomputation.
    """

    g3: float
    length: float
    speed: float
    period: float
    square: float

    @property
    def at(self) -> Callable[[Real], Real]:
        """Return u as a function of xi, from SciPy's elliptic functions."""
        e3, e2, e1 = np.sort(np.roots([4.0, 0.0, -1.0 / 12.0, -self.g3]).real)
        w, m = np.sqrt(e1 - e3), (e2 - e3) / (e1 - e3)
        assert self.length == pytest.approx(2.0 * ellipk(m) / w, rel=1e-13)

        def wave(xi: Real) -> Real:
            sn, cn, dn, _ = ellipj(w * xi, m)
            slope = 2.0 * (e2 - e3) * w * sn * cn * dn
            return self.speed - 1.0 - 60.0 * (e3 + (e2 - e3) * sn**2) - 60.0 * slope

        return wave


WAVES = [
    EllipticWave(0.0, 6.90164361533925598, -2.95727347356950, 2.33378606, 17.2545336025222),
    EllipticWave(0.004, 6.34478975716142036, -3.88388115423229, 1.63362099, 2.27546717979928),
]
COUNTS = (24, 36, 54)
Series = tuple[list[Solved], list[float]]


@pytest.fixture(
    scope="module", params=[(w, p) for w in WAVES for p in (2, 4, 6)], ids=lambda p: f"{p[0].g3}-{p[1]}"
)
def series(request: pytest.FixtureRequest) -> tuple[EllipticWave, int, Series]:
    """Solve for a wave as a time-periodic state in the resting frame on three lattices of one order."""
    wave, order = request.param
    u, found, errors = wave.at, [], []
    for n in COUNTS:
        t, x = nodes(n, wave.period), nodes(n, wave.length)
        exact = u(x - wave.speed * t[:, None])
        rough = exact + 0.02 * np.sqrt(wave.square) * np.cos(2.0 * TURN * x / wave.length)
        lattice = Lattice(n, 1, n, order_t=order, order_x=order)
        # The residual is rounded at 1e-16*|u|/h^4, about 1e-11 on the finest lattice.
        state = solve(
            "kuramoto-sivashinsky", lattice, rough, ("period",), residual_rms=3e-10,
            length_x=wave.length, period=1.02 * wave.period, dispersion=4.0,
        )  # fmt: skip
        found.append(state)
        errors.append(distance_up_to_shift(state.field[:, 0, :, 0], u, wave))
    return wave, order, (found, errors)


def distance_up_to_shift(field: Real, u: Callable[[Real], Real], wave: EllipticWave) -> float:
    """Return the largest difference from the wave at the shift that fits the first harmonic best."""
    n = field.shape[1]
    x = nodes(n, wave.length)
    turned = np.fft.rfft(field[0])[1] / np.fft.rfft(u(x))[1]
    shift = -np.angle(turned) * wave.length / TURN
    t = nodes(field.shape[0], wave.length)[:, None]
    return float(np.abs(field - u(x - shift - np.sign(wave.speed) * t)).max())


def test_elliptic_wave_converges_at_the_nominal_order(series):
    wave, order, (found, errors) = series
    periods = [state.values["period"] - wave.period for state in found]
    squares = [mean_square(state.field, wave.length) - wave.square for state in found]
    assert observed_order(COUNTS, errors) == pytest.approx(order, abs=0.25)
    assert observed_order(COUNTS, squares) == pytest.approx(order, abs=0.3)
    assert abs(periods[-1]) < abs(periods[0])


def test_elliptic_wave_has_its_period_and_mean_square_in_the_limit(series):
    wave, order, (found, _) = series
    periods = [state.values["period"] for state in found]
    squares = [mean_square(state.field, wave.length) for state in found]
    # What Richardson's rule moves the finest value by bounds what it leaves; published digits end at 1e-8.
    for values, exact in ((periods, wave.period), (squares, wave.square)):
        best = limit(COUNTS, values, order)
        assert abs(best - exact) < max(0.2 * abs(best - values[-1]), 1e-8)
    tolerance = {2: 3e-3, 4: 1e-4, 6: 1e-6}[order]
    assert limit(COUNTS, periods, order) == pytest.approx(wave.period, rel=tolerance)
    assert limit(COUNTS, squares, order) == pytest.approx(wave.square, rel=10.0 * tolerance)


def test_elliptic_wave_needs_no_source_and_keeps_its_mean(series):
    _, _, (found, _) = series
    for state in found:
        # Both follow from the conservative form, to the round-off of sums of numbers of size |u|/h^4.
        assert abs(state.values["source_u"]) < 1e-9
        assert abs(state.field.mean()) < 1e-12


JOB = """
law = {{ name = "kuramoto-sivashinsky", parameters = {{ dispersion = 4.0 }} }}
box = {{ period = 2.4, length_x = {length!r} }}
lattice = {{ nt = 36, nx = 36, order_t = 6, order_x = 6 }}
start = {{ kind = "array", file = "wave.npy" }}
solve = {{ free = ["period"], residual_rms = 1e-9 }}
output = {{ picture = false }}
"""


def test_job_finds_the_elliptic_wave_and_stores_it(tmp_path: Path):
    wave, n = WAVES[0], 36
    t, x = nodes(n, wave.length), nodes(n, wave.length)
    np.save(tmp_path / "wave.npy", wave.at(x + t[:, None])[:, None, :, None])
    (tmp_path / "wave.toml").write_text(JOB.format(length=wave.length), encoding="utf-8")
    job = load_job(tmp_path / "wave.toml")
    outcome = run_job(job, tmp_path / "run", MPI.COMM_SELF, [], lambda line: None, job_to_toml(job))
    assert outcome.exit_code == 0
    # Sixth order on this lattice errs by 8e-6 in the period and 8e-4 in the mean square; see the series above.
    summary = json.loads((tmp_path / "run" / "summary.json").read_text(encoding="utf-8"))
    assert summary["scalars"]["period"] == pytest.approx(wave.period, abs=2e-5)
    assert summary["mean_square"] == pytest.approx(wave.square, abs=2e-3)
    with h5py.File(tmp_path / "run" / "state.h5") as file:
        stored = np.squeeze(file["u"][...])
        times = np.squeeze(file["t"][...])
    assert distance_up_to_shift(stored, wave.at, wave) < 5e-4
    assert times[1] - times[0] == pytest.approx(summary["scalars"]["period"] / n, rel=1e-12)


# u_t + 6 u u_x + u_xxx = 0 and its wave: Korteweg and de Vries 1895 (from memory; lengths, speeds and
# residual by independent recomputation).
CNOIDAL = [(0.5, 5.29735622086106, 0.6), (0.9, 7.36597746670907, 2.168)]


@pytest.mark.parametrize(("m", "length", "speed"), CNOIDAL)
def test_cnoidal_wave_is_found_at_its_length_and_speed(m, length, speed, monkeypatch):
    """Find u = u0 + 2 kappa^2 m cn^2(kappa (x - c t) | m) at kappa = 0.7, u0 = 0.1 from its L, c and mean.

    The law conserves energy: its waves come in families, and a wave of given length, speed and mean leaves no
    scalar to solve for. A damping is therefore added and solved for, which must come out zero. The number of
    nodes is odd: odd central differences do not see the sawtooth of an even number.
    """
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")  # compiling would take longer than solving
    damped = read_law("own", ("u_t + 6*u*u_x + u_xxx + damping*u_xx = 0",), ("u",), {"damping": 0.0}, 1)
    kappa, base = 0.7, 0.1
    assert length == pytest.approx(2.0 * ellipk(m) / kappa, rel=1e-13)
    assert speed == pytest.approx(4.0 * kappa**2 * (2.0 * m - 1.0) + 6.0 * base, rel=1e-13)

    def wave(x: Real) -> Real:
        return base + 2.0 * kappa**2 * m * ellipj(kappa * x, m)[1] ** 2

    mean, counts, errors, rests = float(wave(nodes(999, length)).mean()), (49, 65), [], []
    for n in counts:
        x, lattice = nodes(n, length), Lattice(1, 1, n, order_x=8)
        rough = wave(x) + 0.05 * np.cos(2.0 * TURN * x / length)
        case = {"length_x": length, "drift_x": speed}
        found = solve(damped, lattice, rough, ("damping",), means={"u": mean}, **case)
        assert abs(found.values["damping"]) < 1e-12
        errors.append(np.abs(found.field[0, 0, :, 0] - wave(x)).max())
        rests.append(np.abs(residual("korteweg-de-vries", lattice, wave(x), **case)).max())
    assert errors[-1] < 1e-6
    assert observed_order(counts, errors) == pytest.approx(8.0, abs=0.5)
    assert observed_order(counts, rests) == pytest.approx(8.0, abs=1.0)
