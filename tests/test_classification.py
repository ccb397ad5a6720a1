"""What kind a state is, what it repeats, its symmetries, its canonical representative; on one and more ranks.

States are solved where they are cheap, and put together from solved ones: the travelling wave of the film at
alpha = (L/pi)^2 = 15, |c| = 0.3877627861, T = L/|c| = 31.37829741, and the periodic odd state at nu = 0.127
(sources beside both in test_film_states and test_validated_states). Sums f(x) + g(y) of solutions of the law in
one dimension solve the two-dimensional one (derived). Others are plain sums of waves whose kind is seen at once.
"""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice.classify.files import classification_of, write_canonical, write_primitive
from lattice.classify.kind import Classification
from lattice.classify.translations import dual, extended
from lattice.classify.words import lines
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.store.statefile import open_state, read_meta, write_state
from lattice.store.statemeta import StateMeta
from tests.mpi import ROOT, run_ranks
from tests.solving import TURN, Real
from tests.test_film_states import length_at, travelling_wave
from tests.test_subspaces import BOTH, COUNTS, KNOWN, solved

FILM, SHEET, AMPLITUDE = "kuramoto-sivashinsky", "kuramoto-sivashinsky-2d", "ginzburg-landau"
LENGTH = length_at(15.0)
SPEED = 0.3877627861


def wave() -> tuple[Real, float]:
    """Return the travelling wave on 32 nodes and its solved speed."""
    state = travelling_wave(15.0, 32)
    return state.field[0, 0, :, 0], state.values["drift_x"]


def carried_by(profile: Real, nt: int, turns: int = 1) -> Real:
    """Return a profile that moves by whole periods in time, shape (nt, 1, nx, 1)."""
    spectrum = np.fft.rfft(profile)
    steps = turns * np.arange(nt)[:, None] / nt
    moved = np.fft.irfft(spectrum * np.exp(-1j * TURN * steps * np.arange(spectrum.size)), profile.size)
    return moved[:, None, :, None]


def odd() -> tuple[Real, dict[str, float]]:
    found = solved(KNOWN[1], COUNTS[0], BOTH)
    return found.field, {"period": found.period, "length_x": KNOWN[1].length, "drift_x": 0.0}


def moving_sum(nt: int, nx: int, later: float = 0.0, along: float = 0.0, mirrored: bool = False) -> Real:
    """Return waves without any symmetry, or their image, shifted by fractions of both periods."""
    t = (np.arange(nt) / nt + later)[:, None] * TURN
    x = (np.arange(nx) / nx + along)[None] * TURN * (-1 if mirrored else 1)
    u = np.exp(np.cos(x - t)) * (1 + 0.3 * np.sin(t)) + 0.4 * np.sin(2 * x + 1) + 0.3 * np.cos(x + 3 * t)
    return ((u - u.mean()) * (-1 if mirrored else 1))[:, None, :, None]


def turning_sum(nt: int, nx: int, later: float = 0.0, along: float = 0.0, angle: float = 0.0) -> Real:
    t = (np.arange(nt) / nt + later)[:, None] * TURN
    x = (np.arange(nx) / nx + along)[None] * TURN
    a = np.exp(1j * angle) * (
        np.exp(1j * x) * (1 + 0.3 * np.cos(t - x)) + 0.5 * np.exp(2j * t) * np.sin(x + 1)
    )
    return np.stack([a.real, a.imag], axis=-1)[:, None]


@cache
def cases() -> dict[str, tuple[str, Real, dict[str, float]]]:
    """Return states by name: law, field, values."""
    profile, speed = wave()
    period = LENGTH / speed
    own = {"period": 1.0, "length_x": LENGTH, "drift_x": speed}
    lab = {"period": period, "length_x": LENGTH, "drift_x": 0.0}
    field, values = odd()
    steady = moving_sum(1, 30)[0, 0, :, 0]
    box = {"period": 3.0, "length_x": 10.0, "drift_x": 0.3}
    turning = {**box, "rotation": 0.4}
    sheet = np.add.outer(np.cos(TURN * 2 * np.arange(12) / 12), np.cumsum(steady) - np.cumsum(steady).mean())
    return {
        "wave": (FILM, profile[None, None, :, None], own),
        "wave at rest in its frame": (FILM, np.tile(profile[None, None, :, None], (9, 1, 1, 1)), {**own, "period": 7.0}),
        "wave in the laboratory": (FILM, carried_by(profile, 40), lab),
        "two waves": (FILM, np.tile(carried_by(profile, 40), (2, 1, 2, 1)), {**lab, "period": 2 * period, "length_x": 2 * LENGTH}),
        "still": (FILM, np.tile(steady[None, None, :, None], (8, 1, 1, 1)), {"period": 2.0, "length_x": 10.0, "drift_x": 0.0}),
        "flat": (FILM, np.full((8, 1, 12, 1), 0.7), box),
        "odd": (FILM, field, values),
        "odd, repeated": (FILM, np.tile(field, (3, 1, 2, 1)), {**values, "period": 3 * values["period"], "length_x": 2 * values["length_x"]}),
        "moving": (FILM, moving_sum(32, 40), box),
        "moving-image": (FILM, moving_sum(32, 40, 0.123, 0.456, mirrored=True), {**box, "drift_x": -0.3}),
        "back where it was": (FILM, moving_sum(32, 40), {**box, "drift_x": 10.0 / 3.0}),
        "turning": (AMPLITUDE, turning_sum(24, 20), turning),
        "turning-image": (AMPLITUDE, turning_sum(24, 20, 0.2, 0.3, 1.0), turning),
        "plane wave": (AMPLITUDE, np.tile(turning_sum(1, 20), (6, 1, 1, 1)), {**box, "rotation": 0.75}),
        "sheet": (SHEET, np.tile(sheet[None, :, :, None], (4, 1, 1, 1)), {"period": 2.0, "length_x": 10.0, "length_y": 6.0}),
    }  # fmt: skip


@cache
def judged(folder: Path, ranks: int) -> dict[str, dict[str, Any]]:
    for name, (law, field, values) in cases().items():
        np.savez(folder / f"{name}.npz", field=field, law=law, values=json.dumps(values))
    done = run_ranks(ranks, Path(ROOT, "tests", "classify_everywhere.py"), folder, timeout=120.0)
    return dict(json.loads(done.stdout.splitlines()[-1]))


@pytest.fixture(scope="module", params=[1, pytest.param(2, marks=pytest.mark.long), 3])
def found(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> dict[str, dict[str, Any]]:
    return judged(tmp_path_factory.mktemp("states"), request.param)


KINDS = {
    "wave": ("travelling", [1, 1, 1]),
    "wave at rest in its frame": ("travelling", [1, 1, 1]),
    "wave in the laboratory": ("travelling", [1, 1, 1]),
    "two waves": ("travelling", [1, 1, 2]),
    "still": ("steady", [1, 1, 1]),
    "flat": ("constant", [1, 1, 1]),
    "odd": ("periodic", [1, 1, 1]),
    "odd, repeated": ("periodic", [3, 1, 2]),
    "moving": ("relative periodic", [1, 1, 1]),
    "back where it was": ("periodic", [1, 1, 1]),
    "turning": ("relative periodic", [1, 1, 1]),
    "plane wave": ("travelling", [1, 1, 1]),
    "sheet": ("steady", [1, 2, 1]),
}


def test_states_of_known_kind_are_told_apart(found):
    assert {name: (f["kind"], f["repeats"]) for name, f in found.items()} == KINDS


def test_speed_of_a_wave_is_found_in_any_frame(found):
    for name in ("wave", "wave at rest in its frame", "wave in the laboratory", "two waves"):
        assert abs(found[name]["velocity"]["drift_x"]) == pytest.approx(SPEED, abs=2e-5)  # order 8, 32 nodes
        assert found[name]["frame_change"] < 1e-9


def test_symmetries_of_a_state_are_found(found):
    assert found["odd"]["combined"] == [{"t": "1/2", "x": "1/2"}]
    # Three periods and two lengths: the same shift is a sixth and a quarter of the whole ones.
    assert found["odd, repeated"]["combined"] == [{"t": "1/6", "x": "1/4"}]
    (mirror,) = found["odd"]["reflections"]
    assert mirror["reflection"] == {"x": True, "y": False, "signs": [-1], "time": False}
    # The mirror lies half a node before the first, and another half a length on.
    nx = odd()[0].shape[2]
    assert (mirror["shift"]["x"] + 1.0 / nx) % 0.5 == pytest.approx(0.0, abs=1e-6) or (
        mirror["shift"]["x"] + 1.0 / nx
    ) % 1.0 == pytest.approx(1.0, abs=1e-6)
    for name in ("wave", "moving", "turning"):
        assert found[name]["reflections"] == []
    flips = [r["reflection"] for r in found["sheet"]["reflections"]]
    assert {"x": False, "y": True, "signs": [1], "time": False} in flips


def test_what_repeats_is_cut_to_its_smallest_part(found):
    field, values = odd()
    assert found["odd, repeated"]["primitive"] == pytest.approx(
        [*field.shape[:3], values["period"], values["length_x"]]
    )
    # At rest in a frame: one level.
    assert found["two waves"]["primitive"] == pytest.approx([1, 1, 32, 1.0, LENGTH])


def test_shifted_mirrored_and_turned_states_are_the_same_state(found):
    for name in ("moving", "turning"):
        assert found[name]["distance"] < 1e-12
        assert found[name]["scalars"] < 1e-12
        assert found[name]["canonical"] < 1e-12
        assert found[name]["drifts"][0] == pytest.approx(found[name]["drifts"][1])


def test_largest_value_of_the_canonical_state_is_at_the_origin(found):
    assert found["moving"]["origin"][0] >= np.abs(moving_sum(32, 40)).max()
    size, phase = found["turning"]["origin"]
    assert size >= np.hypot(*np.moveaxis(turning_sum(24, 20), -1, 0)).max()
    assert abs(phase) < 1e-9


# Files.


def stored(path: Path, name: str) -> Path:
    from mpi4py import MPI

    law_name, field, values = cases()[name]
    law = load_law(law_name)
    lattice = Lattice(*field.shape[:3], law.dimensions)
    meta = StateMeta.of_law(law, lattice, {**law.defaults, **values}, outcome="converged", residual_rms=1e-11)
    write_state(path, np.ascontiguousarray(field), Block.whole(lattice), meta, MPI.COMM_SELF)
    return path


def test_primitive_and_canonical_states_are_stored_on_request(tmp_path, capsys):
    from mpi4py import MPI

    from lattice.cli.main import main

    path = stored(tmp_path / "state.h5", "odd, repeated")
    small, still = tmp_path / "small.h5", tmp_path / "still.h5"
    assert main(["info", str(path), "--primitive", str(small), "--canonical", str(still)]) == 0
    text = capsys.readouterr().out
    assert "holds a smaller state 3 times in time and 2 times along x" in text
    assert "u(t + T/6, x + Lx/4) = u(t, x)" in text
    field, values = odd()
    state = open_state(small)
    assert np.array_equal(state.field, field)
    assert state.meta.values["period"] == pytest.approx(values["period"])
    assert (state.meta.outcome, state.meta.residual_rms) == ("converged", 1e-11)
    assert open_state(still).field[0, 0, 0, 0] == pytest.approx(open_state(still).field.max())
    # Its residual is not known: the nodes lie elsewhere.
    assert np.isnan(read_meta(still).residual_rms)
    assert classification_of(still, MPI.COMM_SELF).repeats == (3, 1, 2)


def test_a_classification_survives_its_file(tmp_path):
    from mpi4py import MPI

    found = classification_of(stored(tmp_path / "odd.h5", "odd"), MPI.COMM_SELF)
    assert Classification.of_record(json.loads(json.dumps(found.record()))) == found
    values = odd()[1]
    assert dict(lines(found, ("u",), values, 1))["kind"] == "periodic"


def test_a_repeat_on_nodes_that_do_not_divide_is_cut_all_the_same(tmp_path):
    from mpi4py import MPI

    law = load_law(FILM)
    t, x = np.arange(40)[:, None] / 40, np.arange(45)[None] / 45
    u = np.exp(np.sin(TURN * 2 * x) + np.cos(TURN * 3 * t))[:, None, :, None]
    meta = StateMeta.of_law(
        law, Lattice(40, 1, 45), {**law.defaults, "period": 6.0, "length_x": 10.0, "drift_x": 0.0}
    )
    write_state(tmp_path / "a.h5", np.ascontiguousarray(u), Block.whole(meta.lattice), meta, MPI.COMM_SELF)
    write_primitive(tmp_path / "a.h5", tmp_path / "b.h5", MPI.COMM_SELF)
    state = open_state(tmp_path / "b.h5")
    assert state.meta.lattice.shape == (14, 1, 23)
    wanted = np.exp(np.sin(TURN * np.arange(23) / 23) + np.cos(TURN * np.arange(14) / 14)[:, None])
    # exp(cos) has Bessel coefficients I_n(1): beyond what 40/3 levels carry, I_7(1) = 2e-6.
    assert np.abs(state.field[:, 0, :, 0] - wanted).max() < 1e-4
    write_canonical(tmp_path / "b.h5", tmp_path / "c.h5", MPI.COMM_SELF)
    assert open_state(tmp_path / "c.h5").field.max() == pytest.approx(np.exp(2.0), rel=1e-3)


# Integer lattices.


def test_translations_of_modes_are_their_dual_lattice():
    assert dual(extended([], np.array([[2, 0], [0, 3]])), 2).repeats == (2, 3)
    mixed = dual(extended([], np.array([[1, 1], [2, 0], [0, 2]])), 2)
    assert mixed.repeats == (1, 1)
    assert [[str(f) for f in s] for s in mixed.combined] == [["1/2", "1/2"]]
    assert dual(extended([], np.array([[1, -1], [2, -2]])), 2).combined == ()  # a wave: any shift along it
