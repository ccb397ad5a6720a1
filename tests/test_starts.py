"""Starts: marched windows, stored states, waves and arrays, on one rank and on several."""

from __future__ import annotations

import re
from pathlib import Path

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpi4py import MPI
from scipy.signal import resample
from scipy.special import ellipj

from lattice.errors import InputError, StateFileError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law, read_law
from lattice.starts import STARTS
from lattice.starts.frame import frame_of_slice, frame_that_aligns
from lattice.starts.interpolation import Interpolator, interpolation_matrix
from lattice.starts.march import blend_weight, samples_in
from lattice.starts.options import ArrayOptions, MarchOptions, StateOptions, WaveOptions, WavesOptions
from lattice.starts.stepper import Stepper
from lattice.starts.streaming import on_root
from lattice.store.statefile import write_state
from lattice.store.statemeta import StateMeta
from tests.mpi import run_ranks

TURN = 2.0 * np.pi
ALONE = MPI.COMM_SELF


def begin(kind, options, lattice, values, law):
    """Return the whole field and the values of a start on one rank."""
    return STARTS[kind](options, lattice, values, law, Block.whole(lattice), ALONE)


def film(**values: float) -> dict[str, float]:
    return {"period": 20.0, "length_x": 22.0, "drift_x": 0.0, **values}


def wavy(lattice: Lattice, components: int, seed: int = 0) -> np.ndarray:
    """Return a smooth periodic field: a few random low modes."""
    generator = np.random.default_rng(seed)
    t, y, x = (np.arange(n) / n for n in lattice.shape)
    field = np.zeros((*lattice.shape, components))
    for kt, ky, kx in ((0, 0, 0), (1, 0, 1), (-1, 1, 2), (2, -1, 0)):
        phase = TURN * (kt * t[:, None, None] + (ky if lattice.ny > 1 else 0) * y[:, None] + kx * x)
        field += generator.standard_normal(components) * np.cos(phase + generator.uniform(0, TURN))[..., None]
    return field


# Interpolation.

COUNTS = st.integers(1, 40)


@settings(deadline=None, max_examples=200)
@given(COUNTS, COUNTS, st.integers(0, 20), st.floats(0.0, 6.0))
def test_interpolation_is_exact_on_what_both_lattices_carry(old, new, mode, phase):
    # Strictly below both Nyquist modes.
    mode = min(mode, (min(old, new) - 1) // 2)
    given_values = np.cos(TURN * mode * np.arange(old) / old + phase)
    wanted = np.cos(TURN * mode * np.arange(new) / new + phase)
    assert np.abs(interpolation_matrix(old, new) @ given_values - wanted).max() < 1e-13 * old


@settings(deadline=None, max_examples=200)
@given(COUNTS, COUNTS, st.integers(0, 2**32 - 1))
def test_interpolation_agrees_with_scipy_resampling(old, new, seed):
    # scipy.signal.resample: truncated or padded Fourier series, the Nyquist mode shared as here.
    values = np.random.default_rng(seed).standard_normal(old)
    assert np.abs(interpolation_matrix(old, new) @ values - resample(values, new)).max() < 1e-12


@settings(deadline=None)
@given(COUNTS, COUNTS)
def test_refining_and_coming_back_is_the_identity(few, more):
    few, more = sorted((few, more))
    there_and_back = interpolation_matrix(more, few) @ interpolation_matrix(few, more)
    assert np.abs(there_and_back - np.eye(few)).max() < 1e-12


@pytest.mark.parametrize("nodes", [1, 2, 7, 12])
def test_equal_nodes_are_copied_exactly(nodes):
    assert np.array_equal(interpolation_matrix(nodes, nodes), np.eye(nodes))


def test_rows_of_a_matrix_do_not_depend_on_who_makes_them():
    whole = interpolation_matrix(12, 31)
    assert np.array_equal(
        np.vstack([interpolation_matrix(12, 31, 0, 11), interpolation_matrix(12, 31, 11)]), whole
    )


@pytest.mark.parametrize("new", [(9, 8, 10), (6, 8, 10), (9, 6, 7), (1, 5, 21)])
def test_slabs_of_any_size_give_the_same_block(new):
    old = (6, 8, 10)
    field = np.random.default_rng(0).standard_normal((*old, 2))
    axes = [resample(field, new[0], axis=0)]
    axes.append(resample(axes[0], new[1], axis=1))
    wanted = resample(axes[1], new[2], axis=2)
    block = Block(0, new[0], 1, 4, 2, 7)
    for levels in (1, 4, 6):
        slabs = ((first, field[first : first + levels]) for first in range(0, 6, levels))
        owned = Interpolator(old, new, block).gather(slabs, 2)
        assert np.abs(owned - wanted[block.slices]).max() < 1e-13


# The marched window.


def test_blend_weights_of_a_level_add_up_to_one():
    for nt, blend in ((20, 0.3), (7, 0.5), (11, 0.0), (5, 0.99), (64, 0.31)):
        total = np.zeros(nt)
        for sample in range(samples_in(nt, blend)):
            total[sample % nt] += blend_weight(sample, nt, blend)
        assert np.abs(total - 1.0).max() < 1e-15


def test_blend_weight_has_two_continuous_derivatives():
    # Second differences stay bounded by the smoothstep's largest second derivative, 10/sqrt(3).
    nt, blend = 4000, 0.5
    weights = np.array([blend_weight(sample, nt, blend) for sample in range(nt)])
    second = np.diff(np.concatenate([[0.0, 0.0], weights]), 2) * (blend * nt) ** 2
    assert np.abs(second).max() < 10.0 / np.sqrt(3.0) + 0.01
    assert abs(second[0]) < 0.1
    assert abs(second[int(blend * nt)]) < 0.1


def test_window_is_the_marched_flow_blended_into_its_continuation():
    law, values = load_law("kuramoto-sivashinsky"), film(drift_x=0.3, period=6.0)
    lattice, options = Lattice(20, 1, 32), MarchOptions(seed=3, spin_up=5.0, dt=0.05, blend=0.4)
    field, found = begin("march", options, lattice, values, law)
    assert found == values
    stepper = Stepper(law, (1, 32), (1.0, 22.0), values, 0.05)
    from lattice.starts.noise import random_field

    start = stepper.advance(stepper.to_spectrum(random_field(law, (1, 32), (1.0, 22.0), 3, 0.1)), 5.0)

    def frame(time):
        k = TURN / 22.0 * np.arange(17)
        lab = stepper.to_field(stepper.advance(start, time))[0, :, 0]
        return np.fft.irfft(np.fft.rfft(lab) * np.exp(1j * k * 0.3 * time), 32)

    for level in (0, 3, 8, 15):
        s = min(1.0, level / 8.0)
        w = s**3 * (10 - 15 * s + 6 * s**2)
        wanted = w * frame(0.3 * level) + (1.0 - w) * frame(0.3 * level + 6.0)
        assert np.abs(field[level, 0, :, 0] - wanted).max() < 1e-6


def test_window_of_a_drifting_wave_is_steady_in_its_frame():
    law, m = load_law("korteweg-de-vries"), 0.9
    # Cnoidal wave (from memory; residual recomputed): L = 7.36597746670907, c = 2.168 at kappa = 0.7, u0 = 0.1.
    length, speed, nx, time = 7.36597746670907, 2.168, 32, 1.4
    wave = 0.1 + 2.0 * 0.49 * m * ellipj(0.7 * np.arange(nx) * length / nx, m)[1] ** 2
    stepper = Stepper(law, (1, nx), (1.0, length), {}, 0.005)
    first = stepper.to_spectrum(wave[None, :, None])
    last = stepper.advance(first, time)
    aligned = frame_that_aligns(stepper.modes, first, last, time, ("x",))
    assert aligned["drift_x"] == pytest.approx(speed, abs=1e-6)
    moving = frame_of_slice(stepper.modes, first, stepper.operator.rate(first), {}, ("drift_x",))
    assert moving["drift_x"] == pytest.approx(speed, abs=1e-9)


def test_travelling_film_wave_and_its_drift_are_found_from_noise():
    # L = pi*sqrt(15): abs(c) = 0.3877627861, <u^2> = 1.3351206129 by independent recomputation; the wave is the
    # attractor for 13.005 < (L/pi)^2 < 17.397 (Kevrekidis, Nicolaenko and Scovel 1990, from memory).
    law, values = load_law("kuramoto-sivashinsky"), film(length_x=12.1673360279, period=1.0)
    # The error of the step, 2e-6 here, falls 16 times when it is halved.
    options = MarchOptions(seed=1, spin_up=200.0, dt=0.05, match_drift=("x",))
    field, found = begin("march", options, Lattice(1, 1, 32), values, law)
    assert abs(found["drift_x"]) == pytest.approx(0.3877627861, abs=5e-6)
    assert np.mean(field**2) == pytest.approx(1.3351206129, abs=5e-6)
    values["period"] = 15.0
    field, aligned = begin("march", options, Lattice(24, 1, 32), values, law)
    assert aligned["drift_x"] == pytest.approx(found["drift_x"], abs=5e-6)
    assert np.abs(field - field[:1]).max() < 1e-5


def test_drift_is_found_along_both_axes():
    law = read_law("own", ("u_t + 0.3*u_x - 0.7*u_y = 0",), ("u",), {}, 2)
    stepper = Stepper(law, (18, 20), (5.0, 6.0), {}, 0.1)
    y, x = np.meshgrid(np.arange(18) / 18, np.arange(20) / 20, indexing="ij")
    slope = np.cos(TURN * x) + np.sin(TURN * (2 * x - y)) + 0.5 * np.cos(TURN * 2 * y)
    first = stepper.to_spectrum(slope[..., None])
    last = stepper.advance(first, 2.0)
    aligned = frame_that_aligns(stepper.modes, first, last, 2.0, ("x", "y"))
    assert aligned == pytest.approx({"drift_x": 0.3, "drift_y": -0.7}, abs=1e-12)
    only = frame_that_aligns(stepper.modes, first, stepper.modes.shift(last, 0.0, -1.4), 2.0, ("x",))
    assert only == pytest.approx({"drift_x": 0.3}, abs=1e-12)
    moving = frame_of_slice(stepper.modes, first, stepper.operator.rate(first), {}, ("drift_x", "drift_y"))
    assert moving == pytest.approx({"drift_x": 0.3, "drift_y": -0.7}, abs=1e-12)


def test_running_mean_becomes_a_source():
    # Steady film in the integral form: the mean falls at the rate <grad(phi)^2>/2, which a source must balance.
    law = load_law("kuramoto-sivashinsky-2d")
    values = {
        "period": 4.0,
        "length_x": 8.0,
        "length_y": 8.0,
        "drift_x": 0.0,
        "drift_y": 0.0,
        "source_phi": 0.0,
    }
    options = MarchOptions(seed=0, amplitude=0.3, spin_up=60.0, dt=0.1, mean={"phi": 0.5})
    for nt in (1, 6):
        field, found = begin("march", options, Lattice(nt, 16, 16, 2), values, law)
        slopes = [np.gradient(np.pad(field[0, ..., 0], 9, mode="wrap"), 0.5, axis=axis) for axis in (0, 1)]
        assert found["source_phi"] == pytest.approx(
            0.5 * sum(np.mean(s[9:-9, 9:-9] ** 2) for s in slopes), rel=0.15
        )
        assert np.mean(field, axis=(1, 2, 3)) == pytest.approx(0.5, abs=1e-4)
        assert np.abs(field - field[:1]).max() < 1e-3


def test_finer_marcher_is_sampled_at_the_lattice():
    law, values = load_law("kuramoto-sivashinsky"), film()
    fields = [
        begin("march", MarchOptions(spin_up=5.0, dt=0.02, shape=shape), Lattice(6, 1, 32), values, law)[0]
        for shape in (None, (64,))
    ]
    assert np.abs(fields[0] - fields[1]).max() < 1e-6
    assert not np.array_equal(*fields)


def test_marched_constraint_component_satisfies_its_constraint():
    law = load_law("kolmogorov")
    values = {"period": 1.0, "length_x": TURN, "length_y": TURN, "Re": 20.0, "n": 2.0}
    field, _ = begin("march", MarchOptions(spin_up=2.0, dt=0.05), Lattice(3, 12, 12, 2), values, law)
    k = np.fft.fftfreq(12, 1 / 12)
    square = k[:, None] ** 2 + k[None, :] ** 2
    laplacian = np.fft.ifft2(-square * np.fft.fft2(field[..., 1], axes=(1, 2)), axes=(1, 2)).real
    assert np.abs(field[..., 0] + laplacian).max() < 1e-12
    assert np.abs(field[..., 1].mean(axis=(1, 2))).max() < 1e-15


def test_step_is_chosen_and_progress_is_told():
    law, lines = load_law("kuramoto-sivashinsky"), []
    lattice = Lattice(32, 1, 32)
    STARTS["march"](
        MarchOptions(spin_up=40.0), lattice, film(), law, Block.whole(lattice), ALONE, lines.append
    )
    text = "\n".join(lines)
    told = re.search(
        r"march: window of 20, dt = (\S+), error of a step by halving (\S+)$", text, re.MULTILINE
    )
    assert "march: spin-up 40 of 40" in text
    assert 0.01 < float(told[1]) < 0.5
    assert float(told[2]) <= 1e-6


@pytest.mark.parametrize(
    ("options", "name", "match"),
    [
        (MarchOptions(shape=(8, 8)), "burgers", r"start.shape must be \[nx\] for this law, got \[8, 8\]"),
        (
            MarchOptions(match_drift=("x",)),
            "burgers",
            "axes along which law burgers is the same everywhere, got 'x'",
        ),
        (MarchOptions(amplitude=-1.0), "burgers", "noise amplitude must be positive"),
        (MarchOptions(dt=-1.0), "burgers", "time step must be positive"),
    ],
)
def test_unusable_march_options_are_refused(options, name, match):
    values = {"period": 1.0, "length_x": TURN}
    with pytest.raises(InputError, match=match):
        begin("march", options, Lattice(4, 1, 16), values, load_law(name))


# Any number of ranks.


@pytest.fixture(scope="module")
def stored(tmp_path_factory) -> tuple[Path, np.ndarray, StateMeta]:
    """A stored field of the film law on 10 levels of 16 nodes."""
    lattice, law = Lattice(10, 1, 16), load_law("kuramoto-sivashinsky")
    values = film(period=7.5, drift_x=-0.2, dispersion=0.4, source_u=0.01)
    meta = StateMeta.of_law(law, lattice, values)
    path = tmp_path_factory.mktemp("stored") / "state.h5"
    field = wavy(lattice, 1)
    write_state(path, field, Block.whole(lattice), meta, ALONE)
    return path, field, meta


ON_RANKS = """
    import hashlib, json, sys
    import numpy as np
    from mpi4py import MPI
    from lattice.geometry.block import Block
    from lattice.geometry.lattice import Lattice
    from lattice.laws.catalogue import load_law
    from lattice.starts import STARTS
    from lattice.starts.options import ArrayOptions, MarchOptions, StateOptions

    comm = MPI.COMM_WORLD
    state, array, saved = sys.argv[1:]

    def parts(count, nodes):
        bounds = [nodes * n // count for n in range(count + 1)]
        return list(zip(bounds, bounds[1:]))

    def begin(kind, options, name, lattice, values):
        # Odd rank counts split time, even ones time and x.
        law, across = load_law(name), 2 if comm.size % 2 == 0 else 1
        levels, columns = parts(comm.size // across, lattice.nt), parts(across, lattice.nx)
        block = Block(*levels[comm.rank // across], 0, lattice.ny, *columns[comm.rank % across])
        owned, found = STARTS[kind](options, lattice, values, law, block, comm)
        gathered = comm.gather((block, owned, found))
        if comm.rank == 0:
            whole = np.zeros((*lattice.shape, len(law.components)))
            for b, o, f in gathered:
                assert o.shape == (*b.shape, len(law.components))
                whole[b.slices] = o
                assert f == found
            np.save(f"{saved}-{kind}.npy", whole)
            print(kind, hashlib.sha256(whole.tobytes()).hexdigest(), json.dumps(found))

    values = {"period": 2.0, "length_x": 20.0, "length_y": 18.0, "drift_x": 0.1, "b": 1.0, "c": -1.0}
    march = MarchOptions(seed=2, amplitude=0.3, spin_up=3.0, match_drift=("y",))
    begin("march", march, "ginzburg-landau-2d", Lattice(11, 10, 12, 2), values)
    begin("state", StateOptions(state), "kuramoto-sivashinsky", Lattice(13, 1, 25), {})
    begin("array", ArrayOptions(array), "kuramoto-sivashinsky", Lattice(13, 1, 25), {})
"""


def test_starts_are_the_same_on_any_number_of_ranks(stored, tmp_path):
    path, field, _ = stored
    array = tmp_path / "array.npy"
    np.save(array, field[:, 0])
    wanted = resample(resample(field, 13, axis=0), 25, axis=2)
    marches = set()
    for ranks in (1, 2, 3, 5):
        run = run_ranks(ranks, ON_RANKS, path, array, tmp_path / "whole", timeout=100.0)
        printed = run.stdout.splitlines()
        marches.add(printed[0])
        assert printed[0].startswith("march ")
        for kind in ("state", "array"):
            assert np.abs(np.load(tmp_path / f"whole-{kind}.npy") - wanted).max() < 1e-13
    # The march bit for bit, with the drift it found.
    assert len(marches) == 1


FAILING = """
    import sys
    from mpi4py import MPI
    from lattice.errors import InputError, LatticeError
    from lattice.geometry.block import Block
    from lattice.geometry.lattice import Lattice
    from lattice.laws.catalogue import load_law, read_law
    from lattice.starts import STARTS
    from lattice.starts.options import ArrayOptions, MarchOptions, StateOptions

    comm = MPI.COMM_WORLD
    law = load_law("kuramoto-sivashinsky")
    runaway = read_law("own", ("u_t = u**2 + 0.01*u_xx",), ("u",), {}, 1)
    cases = [
        ("march", MarchOptions(spin_up=3.0, dt=0.01, amplitude=1.0, mean={"u": 1.0}), runaway),
        ("march", MarchOptions(amplitude=-1.0), law),
        ("state", StateOptions("missing.h5"), law),
        ("array", ArrayOptions(sys.argv[1]), law),
    ]
    for kind, options, law in cases:
        lattice = Lattice(8, 1, 16)
        block = Block(4 * comm.rank, 4 * comm.rank + 4, 0, 1, 0, 16)
        try:
            STARTS[kind](options, lattice, {"period": 1.0, "length_x": 6.0}, law, block, comm)
            text = "no error"
        except LatticeError as error:
            text = f"{isinstance(error, InputError)} {error}"
        texts = comm.gather(text)
        if comm.rank == 0:
            assert len(set(texts)) == 1, texts
            print(texts[0])
"""


def test_what_stops_rank_0_stops_all_ranks_with_one_message(tmp_path):
    # The array is bad in its last level only, when other slabs could already be under way.
    bad = np.zeros((8, 16))
    bad[7, 3] = np.nan
    np.save(tmp_path / "bad.npy", bad)
    lines = run_ranks(2, FAILING, tmp_path / "bad.npy").stdout.splitlines()
    assert len(lines) == 4
    assert re.match(r"False the march of law own must stay bounded", lines[0])
    assert re.match(r"True the noise amplitude must be positive", lines[1])
    assert re.match(r"True .*missing.h5: no such state file", lines[2])
    assert re.match(
        r"True .*bad.npy: must hold finite numbers, got nan at level 7, row 0, column 3", lines[3]
    )


def test_unexpected_error_on_rank_0_keeps_its_type_there():
    with pytest.raises(ZeroDivisionError):
        on_root(ALONE, lambda: 1 / 0)


# Stored states.


def test_stored_state_on_its_own_lattice_is_an_exact_copy(stored):
    path, field, meta = stored
    copied, values = begin(
        "state", StateOptions(str(path)), meta.lattice, {}, load_law("kuramoto-sivashinsky")
    )
    assert np.array_equal(copied, field)
    assert values == meta.values


def test_values_of_the_job_override_those_of_the_stored_state(stored):
    path, _, meta = stored
    given_values = {"period": 8.0, "dispersion": 0.0}
    law = load_law("kuramoto-sivashinsky")
    _, values = begin("state", StateOptions(str(path)), meta.lattice, given_values, law)
    assert values == {**meta.values, **given_values}


@pytest.mark.parametrize("shape", [(10, 32), (20, 16), (7, 21), (1, 16)])
def test_stored_state_is_interpolated_spectrally(stored, shape):
    path, field, _ = stored
    law, lattice, lines = load_law("kuramoto-sivashinsky"), Lattice(shape[0], 1, shape[1]), []
    whole, _ = STARTS["state"](
        StateOptions(str(path)), lattice, {}, law, Block.whole(lattice), ALONE, lines.append
    )
    assert np.abs(whole - resample(resample(field, shape[0], axis=0), shape[1], axis=2)).max() < 1e-13
    assert lines == [f"state: 10 x 16 levels and nodes interpolated to {shape[0]} x {shape[1]}"]


def test_stored_state_of_another_law_is_refused(stored):
    path, _, _ = stored
    with pytest.raises(InputError, match=r"must hold components u, v in 1 dimension\(s\), got u in 1"):
        begin("state", StateOptions(str(path)), Lattice(10, 1, 16), {}, load_law("ginzburg-landau"))


def test_damaged_state_is_refused(stored, tmp_path):
    broken = tmp_path / "broken.h5"
    broken.write_bytes(stored[0].read_bytes()[:-500])
    with pytest.raises(StateFileError, match="truncated"):
        begin("state", StateOptions(str(broken)), Lattice(10, 1, 16), {}, load_law("kuramoto-sivashinsky"))


# Waves.


def test_waves_add_up_as_documented():
    law, lattice = load_law("ginzburg-landau-2d"), Lattice(6, 8, 10, 2)
    modes = (WaveOptions("u", 0.7, kt=1, kx=2, ky=-3, phase=0.4), WaveOptions("v", 1.5, kx=5))
    values = {"period": 3.0, "length_x": 5.0, "length_y": 4.0}
    field, found = begin("waves", WavesOptions(modes, {"v": 0.25}), lattice, values, law)
    t, y, x = np.meshgrid(*(np.arange(n) * h for n, h in ((6, 0.5), (8, 0.5), (10, 0.5))), indexing="ij")
    u = 0.7 * np.cos(TURN * (2 * x / 5.0 - 3 * y / 4.0 - t / 3.0) + 0.4)
    assert np.abs(field[..., 0] - u).max() < 1e-14
    assert np.abs(field[..., 1] - 0.25 - 1.5 * np.cos(TURN * 5 * x / 5.0)).max() < 1e-13
    assert found == values


def test_blocks_of_waves_fit_the_whole():
    law, lattice = load_law("burgers"), Lattice(9, 1, 14)
    options = WavesOptions((WaveOptions(amplitude=2.0, kt=-2, kx=3, phase=1.0),))
    whole, _ = begin("waves", options, lattice, {}, law)
    block = Block(2, 7, 0, 1, 5, 14)
    part, _ = STARTS["waves"](options, lattice, {}, law, block, ALONE)
    assert np.array_equal(part, whole[block.slices])


@pytest.mark.parametrize(
    ("wave", "match"),
    [
        (WaveOptions("w"), "component must be one of u, v, got 'w'"),
        (WaveOptions(None), "component must be one of u, v, got None"),
        (
            WaveOptions("u", kx=8),
            "kx must be at most half of lattice.nx = 14 in size, got 8; raise lattice.nx",
        ),
        (WaveOptions("u", kt=-5), "kt must be at most half of lattice.nt = 9 in size, got -5"),
        (WaveOptions("u", ky=1), "ky must be at most half of lattice.ny = 1 in size, got 1"),
    ],
)
def test_waves_that_do_not_fit_are_refused(wave, match):
    with pytest.raises(InputError, match=match):
        begin("waves", WavesOptions((wave,)), Lattice(9, 1, 14), {}, load_law("ginzburg-landau"))


# Arrays.

SHAPES = [
    ("burgers", (6, 1, 10, 1), (6, 10)),
    ("burgers", (6, 1, 10, 1), (6, 10, 1)),
    ("burgers", (6, 1, 10, 1), (6, 1, 10, 1)),
    ("ginzburg-landau", (6, 1, 10, 2), (6, 10, 2)),
    ("film-2d", (6, 8, 10, 1), (6, 8, 10)),
    ("ginzburg-landau-2d", (6, 8, 10, 2), (6, 8, 10, 2)),
]


@pytest.mark.parametrize(("name", "shape", "given_shape"), SHAPES)
@pytest.mark.parametrize("kind", ["npy", "h5"])
def test_arrays_of_every_shape_are_read(name, shape, given_shape, kind, tmp_path):
    lattice = Lattice(*shape[:3], dimensions=2 if shape[1] > 1 else 1)
    field = wavy(lattice, shape[3]).astype(np.float32)
    path = tmp_path / f"field.{kind}"
    if kind == "npy":
        np.save(path, field.reshape(given_shape))
    else:
        with h5py.File(path, "w") as file:
            file["u"] = field.reshape(given_shape)
    read, values = begin("array", ArrayOptions(str(path)), lattice, {"period": 2.0}, load_law(name))
    assert np.array_equal(read, field)
    assert values == {"period": 2.0}


def test_named_dataset_is_interpolated_to_the_lattice(tmp_path):
    coarse, fine = Lattice(6, 1, 10), Lattice(9, 1, 24)
    with h5py.File(tmp_path / "field.h5", "w") as file:
        file["run/velocity"] = wavy(coarse, 1)[:, 0, :, 0]
    options = ArrayOptions(str(tmp_path / "field.h5"), "run/velocity")
    read, _ = begin("array", options, fine, {}, load_law("burgers"))
    assert np.abs(read - wavy(fine, 1)).max() < 1e-13


def saved(folder: Path, content: object) -> str:
    path = folder / "field.npy"
    if isinstance(content, bytes):
        path.write_bytes(content)
    else:
        np.save(path, content)
    return str(path)


@pytest.mark.parametrize(
    ("content", "match"),
    [
        (
            np.zeros((4, 5, 6)),
            r"field.npy: must have shape \(nt, nx, 1\) or \(nt, nx\) for law burgers, got \(4, 5, 6\)",
        ),
        (np.zeros(7), r"must have shape .*, got \(7,\)"),
        (np.zeros((0, 7)), r"must have shape .*, got \(0, 7\)"),
        (
            np.zeros((4, 6), complex),
            "must hold real numbers, got complex numbers; store real and imaginary parts",
        ),
        (np.full((4, 6), "a"), "must hold real numbers, got items of type"),
        (np.full((4, 6), np.inf), "must hold finite numbers, got inf at level 0, row 0, column 0"),
        (np.array([[None, {}]], dtype=object), "must be a .npy or HDF5 file with numbers"),
        (b"not an array", "must be a .npy or HDF5 file with numbers"),
        (b"", "must be a .npy or HDF5 file with numbers"),
        (b"\x93NUMPY\x01\x00", "must be a .npy or HDF5 file with numbers"),
    ],
)
def test_unusable_arrays_are_refused(content, match, tmp_path):
    with pytest.raises(InputError, match=match):
        begin("array", ArrayOptions(saved(tmp_path, content)), Lattice(4, 1, 6), {}, load_law("burgers"))


def test_missing_files_and_datasets_are_named(tmp_path):
    law, lattice = load_law("burgers"), Lattice(4, 1, 6)
    with pytest.raises(InputError, match=r"none\.npy: no such array file"):
        begin("array", ArrayOptions(str(tmp_path / "none.npy")), lattice, {}, law)
    with pytest.raises(InputError, match="no such array file"):
        begin("array", ArrayOptions(str(tmp_path)), lattice, {}, law)
    with h5py.File(tmp_path / "field.h5", "w") as file:
        file["run/velocity"] = np.zeros((4, 6))
    with pytest.raises(InputError, match="must be a dataset of the file, got 'run'; it has run/velocity"):
        begin("array", ArrayOptions(str(tmp_path / "field.h5"), "run"), lattice, {}, law)
    with pytest.raises(InputError, match="dataset is for HDF5 files"):
        begin("array", ArrayOptions(saved(tmp_path, np.zeros((4, 6))), "u"), lattice, {}, law)


def test_array_files_cannot_run_code(tmp_path):
    witness = tmp_path / "witness"

    class Hostile:
        def __reduce__(self):
            return (Path.touch, (witness,))

    array = np.empty((4, 6), dtype=object)
    array[:] = Hostile()
    with pytest.raises(InputError):
        begin("array", ArrayOptions(saved(tmp_path, array)), Lattice(4, 1, 6), {}, load_law("burgers"))
    assert not witness.exists()


def test_importing_the_registry_imports_no_start():
    code = "import sys, lattice.starts; print([m for m in sys.modules if m.startswith(('lattice.starts.', 'scipy'))])"
    assert run_ranks(1, code).stdout.strip() == "[]"
