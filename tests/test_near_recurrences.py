"""Near recurrences of a march, windows in space and noise: found where theory says, cut where asked for."""

from __future__ import annotations

import numpy as np
import pytest
from mpi4py import MPI

from lattice.errors import InputError, LatticeError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.laws.law import Reflection
from lattice.starts import STARTS
from lattice.starts.folding import shares
from lattice.starts.modes import Modes
from lattice.starts.noise import random_field
from lattice.starts.options import MarchOptions, NoiseOptions, RecurrenceOptions, WindowOptions
from lattice.starts.recurrence import find_recurrences
from lattice.starts.returns import Comparison, ReturnScan, reflected
from lattice.starts.stepper import Stepper

TURN = 2.0 * np.pi
ALONE = MPI.COMM_SELF
FILM = load_law("kuramoto-sivashinsky")
# The attracting periodic state of the film law at nu = 0.127 (L = 2 pi/sqrt(nu)): existence proved by
# P. Zgliczynski, Found. Comput. Math. 4 (2004) 157-185 (from memory); the period is an independent
# recomputation, as is u(t + T/2, x) = u(t, x + L/2).
LENGTH, PERIOD = TURN / np.sqrt(0.127), 17.6719178249


def begin(kind, options, grid, values, law=FILM):
    lines: list[str] = []
    field, found = STARTS[kind](options, grid, values, law, Block.whole(grid), ALONE, lines.append)
    return field, found, lines


def film(**values: float) -> dict[str, float]:
    return {"period": 17.0, "length_x": LENGTH, "drift_x": 0.0, "dispersion": 0.0, "source_u": 0.0, **values}


# Distances.


def test_distance_is_that_of_the_best_shift_and_angle():
    modes, generator = Modes((12, 16), (5.0, 7.0)), np.random.default_rng(0)
    first = modes.from_nodes(generator.standard_normal((3, 12, 16)))
    first[:, 0, 0] = 0.0
    moved = modes.shift(first, 7.0 * 3 / 16, 5.0 * 5 / 12)
    turned = moved.copy()
    turned[1], turned[2] = 0.6 * moved[1] - 0.8 * moved[2], 0.8 * moved[1] + 0.6 * moved[2]
    both = Comparison(modes, np.ones(3), ("x", "y"), (1, 2))
    assert both.distances(both.prepared(first[None]), both.prepared(turned[None]))[0] < 1e-7
    held = Comparison(modes, np.ones(3), ("x", "y"), None)
    assert held.distances(held.prepared(first[None]), held.prepared(turned[None]))[0] > 0.3
    along = Comparison(modes, np.ones(3), (), (1, 2))
    apart = along.distances(along.prepared(first[None]), along.prepared(turned[None]))[0]
    # Without shifts: the mean product of fields moved by random nodes, turned to fit.
    ones = modes.to_nodes(first).reshape(3, -1), modes.to_nodes(turned).reshape(3, -1)
    size = (ones[0] ** 2).sum()
    pair = [ones[n][1] + 1j * ones[n][2] for n in (0, 1)]
    best = (ones[0][0] * ones[1][0]).sum() + abs((pair[0].conj() * pair[1]).sum())
    assert apart == pytest.approx(np.sqrt(2.0 * (size - best) / size), rel=1e-10)


@pytest.mark.parametrize(("x", "y"), [(True, False), (False, True), (True, True), (False, False)])
def test_reflected_spectra_are_those_of_reflected_fields(x, y):
    modes = Modes((9, 12), (2.0, 3.0))
    field = modes.to_nodes(modes.from_nodes(np.random.default_rng(1).standard_normal((2, 9, 12))))
    image = field[:, ::-1] if y else field
    image = image[:, :, ::-1] if x else image
    wanted = np.roll(image, (int(y), int(x)), axis=(1, 2)) * np.array([-1.0, 1.0])[:, None, None]
    found = modes.to_nodes(reflected(modes.from_nodes(field), Reflection(x, y, (-1, 1)), (-1, 1)))
    assert np.abs(found - wanted).max() < 1e-14


def test_flow_that_returns_reflected_is_found_at_half_its_period():
    # sin has the sign that the reflection x -> -x, u -> -u keeps, cos the one it changes.
    modes, half, every = Modes((1, 16), (1.0, TURN)), 6.0, 0.25
    image = (Reflection(True, False, (-1,)), (-1,))
    comparisons = [Comparison(modes, np.ones(1), ("x",), None) for _ in range(2)]
    scan = ReturnScan(comparisons, [image], every, (20, 60), 400)
    x = np.arange(16) * TURN / 16
    for n in range(400):
        turn = np.pi * n * every / half
        kept = (1.5 + np.sin(2 * turn)) * np.sin(x) + np.cos(2 * turn) * np.sin(2 * x)
        changed = np.cos(turn) * np.cos(x) + np.sin(3 * turn) * np.cos(3 * x)
        spectrum = modes.from_nodes(np.roll(kept + changed, n % 7)[None, None])
        scan.add(spectrum, spectrum[None])
    found = [beginning.recurrence for beginning in scan.found()]
    folded = [r for r in found if r.image == 1]
    # Within half a slice: between slices the period is that of a parabola.
    assert [r.period for r in folded[:3]] == pytest.approx([2 * half] * 3, abs=0.5 * every)
    assert max(r.distance for r in folded[:3]) < 1e-6
    plain = [r for r in found if r.image == 0]
    assert [r.period for r in plain[:3]] == pytest.approx([2 * half] * 3, abs=0.5 * every)


@pytest.mark.parametrize("folded", [False, True])
def test_shares_of_every_level_add_up_to_one_and_rise_in_time(folded):
    for nt in (12, 13):
        found = shares(4.0, folded, nt, 0.4)
        times = [share.time for share in found]
        assert times == sorted(times)
        weights = np.zeros(nt)
        for share in found:
            weights[share.level] += share.weight
            # A level shows its own time, or one lag before or after, as an image if folded.
            away = (share.time - share.level * (8.0 if folded else 4.0) / nt) / 4.0
            assert away == pytest.approx(round(away), abs=1e-12)
            assert share.image == (folded and round(away) % 2 == 1)
        assert np.abs(weights - 1.0).max() < 1e-15


# The start.


def test_period_of_the_attracting_state_is_found():
    options = RecurrenceOptions(
        seed=0,
        spin_up=250.0,
        dt=0.1,
        march_time=70.0,
        every=0.5,
        match_drift=("x",),
        shortest=15.0,
        longest=20.0,
    )
    field, found, lines = begin("recurrence", options, Lattice(36, 1, 28), film())
    assert found["period"] == pytest.approx(PERIOD, abs=2e-3)
    assert found["drift_x"] == pytest.approx(0.0, abs=1e-4)
    assert "recurrence: number 1 of" in lines[-1]
    # Half a period later the state is itself, moved by half a length: no seam shows.
    u = field[:, 0, :, 0]
    assert np.abs(np.roll(u, 18, axis=0) - np.roll(u, 14, axis=1)).max() < 0.01


def test_recurrences_are_found_in_two_dimensions():
    # On a narrow film waves along y decay, and what is left is the state in x alone.
    options = RecurrenceOptions(
        seed=0, spin_up=200.0, dt=0.2, march_time=40.0, match_drift=("x", "y"), shortest=7.0, longest=11.0
    )
    values = film(period=9.0, length_y=5.0, drift_y=0.0)
    field, found, _ = begin("recurrence", options, Lattice(24, 8, 28, 2), values, load_law("film-2d"))
    # What is left of the transient after 200 units costs 0.009 (0.002 after 300).
    assert found["period"] == pytest.approx(PERIOD / 2, abs=0.02)
    assert abs(found["drift_x"]) * found["period"] == pytest.approx(LENGTH / 2, abs=0.05)
    assert np.abs(field - field[:, :1]).max() < 1e-6


def test_shift_between_the_ends_becomes_the_drift():
    options = RecurrenceOptions(
        seed=1,
        spin_up=250.0,
        dt=0.1,
        march_time=50.0,
        every=0.4,
        match_drift=("x",),
        shortest=7.0,
        longest=11.0,
    )
    field, found, _ = begin("recurrence", options, Lattice(24, 1, 28), film(period=9.0))
    assert found["period"] == pytest.approx(PERIOD / 2, abs=1e-3)
    assert abs(found["drift_x"]) * found["period"] == pytest.approx(LENGTH / 2, abs=0.01)
    steps = np.abs(np.diff(np.concatenate([field, field[:1]]), axis=0)).max(axis=(1, 2, 3))
    assert steps[-1] < 1.2 * steps.max()
    # The whole period where the drift is held at zero.
    held = RecurrenceOptions(**{**vars(options), "match_drift": (), "longest": 19.0, "reflections": False})
    best = find_recurrences(held, Lattice(24, 1, 28), film(period=9.0), FILM).recurrences
    assert min(abs(r.period - PERIOD) for r in best if r.distance < 0.02) < 0.02
    assert not any(abs(r.period - PERIOD / 2) < 1.0 for r in best if r.distance < 0.5)


def test_a_recurrence_is_picked_by_rank_or_by_time():
    options = {
        "seed": 3,
        "spin_up": 60.0,
        "march_time": 120.0,
        "match_drift": ("x",),
        "longest": 30.0,
        "dt": 0.15,
    }
    grid, values = Lattice(20, 1, 32), film(period=20.0, length_x=22.0)
    found = find_recurrences(RecurrenceOptions(**options), grid, values, FILM).recurrences
    assert [r.distance for r in found] == sorted(r.distance for r in found)
    assert len(found) >= 3
    third = found[2]
    _, picked, lines = begin("recurrence", RecurrenceOptions(**options, pick=3), grid, values)
    assert picked["period"] == pytest.approx(third.period, abs=0.4)
    assert f"recurrence: number 3 of {len(found)}, from t = {third.time:.6g}" in lines[-1]
    _, near, _ = begin("recurrence", RecurrenceOptions(**options, near_time=third.time), grid, values)
    assert near["period"] == pytest.approx(picked["period"], rel=1e-6)
    with pytest.raises(InputError, match=f"start.pick must be at most {len(found)}"):
        begin("recurrence", RecurrenceOptions(**options, pick=999), grid, values)


def test_scans_that_cannot_find_anything_are_refused():
    grid = Lattice(20, 1, 32)
    for options, match in (
        ({"march_time": 10.0}, "start.march_time must exceed the longest period"),
        ({"shortest": 9.0, "longest": 8.0}, "start.longest must exceed start.shortest = 9, got 8"),
    ):
        with pytest.raises(InputError, match=match):
            begin("recurrence", RecurrenceOptions(spin_up=1.0, **options), grid, film())
    calm = RecurrenceOptions(spin_up=50.0, march_time=40.0, dt=0.2)
    with pytest.raises(LatticeError, match="no near recurrence in 40"):
        begin("recurrence", calm, grid, film(length_x=5.0))


# Windows.


def test_window_of_a_larger_box_is_the_flow_where_it_is_not_blended():
    options = WindowOptions(seed=3, spin_up=5.0, dt=0.05, blend=0.4, march_length_x=44.0, blend_space=0.25)
    grid = Lattice(20, 1, 32)
    field, found, _ = begin("window", options, grid, film(period=6.0, length_x=22.0, drift_x=0.3))
    assert found["drift_x"] == 0.3
    stepper = Stepper(FILM, (1, 64), (1.0, 44.0), {}, 0.05)
    start = stepper.advance(stepper.to_spectrum(random_field(FILM, (1, 64), (1.0, 44.0), 3, 0.1)), 5.0)
    for level in (8, 13, 19):
        later = stepper.modes.shift(stepper.advance(start, level * 0.3), 0.3 * level * 0.3, 0.0)
        flow = stepper.to_field(later)[0, :, 0]
        assert np.abs(field[level, 0, 8:, 0] - flow[8:32]).max() < 1e-9
        # In the middle of the zone: half the flow there, half that one length on.
        assert field[level, 0, 4, 0] == pytest.approx(0.5 * (flow[4] + flow[36]), abs=1e-9)


def test_window_of_the_whole_box_is_the_march():
    keys = {"seed": 2, "spin_up": 8.0, "match_drift": ("x",)}
    grid, values = Lattice(12, 1, 24), film(period=5.0)
    march, moved, _ = begin("march", MarchOptions(**keys), grid, values)
    window, found, _ = begin("window", WindowOptions(**keys), grid, values)
    assert np.array_equal(window, march)
    assert found == moved


def test_window_in_two_dimensions_is_cut_along_both_axes():
    law = load_law("film-2d")
    values = {
        "period": 2.0,
        "length_x": 10.0,
        "length_y": 8.0,
        "drift_x": 0.0,
        "drift_y": 0.0,
        "source_u": 0.0,
    }
    options = WindowOptions(spin_up=5.0, dt=0.1, march_length_x=20.0, march_length_y=16.0, blend_space=0.5)
    field, _, _ = begin("window", options, Lattice(6, 12, 16, 2), values, law)
    whole, _, _ = begin(
        "march",
        MarchOptions(spin_up=5.0, dt=0.1),
        Lattice(6, 24, 32, 2),
        {**values, "length_x": 20.0, "length_y": 16.0},
        law,
    )
    assert np.abs(field[:, 6:, 8:] - whole[:, 6:12, 8:16]).max() < 1e-12


def test_marched_box_must_hold_the_window():
    with pytest.raises(
        InputError, match=r"start.march_length_x must be at least .* 22.92.*, got 20; raise it"
    ):
        begin("window", WindowOptions(march_length_x=20.0), Lattice(8, 1, 16), film())
    options = WindowOptions(march_length_x=4 * TURN)
    with pytest.raises(InputError, match="start.march_length_x must be left out: law burgers depends on x"):
        begin("window", options, Lattice(8, 1, 16), {"period": 1.0, "length_x": TURN}, load_law("burgers"))


# Noise.


def test_noise_lies_about_the_waves_that_grow_fastest():
    # Growth k^2 - k^4 is largest at k = 1/sqrt(2) (derived).
    values = film(length_x=400.0, period=60.0)
    field, found, _ = begin("noise", NoiseOptions(seed=5, amplitude=1.3), Lattice(64, 1, 400), values)
    assert found == values
    assert np.sqrt(np.mean(field**2)) == pytest.approx(1.3, rel=1e-12)
    energy = (np.abs(np.fft.rfft2(field[:, 0, :, 0])) ** 2).sum(axis=0)
    k = TURN / 400.0 * np.arange(201)
    mean = (k * energy).sum() / energy.sum()
    assert mean == pytest.approx(np.sqrt(0.5), rel=0.05)
    spread = np.sqrt(((k - mean) ** 2 * energy).sum() / energy.sum())
    # The energy is the square of a Gaussian, whose width is smaller by sqrt(2).
    assert spread == pytest.approx(0.3 * np.sqrt(0.5) / np.sqrt(2.0), rel=0.15)


def test_noise_is_one_field_on_every_lattice_and_any_block():
    values = film(length_x=40.0, period=20.0)
    options = NoiseOptions(seed=1, mean={"u": 0.5})
    coarse, fine = (begin("noise", options, Lattice(n, 1, 2 * n), values)[0] for n in (40, 80))
    assert np.abs(fine[::2, :, ::2] - coarse).max() < 1e-13
    assert coarse.mean() == pytest.approx(0.5, abs=1e-13)
    part, _ = STARTS["noise"](options, Lattice(40, 1, 80), values, FILM, Block(7, 19, 0, 1, 30, 61), ALONE)
    assert np.abs(part - coarse[7:19, :, 30:61]).max() < 1e-13


def test_noise_obeys_constraints_and_has_its_amplitude_in_two_dimensions():
    law, grid = load_law("kolmogorov"), Lattice(9, 32, 32, 2)
    values = {"period": 5.0, "length_x": TURN, "length_y": TURN, "Re": 20.0, "n": 2.0}
    field, _, _ = begin("noise", NoiseOptions(seed=2, amplitude=0.7), grid, values, law)
    assert np.sqrt(np.mean(field[..., 0] ** 2)) == pytest.approx(0.7, rel=1e-12)
    k = np.fft.fftfreq(32, 1 / 32)
    laplacian = np.fft.ifft2(
        -(k[:, None] ** 2 + k**2) * np.fft.fft2(field[..., 1], axes=(1, 2)), axes=(1, 2)
    ).real
    assert np.abs(field[..., 0] + laplacian).max() < 1e-11


def test_unusable_noise_is_refused():
    with pytest.raises(InputError, match="start.width must be positive and finite, got -1"):
        begin("noise", NoiseOptions(width=-1.0), Lattice(8, 1, 16), film())
