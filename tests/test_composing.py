"""Excerpts and mosaics: fields cut from stored ones and put together, as starts and from Python."""

from __future__ import annotations

from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpi4py import MPI
from scipy.signal import resample

import lattice.starts.compose as composing
from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law, read_law
from lattice.laws.law import Law
from lattice.starts import STARTS
from lattice.starts.mosaic import report_settled
from lattice.starts.options import ExcerptOptions, MemberOptions, MosaicOptions
from lattice.starts.rows import local_rows, trigonometric_rows
from lattice.starts.seams import piece_samples, window_samples
from lattice.store.statefile import open_state, read_whole, write_state
from lattice.store.statemeta import StateMeta
from tests.mpi import run_ranks

TURN = 2.0 * np.pi
ALONE = MPI.COMM_SELF
Real = np.ndarray
FILM = "kuramoto-sivashinsky"


@cache
def law_of(name: str) -> Law:
    return load_law(name)


def waves(nodes: tuple[int, int, int], components: int = 1, seed: int = 0) -> Real:
    """Return a smooth field of a few low modes, shape nodes + (components,), of zero mean."""
    generator = np.random.default_rng(seed)
    t, y, x = (np.arange(n) / n for n in nodes)
    field = np.zeros((*nodes, components))
    for kt, ky, kx in ((1, 0, 1), (-1, 1, 2), (2, -1, 1), (0, 1, 1)):
        phase = TURN * (kt * t[:, None, None] + (ky if nodes[1] > 1 else 0) * y[:, None] + kx * x)
        field += generator.standard_normal(components) * np.cos(phase + generator.uniform(0, TURN))[..., None]
    return field


def store(path: Path, field: Real, law: str | Law = FILM, **values: float) -> str:
    """Write a field as a state and return its path."""
    made = law_of(law) if isinstance(law, str) else law
    grid = Lattice(*field.shape[:3], dimensions=made.dimensions)
    box = {"period": 10.0, "length_x": 16.0, "drift_x": -0.2}
    box |= {"length_y": 12.0, "drift_y": 0.0} if made.dimensions == 2 else {}
    meta = StateMeta.of_law(made, grid, {**box, **made.defaults, **values}, outcome="converged")
    write_state(path, np.ascontiguousarray(field), Block.whole(grid), meta, ALONE)
    return str(path)


def begin(kind: str, options: Any, grid: Lattice, values: dict[str, float], law: str | Law = FILM) -> Any:
    made = law_of(law) if isinstance(law, str) else law
    lines: list[str] = []
    field, found = STARTS[kind](options, grid, values, made, Block.whole(grid), ALONE, lines.append)
    return field, found, lines


# Weights and rows.


@settings(deadline=None, max_examples=60)
@given(st.integers(2, 60), st.floats(0.0, 0.99), st.floats(0.5, 50.0))
def test_weights_of_a_window_add_up_to_one(nodes, blend, length):
    total = np.zeros(nodes)
    for sample in window_samples(nodes, length, blend, 0, nodes):
        total[sample.node] += sample.weight
        assert 0.0 <= sample.place <= length * (1.0 + blend)
    assert np.abs(total - 1.0).max() < 1e-15


@settings(deadline=None, max_examples=60)
@given(st.lists(st.floats(0.3, 5.0), min_size=1, max_size=5), st.floats(0.0, 0.99), st.integers(4, 50))
def test_weights_of_all_pieces_add_up_to_one(sizes, blend, nodes):
    ends = (0.0, *np.cumsum(sizes))
    total = np.zeros(nodes)
    for piece in range(len(sizes)):
        for sample in piece_samples(ends, piece, blend, nodes, 0, nodes):
            total[sample.node] += sample.weight
    assert np.abs(total - 1.0).max() < 1e-12


@settings(deadline=None, max_examples=100)
@given(st.integers(1, 40), st.integers(0, 19), st.floats(0.0, TURN), st.floats(-80.0, 80.0))
def test_trigonometric_rows_are_exact_on_what_the_nodes_carry(nodes, mode, phase, place):
    mode = min(mode, (nodes - 1) // 2)
    values = np.cos(TURN * mode * np.arange(nodes) / nodes + phase)
    wanted = np.cos(TURN * mode * place / nodes + phase)
    assert abs(trigonometric_rows(nodes, [place])[0] @ values - wanted) < 1e-10


def test_rows_for_a_coarser_lattice_leave_out_what_it_cannot_carry():
    values = np.cos(TURN * 6 * np.arange(32) / 32)
    places = np.arange(8) * 4.0
    assert np.abs(trigonometric_rows(32, places, 8.0) @ values).max() < 1e-13
    assert np.abs(trigonometric_rows(32, places, 16.0) @ values - values[::4]).max() < 1e-13


def test_local_rows_are_exact_on_polynomials_and_nodes():
    places = np.array([0.0, 0.3, 4.7, 11.0, 10.6])
    values = (np.arange(12) / 5.0) ** 7 - np.arange(12)
    wanted = (places / 5.0) ** 7 - places
    assert np.abs(local_rows(12, places) @ values - wanted).max() < 1e-11
    assert np.array_equal(local_rows(12, [3.0])[0], np.eye(12)[3])


# Excerpts.


def test_window_of_a_doubled_state_gives_the_state_back(tmp_path):
    field = waves((10, 1, 16))
    doubled = store(tmp_path / "two.h5", np.concatenate([field] * 2))
    wide = np.concatenate([read_whole(doubled)] * 2, axis=2)
    path = store(tmp_path / "four.h5", wide, period=20.0, length_x=32.0)
    options = ExcerptOptions(path, t=(3.0, 13.0), x=(4.0, 20.0))
    found, values, _ = begin("excerpt", options, Lattice(10, 1, 16), {})
    assert np.abs(found - np.roll(field, (-3, -4), axis=(0, 2))).max() < 1e-14
    assert {n: values[n] for n in ("period", "length_x", "drift_x")} == {
        "period": 10.0,
        "length_x": 16.0,
        "drift_x": -0.2,
    }


def test_whole_state_is_an_exact_copy_and_finer_nodes_interpolate(tmp_path):
    field = waves((9, 8, 10), 2)
    path = store(tmp_path / "state.h5", field, "ginzburg-landau-2d")
    whole, _, _ = begin("excerpt", ExcerptOptions(path), Lattice(9, 8, 10, 2), {}, "ginzburg-landau-2d")
    assert np.array_equal(whole, field)
    fine, _, _ = begin("excerpt", ExcerptOptions(path), Lattice(18, 12, 25, 2), {}, "ginzburg-landau-2d")
    wanted = resample(resample(resample(field, 18, axis=0), 12, axis=1), 25, axis=2)
    assert np.abs(fine - wanted).max() < 1e-13


def test_window_is_the_field_where_it_is_not_blended_and_joins_itself(tmp_path):
    field = waves((40, 1, 64))
    path = store(tmp_path / "state.h5", field)
    options = ExcerptOptions(path, t=(2.0, 8.0), x=(-1.0, 9.0), blend=0.25, blend_space=0.2)
    found, _, _ = begin("excerpt", options, Lattice(24, 1, 40), {})
    rolled = np.roll(field, (-8, 4), axis=(0, 2))
    assert np.abs(found - rolled[:24, :, :40])[6:, :, 8:].max() < 1e-14
    # In the blended zone the window is mixed with what follows one length on.
    mixed = 0.5 * (rolled[3] + rolled[27])
    assert np.abs(found[3] - mixed[:, :40])[:, 8:].max() < 1e-14
    steps = np.abs(np.diff(np.concatenate([found, found[:1]]), axis=0)).max(axis=(1, 2, 3))
    assert steps[-1] < 2.0 * np.median(steps)


def test_array_is_cut_where_it_does_not_repeat(tmp_path):
    t, x = np.arange(50) * 0.5, np.arange(60) * 0.4
    np.save(tmp_path / "measured.npy", np.tanh(x - 8.0) + 0.1 * t[:, None])
    options = ExcerptOptions(
        str(tmp_path / "measured.npy"), t=(1.0, 11.0), x=(2.1, 12.1), covers_t=25.0, covers_x=24.0
    )
    found, values, _ = begin("excerpt", options, Lattice(20, 1, 50), {"drift_x": 0.0})
    wanted = np.tanh(2.1 + 0.2 * np.arange(50) - 8.0)[None] + 0.1 * (1.0 + 0.5 * np.arange(20))[:, None]
    assert np.abs(found[6:, 0, 25:, 0] - wanted[6:, 25:]).max() < 1e-3
    assert values["period"] == 10.0
    assert values["length_x"] == 10.0


@pytest.mark.parametrize(
    ("options", "match"),
    [
        ({"t": (3.0, 3.0)}, r"start.t must be \[from, to\] with to > from, got \[3, 3\]"),
        ({"y": (0.0, 1.0)}, "start.y must be left out"),
        ({"covers_x": 3.0}, "start.covers_x is for arrays"),
        ({"periodic": ("x",)}, "start.periodic is for arrays"),
    ],
)
def test_unusable_windows_are_refused(options, match, tmp_path):
    path = store(tmp_path / "state.h5", waves((10, 1, 16)))
    with pytest.raises(InputError, match=match):
        begin("excerpt", ExcerptOptions(path, **options), Lattice(10, 1, 16), {})


def test_array_without_its_box_or_too_small_for_the_window_is_refused(tmp_path):
    path = str(tmp_path / "a.npy")
    np.save(path, np.zeros((20, 16)))
    with pytest.raises(InputError, match="start.covers_t is required for an array"):
        begin("excerpt", ExcerptOptions(path), Lattice(10, 1, 16), {})
    options = ExcerptOptions(path, t=(0.0, 18.0), covers_t=20.0, covers_x=16.0, periodic=("x",))
    with pytest.raises(InputError, match="takes 0 to 23.4, but the array ends at 19"):
        begin("excerpt", options, Lattice(10, 1, 16), {})


# Mosaics.


def mosaic(
    rows: list[str], members: dict[str, MemberOptions], grid: Lattice, law: str | Law = FILM, **values: float
) -> Any:
    return begin("mosaic", MosaicOptions(tuple(rows), members, 0.4), grid, values, law)


def test_copies_of_one_state_are_that_state_repeated(tmp_path):
    field = waves((10, 1, 16))
    path = store(tmp_path / "a.h5", field)
    found, values, _ = mosaic(["a a a", "a a a"], {"a": MemberOptions(path)}, Lattice(20, 1, 48))
    assert np.abs(found - np.concatenate([np.concatenate([field] * 3, axis=2)] * 2)).max() < 1e-14
    assert (values["period"], values["length_x"], values["drift_x"]) == (20.0, 48.0, pytest.approx(-0.2))


def test_earliest_row_comes_first_and_names_follow_x(tmp_path):
    calm, wave = np.zeros((10, 1, 16, 1)), waves((10, 1, 16))
    members = {n: MemberOptions(store(tmp_path / f"{n}.h5", f)) for n, f in (("calm", calm), ("wave", wave))}
    found, _, _ = mosaic(["calm wave", "calm calm"], members, Lattice(20, 1, 32), drift_x=-0.2)
    assert np.abs(found[4:7, :, 20:28] - wave[4:7, :, 4:12]).max() < 1e-14
    assert np.abs(found[13:17]).max() == 0.0
    assert np.abs(found[:, :, 4:12]).max() == 0.0


def test_lines_along_y_and_all_that_can_be_done_to_a_member(tmp_path):
    # In two dimensions: a member repeated along y, shifted and reflected where the law allows it.
    a, b = waves((8, 12, 16), seed=1), waves((8, 12, 16), seed=2)
    paths = [store(tmp_path / f"{n}.h5", f, "film-2d", drift_x=0.0) for n, f in (("a", a), ("b", b))]
    members = {
        "a": MemberOptions(paths[0], shift_t=2.5, shift_x=3.0, length_y=12.0),
        "b": MemberOptions(paths[1], reflect="y", repeat_y=2, length_y=12.0),
    }
    found, values, lines = mosaic(["a / b"], members, Lattice(8, 48, 16, 2), "film-2d")
    assert values["length_y"] == 24.0
    inside = found[:, 10:14]
    finer = resample(np.roll(a, (-2, -3), axis=(0, 2)), 24, axis=1)
    assert np.abs(inside - finer[:, 10:14]).max() < 1e-13
    mirrored = np.roll(b[:, ::-1], 1, axis=1)
    assert np.abs(found[:, 34:38] - np.concatenate([mirrored] * 2, axis=1)[:, 10:14]).max() < 1e-13
    assert any("b (row 1, line 2, column 1) stretched by -50 % in y" in line for line in lines)


def test_reflection_takes_the_sign_the_law_gives_it(tmp_path):
    field = waves((10, 1, 16))
    path = store(tmp_path / "a.h5", field, drift_x=0.3)
    found, values, _ = mosaic(["a"], {"a": MemberOptions(path, reflect="x")}, Lattice(10, 1, 16))
    assert np.abs(found + np.roll(field[:, :, ::-1], 1, axis=2)).max() < 1e-14
    assert values["drift_x"] == pytest.approx(-0.3)


def test_member_slides_as_it_drifts_against_the_frame(tmp_path):
    nx, length = 32, 16.0
    steady = np.cos(TURN * np.arange(nx) / nx).reshape(1, 1, nx, 1)
    path = store(tmp_path / "wave.h5", steady, drift_x=0.5)
    found, _, _ = mosaic(["w"], {"w": MemberOptions(path, period=20.0)}, Lattice(20, 1, nx), drift_x=0.1)
    t, x = np.arange(20) - 10.0, np.arange(nx) * length / nx
    wanted = np.cos(TURN * (x - 0.4 * t[:, None]) / length)
    assert np.abs(found[4:17, 0, :, 0] - wanted[4:17]).max() < 1e-13


def test_members_of_unlike_size_meet_half_way(tmp_path):
    members = {
        "a": MemberOptions(store(tmp_path / "a.h5", waves((10, 1, 16)))),
        "b": MemberOptions(store(tmp_path / "b.h5", waves((10, 1, 24)), length_x=24.0, period=14.0)),
    }
    _, values, lines = mosaic(["a b"], members, Lattice(12, 1, 40))
    assert (values["period"], values["length_x"]) == (12.0, 40.0)
    assert "mosaic:   a (row 1, column 1) stretched by +20 % in t" in lines
    assert "mosaic:   b (row 1, column 2) stretched by -14 % in t" in lines


def test_what_has_become_of_a_mosaic_is_told_by_member(tmp_path):
    members = {"a": MemberOptions(store(tmp_path / "a.h5", waves((10, 1, 32))))}
    grid, lines, start = Lattice(10, 1, 64), [], MosaicOptions(("a a",), members)
    field, values, _ = begin("mosaic", start, grid, {})
    field[:, :, 32:] *= 3.0  # as far from before as sqrt(2^2/((1 + 3^2)/2)) of both
    report_settled(start, grid, values, law_of(FILM), field, Block.whole(grid), ALONE, lines.append)
    assert [line.partition(", changed by ")[2] for line in lines] == ["82 %", "0 %", "89 %"]
    assert lines[2].startswith("mosaic:   a (row 1, column 2): residual_rms ")


@pytest.mark.parametrize(
    ("rows", "changes", "match"),
    [
        (["a a", "a"], {}, "start.rows must all hold equally many names, got 2; 1"),
        (["a / a"], {}, "start.rows must hold no '/'"),
        (["a c"], {}, "start.members must tell of every name in start.rows, and lacks 'c'"),
        (["a"], {"reflect": "sign"}, "start.members.a.reflect must be a symmetry of law kuramoto"),
        ([""], {}, "start.rows must all hold equally many names"),
    ],
)
def test_layouts_that_make_no_sense_are_refused(rows, changes, match, tmp_path):
    path = store(tmp_path / "a.h5", waves((10, 1, 16)))
    with pytest.raises(InputError, match=match):
        mosaic(rows, {"a": MemberOptions(path, **changes)}, Lattice(10, 1, 16))


def test_fields_keep_their_place_where_the_law_depends_on_it(tmp_path):
    path = store(tmp_path / "a.h5", waves((10, 1, 16)), "burgers", length_x=TURN)
    wide = store(tmp_path / "b.h5", waves((10, 1, 16)), "burgers", length_x=2 * TURN)
    grid = Lattice(10, 1, 32)
    with pytest.raises(InputError, match="start.x must be left out: law burgers depends on x"):
        begin("excerpt", ExcerptOptions(path, x=(0.0, 3.0)), grid, {}, "burgers")
    with pytest.raises(InputError, match="start.members.a must keep its place .* and is shifted by 1"):
        mosaic(["a"], {"a": MemberOptions(path, shift_x=1.0)}, grid, "burgers")
    with pytest.raises(InputError, match="start.members.a must keep its place .* stretched 1.5 times"):
        mosaic(["a", "b"], {"a": MemberOptions(path), "b": MemberOptions(wide)}, grid, "burgers")
    _, values, _ = mosaic(["a b"], {"a": MemberOptions(path), "b": MemberOptions(wide)}, grid, "burgers")
    assert values["length_x"] == pytest.approx(3 * TURN)


def test_steady_members_alone_have_no_duration(tmp_path):
    path = store(tmp_path / "a.h5", waves((1, 1, 16)))
    with pytest.raises(InputError, match="row 1 has no duration"):
        mosaic(["a"], {"a": MemberOptions(path)}, Lattice(10, 1, 16))
    found, _, _ = mosaic(["a a"], {"a": MemberOptions(path)}, Lattice(1, 1, 32))
    assert np.abs(found[:, :, :16] - found[:, :, 16:]).max() < 1e-14


# From Python, with the residual.


def test_composed_fields_are_kept_with_their_distance_from_a_state(tmp_path):
    # Steady cosines solve this law in every box that holds whole waves.
    law = read_law("own", ("u_t = u + u_xx",), ("u",), {}, 1)
    field = np.broadcast_to(np.cos(np.arange(64) * TURN * 2 / 64)[None, None, :, None], (12, 1, 64, 1))
    source = store(tmp_path / "a.h5", np.array(field), law, length_x=2 * TURN, drift_x=0.0)
    coarse = abs(composing.excerpt_state(source, tmp_path / "same.h5").residual_rms)
    two = composing.mosaic_states(["a a", "a a"], {"a": source}, tmp_path / "two.h5")
    assert (two.lattice.shape, two.outcome) == ((24, 1, 128), "composed, not solved")
    assert two.residual_rms == pytest.approx(coarse, rel=1e-9)
    assert coarse < 1e-4  # of the differences of order 4
    lines: list[str] = []
    torn = {"a": source, "b": {"file": source, "shift_x": 2.0}}
    away = composing.mosaic_states(["a b"], torn, tmp_path / "torn.h5", report=lines.append)
    assert away.residual_rms > 100.0 * coarse
    assert sum("residual_rms" in line for line in lines) == 3
    piece = composing.excerpt_state(source, tmp_path / "piece.h5", x=(0.0, TURN), t=(0, 5))
    assert piece.lattice.shape == (12, 1, 32)
    assert piece.residual_rms == pytest.approx(coarse, rel=1e-9)
    assert open_state(tmp_path / "piece.h5").meta.values["length_x"] == pytest.approx(TURN)
    chosen = composing.excerpt_state(source, tmp_path / "p.h5", x=(0.0, TURN), nodes={"nx": 20})
    assert chosen.lattice.shape == (12, 1, 20)


# Any number of ranks.

ON_RANKS = """
    import hashlib, sys
    import numpy as np
    from mpi4py import MPI
    from lattice.geometry.block import Block
    from lattice.geometry.lattice import Lattice
    from lattice.laws.catalogue import load_law
    from lattice.starts import STARTS
    from lattice.starts.options import *

    comm, state, folder = MPI.COMM_WORLD, *sys.argv[1:]

    def parts(count, nodes):
        bounds = [nodes * n // count for n in range(count + 1)]
        return list(zip(bounds, bounds[1:]))

    def begin(kind, options, name, lattice, values):
        # Odd rank counts split time, even ones x too.
        law, across = load_law(name), 2 if comm.size % 2 == 0 else 1
        levels, columns = parts(comm.size // across, lattice.nt), parts(across, lattice.nx)
        block = Block(*levels[comm.rank // across], 0, lattice.ny, *columns[comm.rank % across])
        owned, found = STARTS[kind](options, lattice, values, law, block, comm)
        gathered = comm.gather((block, owned, found))
        if comm.rank == 0:
            whole = np.zeros((*lattice.shape, len(law.components)))
            for b, o, f in gathered:
                whole[b.slices] = o
                assert f == found
            np.save(f"{folder}/{kind}-{comm.size}.npy", whole)

    film = {"period": 9.0, "length_x": 17.6, "drift_x": 0.0, "dispersion": 0.0, "source_u": 0.0}
    begin("excerpt", ExcerptOptions(state, t=(1, 8), x=(2, 15)), "kuramoto-sivashinsky", Lattice(13, 1, 24), {})
    members = {"a": MemberOptions(state), "b": MemberOptions(state, reflect="x", shift_x=1.3)}
    begin("mosaic", MosaicOptions(("a b", "b a"), members), "kuramoto-sivashinsky", Lattice(22, 1, 34), {})
    begin("noise", NoiseOptions(seed=4), "film-2d", Lattice(11, 12, 20, 2),
          {"period": 9.0, "length_x": 20.0, "length_y": 14.0})
    begin("window", WindowOptions(seed=1, spin_up=10.0, march_length_x=26.0, match_drift=("x",)),
          "kuramoto-sivashinsky", Lattice(12, 1, 24), film)
    begin("recurrence", RecurrenceOptions(seed=1, spin_up=20.0, march_time=40.0, match_drift=("x",)),
          "kuramoto-sivashinsky", Lattice(12, 1, 24), film)
"""


def test_starts_do_not_depend_on_the_ranks(tmp_path):
    path = store(tmp_path / "a.h5", waves((10, 1, 16)))
    for ranks in (1, 2, 3):
        run_ranks(ranks, ON_RANKS, path, tmp_path, timeout=120.0)
    for kind in ("excerpt", "mosaic", "noise", "window", "recurrence"):
        one, *others = (np.load(tmp_path / f"{kind}-{ranks}.npy") for ranks in (1, 2, 3))
        assert np.abs(one).max() > 0.1
        for other in others:
            # Marches bit for bit; sums over nodes and modes to rounding.
            assert np.abs(other - one).max() <= (0.0 if kind in ("window", "recurrence") else 1e-13)
