"""Pictures and descriptions of states: what they show, that they show it rightly, within bounds."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.optimize import brentq

from lattice.errors import InputError, LatticeError
from lattice.geometry.lattice import Lattice
from lattice.show import planes, spectra
from lattice.show.colours import LIGHT, diverging_colours, oklab_to_srgb
from lattice.show.describe import describe_state, state_json
from lattice.show.panels import STYLE, symmetric_limits, trigonometric
from lattice.show.pictures import (
    DOTS_PER_INCH,
    PictureOptions,
    draw,
    picture_format,
    plot_state,
)
from lattice.show.progress import header, step_line
from lattice.show.spectra import central_phase, largest_phase, spectrum, staggered_phase
from lattice.store.statefile import StateFile
from tests.states import smooth_field, write_serial

Real = NDArray[np.float64]

WAVE = Lattice(nt=40, ny=1, nx=48, dimensions=1)
SHEET = Lattice(nt=12, ny=16, nx=24, dimensions=2)
KINDS = {
    "space-time": (WAVE, 1),
    "space-time of two": (WAVE, 2),
    "profile": (Lattice(nt=1, ny=1, nx=48, dimensions=1), 2),
    "sheet": (SHEET, 1),
    "sheet of two": (SHEET, 2),
    "map": (Lattice(nt=1, ny=16, nx=24, dimensions=2), 2),
}


def stored(path: Path, kind: str, **changes: Any) -> Path:
    lattice, components = KINDS[kind]
    write_serial(path, lattice, smooth_field(lattice, components), **changes)
    return path


def drawn(path: Path, **options: Any) -> Any:
    import matplotlib as mpl

    with StateFile(path) as file, mpl.rc_context(STYLE):
        return draw(file, PictureOptions(**options))


def all_text(figure: Any) -> str:
    import matplotlib.text

    return "\n".join(t.get_text() for t in figure.findobj(matplotlib.text.Text))


def pixels(path: Path) -> Real:
    import matplotlib.image

    return np.asarray(matplotlib.image.imread(path), dtype=float)


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_state_gets_its_picture(kind: str, tmp_path: Path) -> None:
    path = stored(tmp_path / "s.h5", kind)
    out = plot_state(path, tmp_path / "s.png")
    width, height = drawn(path).get_size_inches()
    image = pixels(out)
    assert image.shape[:2] == pytest.approx((height * DOTS_PER_INCH, width * DOTS_PER_INCH), abs=1)
    # White paper, and on it many shades of both ends of the map.
    red, blue = image[..., 0] - image[..., 2] > 0.25, image[..., 2] - image[..., 0] > 0.25
    assert (image[..., :3].min(axis=-1) > 0.99).mean() > 0.1
    assert blue.mean() > (0.01 if kind != "profile" else 0.0)
    assert red.mean() > (0.01 if kind != "profile" else 0.0)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["s.h5", "s.png"]


@pytest.mark.parametrize("kind", KINDS)
def test_every_axis_is_labelled_with_its_unit(kind: str, tmp_path: Path) -> None:
    figure = drawn(stored(tmp_path / "s.h5", kind))
    text = all_text(figure)
    lattice, components = KINDS[kind]
    axes = ["x"] + (["y"] if lattice.dimensions == 2 else []) + (["t"] if lattice.nt > 1 else [])
    for axis in axes:
        assert f"{axis} (dimensionless)" in text
    for component in ("u", "v")[:components]:
        assert f"{component} (dimensionless)" in text
    assert r"wavenumber $k_x$ (dimensionless)" in text
    assert (r"frequency $\omega$ (dimensionless)" in text) == (lattice.nt > 1)
    assert "order 4: 10 % error" in text and "last third" in text


def test_time_runs_upwards_and_x_to_the_right(tmp_path: Path) -> None:
    """A front that moves to the right must lean to the right."""
    x, t = np.arange(48) / 48, np.arange(40).reshape(-1, 1) / 40
    field = np.exp(-(((x - t + 0.5) % 1.0 - 0.5) ** 2) * 100)[:, np.newaxis, :, np.newaxis]
    write_serial(tmp_path / "s.h5", WAVE, field)
    panel = drawn(tmp_path / "s.h5").axes[0]
    image = panel.images[0]
    assert panel.get_xlabel().startswith("x") and panel.get_ylabel().startswith("t")
    assert image.origin == "lower"
    assert panel.get_xlim() == (0.0, 22.0) and panel.get_ylim() == (0.0, 10.25)
    shown = np.asarray(image.get_array())
    peaks = shown[:20].argmax(axis=1)
    assert (np.diff(peaks) >= 0).all() and peaks[-1] > peaks[0]
    # One period closed: the first row and column come again, centred on the frame.
    assert np.array_equal(shown[0], shown[-1]) and np.array_equal(shown[:, 0], shown[:, -1])
    left, right, bottom, top = image.get_extent()
    assert (left + right, bottom + top) == pytest.approx((22.0, 10.25))


@pytest.mark.parametrize("kind", ["space-time", "space-time of two", "sheet", "map"])
def test_colour_limits_are_symmetric_and_reach_the_largest_value(kind: str, tmp_path: Path) -> None:
    path = stored(tmp_path / "s.h5", kind)
    images = [image for axes in drawn(path).axes for image in axes.images]
    assert images
    for image in images:
        low, high = image.get_clim()
        assert low == -high
        assert np.abs(np.asarray(image.get_array())).max() <= high


@given(st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=20))
def test_limits_hold_all_values_and_centre_on_zero_or_the_mean(values: list[float]) -> None:
    array = np.array(values)
    limits = symmetric_limits([array])
    low, high = limits.ends
    room = 1e-9 * (1.0 + np.abs(array).max())
    assert low < high
    assert low - room <= array.min() and array.max() <= high + room
    expected = 0.0 if array.min() <= 0.0 <= array.max() else array.mean()
    assert limits.centre == pytest.approx(expected, rel=1e-12, abs=1e-12)


def lightness(srgb: Real) -> Real:
    """Return CIE 1976 L*: IEC 61966-2-1 for sRGB to Y, CIE 15 for Y to L* (formulas from memory)."""
    linear = np.where(srgb <= 0.04045, srgb / 12.92, ((srgb + 0.055) / 1.055) ** 2.4)
    y = linear @ np.array([0.2126, 0.7152, 0.0722])
    return np.where(y > (6 / 29) ** 3, 116 * np.cbrt(y) - 16, y * (29 / 3) ** 3)


def test_the_colour_map_is_even_in_lightness_by_an_independent_scale() -> None:
    """Checked in CIE L*, while the map is built in another space (Oklab)."""
    colours = diverging_colours(257)
    light = lightness(colours)
    assert (np.diff(light[:129]) > 0).all() and (np.diff(light[128:]) < 0).all(), "it must fall both ways"
    assert light[128] == light.max() > 95
    assert np.abs(light - light[::-1]).max() < 4, "equal amplitudes must weigh the same"
    steps = np.abs(np.diff(light))
    assert steps.max() < 1.6 * steps.mean(), "no jump looks like an edge that is not there"
    assert ((colours > 0.0) & (colours < 1.0)).all(), "no colour is cut off"


def test_oklab_white_and_grey_are_white_and_grey() -> None:
    white = oklab_to_srgb(np.array([1.0, 0.0, 0.0]))
    assert white == pytest.approx([1.0, 1.0, 1.0], abs=2e-4)
    grey = oklab_to_srgb(np.array([LIGHT, 0.0, 0.0]))
    assert np.ptp(grey) < 2e-4


@pytest.mark.parametrize(
    ("changes", "expected"),
    [
        ({"residual_rms": 3.2e-11}, "residual rms 3.2e-11, largest 2.0e-10: meets 1e-10"),
        ({"residual_rms": 2e-9}, "residual rms 2.0e-09, largest 2.0e-10: does NOT meet 1e-10"),
        ({"residual_rms": 3e-4}, "does NOT meet 1e-10, not a solution"),
        ({"residual_rms": math.nan}, "residual not computed: not known to meet 1e-10"),
    ],
)
def test_the_title_says_whether_the_residual_is_met(
    changes: dict[str, float], expected: str, tmp_path: Path
) -> None:
    text = all_text(drawn(stored(tmp_path / "s.h5", "space-time", **changes)))
    assert expected in text
    for scalar in ("$T$ = 10.25", "$L_x$ = 22", "$c_x$ = -0.125", "nu = 0.3"):
        assert scalar in text
    assert "A law for tests" in text


@pytest.mark.parametrize("axis", ["t", "y", "x"])
def test_a_spectrum_sums_to_the_mean_square_and_names_its_mode(axis: str, tmp_path: Path) -> None:
    """Parseval's theorem, and one cosine with a known wavenumber."""
    lattice = Lattice(nt=10, ny=15, nx=24, dimensions=2)
    noise = np.random.default_rng(3).standard_normal((*lattice.shape, 1))
    place, (nodes, length) = "tyx".index(axis), {"t": (10, 10.25), "y": (15, 11.0), "x": (24, 22.0)}[axis]
    phase = 2 * np.pi * 3 * np.arange(nodes) / nodes
    wave = np.broadcast_to(
        2.0 * np.cos(phase).reshape([-1 if i == place else 1 for i in range(3)]), lattice.shape
    )
    write_serial(tmp_path / "n.h5", lattice, noise)
    write_serial(tmp_path / "w.h5", lattice, wave[..., np.newaxis].copy())
    with StateFile(tmp_path / "n.h5") as file:
        assert spectrum(file, "u", axis).energy.sum() == pytest.approx((noise**2).mean(), rel=1e-12)
    with StateFile(tmp_path / "w.h5") as file:
        found = spectrum(file, "u", axis)
    assert found.energy.argmax() == 3 and found.energy[3] == pytest.approx(2.0, rel=1e-12)
    assert found.wavenumbers[3] == pytest.approx(3 * 2 * np.pi / length)
    assert found.wavenumbers[-1] <= np.pi * nodes / length * (1 + 1e-12)


def test_the_last_third_is_a_share_of_the_fluctuations(tmp_path: Path) -> None:
    x = 2 * np.pi * np.arange(48) / 48
    line = 5.0 + np.cos(2 * x) + 0.1 * np.cos(20 * x)
    write_serial(tmp_path / "s.h5", WAVE, np.broadcast_to(line, WAVE.shape)[..., np.newaxis].copy())
    with StateFile(tmp_path / "s.h5") as file:
        assert spectrum(file, "u", "x").last_third == pytest.approx(0.01 / 1.01, rel=1e-9)
        assert math.isnan(spectrum(file, "u", "t").last_third), "a constant has no fluctuations"
    assert "raise the nodes" in all_text(drawn(tmp_path / "s.h5"))


def test_the_marked_limit_is_where_the_difference_errs_by_a_tenth() -> None:
    """Second order: sin(p)/p = 0.9 and tan(p/2)/(p/2) = 1.1, one-line derivations, solved by SciPy."""
    step = np.pi / 2000
    nodal = brentq(lambda p: math.sin(p) / p - 0.9, 0.1, 3.0)
    midway = brentq(lambda p: math.tan(p / 2) / (p / 2) - 1.1, 0.1, 3.0)
    assert largest_phase(lambda p: central_phase(p, 2)) == pytest.approx(nodal, abs=step)
    assert largest_phase(lambda p: staggered_phase(p, 2)) == pytest.approx(midway, abs=step)


@pytest.mark.parametrize("seen", [central_phase, staggered_phase])
def test_a_higher_order_resolves_more(seen: Any) -> None:
    limits = [largest_phase(lambda p, n=order: seen(p, n)) for order in (2, 4, 6)]
    assert limits == sorted(limits) and limits[0] < limits[-1] <= np.pi


def test_a_large_field_is_thinned_and_read_in_parts(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    lattice = Lattice(nt=130, ny=1, nx=301, dimensions=1)
    field = np.random.default_rng(1).standard_normal((*lattice.shape, 1))
    write_serial(tmp_path / "s.h5", lattice, field)
    with StateFile(tmp_path / "s.h5") as file:
        whole_x, whole_t = spectrum(file, "u", "x"), spectrum(file, "u", "t")
        read: list[int] = []
        part = StateFile.part
        monkeypatch.setattr(
            StateFile, "part", lambda self, c, b: (read.append(math.prod(b.shape)), part(self, c, b))[1]
        )
        monkeypatch.setattr(planes, "BATCH_VALUES", 4000)
        monkeypatch.setattr(spectra, "BATCH_VALUES", 4000)
        plane = planes.read_plane(file, "u", "t", "x", {}, pixels=50)
        assert np.array_equal(plane.values, field[::3, 0, ::7, 0])
        assert np.array_equal(plane.horizontal, file.meta.coordinate("x")[::7])
        for axis, expected in (("x", whole_x), ("t", whole_t)):
            assert spectrum(file, "u", axis).energy == pytest.approx(expected.energy, rel=1e-12)
    assert max(read) <= 4000 and len(read) > 10


def test_a_huge_field_is_sampled_evenly(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    lattice = Lattice(nt=64, ny=1, nx=32, dimensions=1)
    write_serial(tmp_path / "s.h5", lattice, smooth_field(lattice))
    monkeypatch.setattr(spectra, "BATCH_VALUES", 64)
    with StateFile(tmp_path / "s.h5") as file:
        every = spectrum(file, "u", "t").energy
        monkeypatch.setattr(spectra, "SAMPLE_VALUES", 512)
        some = spectrum(file, "u", "t").energy
    # A quarter of the columns, evenly spread over a smooth field, stands for all of them within a tenth.
    assert 0.0 < np.abs(some - every).max() < 0.1 * every.max()


@pytest.mark.parametrize(
    ("kind", "cut", "labels", "images"),
    [
        ("space-time", {"t": 2.0}, {"x"}, 0),
        ("space-time", {"x": 2.0}, {"t"}, 0),
        ("sheet", {"t": 2.0}, {"x", "y"}, 1),
        ("sheet", {"y": 2.0}, {"x", "t"}, 1),
        ("sheet", {"x": 2.0}, {"y", "t"}, 1),
        ("sheet", {"t": 2.0, "y": 3.0}, {"x"}, 0),
        ("map", {"y": 3.0}, {"x"}, 0),
    ],
)
def test_a_cut_leaves_the_other_axes(
    kind: str, cut: dict[str, float], labels: set[str], images: int, tmp_path: Path
) -> None:
    figure = drawn(stored(tmp_path / "s.h5", kind), cut=cut, component="u")
    text = all_text(figure)
    assert {axis for axis in "tyx" if f"{axis} (dimensionless)" in text} == labels
    assert sum(len(axes.images) for axes in figure.axes) == images
    assert "cut at " in text


def test_a_cut_shows_the_nearest_nodes_values(tmp_path: Path) -> None:
    path = stored(tmp_path / "s.h5", "space-time")
    nodes = drawn(path, cut={"t": 10.2}).axes[0].lines[1].get_ydata()
    assert np.array_equal(nodes, smooth_field(WAVE)[0, 0, :, 0]), "10.2 of 10.25 is nearest to level 0"
    nodes = drawn(path, cut={"t": 5.2}).axes[0].lines[1].get_ydata()
    assert np.array_equal(nodes, smooth_field(WAVE)[20, 0, :, 0])


@given(nodes=st.integers(1, 40), factor=st.integers(1, 9), seed=st.integers(0, 99))
def test_the_interpolant_passes_through_the_nodes(nodes: int, factor: int, seed: int) -> None:
    values = np.random.default_rng(seed).standard_normal(nodes)
    fine = trigonometric(values, factor)
    assert len(fine) == nodes * factor + 1
    assert fine[:-1:factor] == pytest.approx(values, abs=1e-12) and fine[-1] == fine[0]


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"component": "w"}, "--component: must be one of u, got 'w'"),
        ({"cut": {"y": 1.0}}, "--cut: must name one of the axes t, x, got 'y'"),
        ({"cut": {"t": 11.0}}, "--cut: t must be between 0 and 10.25, got 11"),
        ({"cut": {"t": 1.0, "x": 1.0}}, "--cut: must leave a line or a plane"),
        ({"size": (4.0, 4.0)}, "--size: must be at least 6.6x4.5 for this picture, got 4x4"),
        ({"format": "bmp"}, "--format: must be one of png, pdf, svg, got 'bmp'"),
    ],
)
def test_an_impossible_wish_is_refused(options: dict[str, Any], message: str, tmp_path: Path) -> None:
    path = stored(tmp_path / "s.h5", "space-time")
    with pytest.raises(InputError) as caught:
        plot_state(path, tmp_path / "s.png", PictureOptions(**options))
    assert message in str(caught.value)
    assert not (tmp_path / "s.png").exists()


@pytest.mark.parametrize(("form", "start"), [("png", b"\x89PNG"), ("pdf", b"%PDF-"), ("svg", b"<?xml")])
def test_a_picture_is_written_in_each_format_and_repeats(form: str, start: bytes, tmp_path: Path) -> None:
    path = stored(tmp_path / "s.h5", "profile")
    first = plot_state(path, tmp_path / f"first.{form}").read_bytes()
    again = plot_state(path, tmp_path / "again", PictureOptions(format=form, size=(9.0, 6.0))).read_bytes()
    same = plot_state(path, tmp_path / f"same.{form}").read_bytes()
    assert first.startswith(start) and again.startswith(start)
    assert first == same != again


def test_a_format_follows_from_the_name() -> None:
    assert picture_format("a.PDF", None) == "pdf"
    assert picture_format("a.png", "svg") == "svg"


def test_a_folder_that_is_missing_is_named(tmp_path: Path) -> None:
    path = stored(tmp_path / "s.h5", "profile")
    with pytest.raises(LatticeError, match=r"cannot write picture .*gone/s.png: No such file"):
        plot_state(path, tmp_path / "gone" / "s.png")


@pytest.mark.parametrize("kind", KINDS)
def test_a_description_fits_the_terminal_and_cautions(kind: str, tmp_path: Path) -> None:
    text = describe_state(stored(tmp_path / "s.h5", kind, versions={"a library": "1.2.3 " * 40}))
    # The path on the first line may be of any length.
    assert max(len(line) for line in text.splitlines()[1:]) <= 100
    assert "steps         1 nonlinear" in text, "step 0 is the start"
    assert "no certificate" in text and "design decision" in text
    assert "* drift_x" in text and "  nu " in text
    assert ("* period" in text) == (KINDS[kind][0].nt > 1)


def test_the_json_of_a_state_is_complete(tmp_path: Path) -> None:
    found = json.loads(state_json(stored(tmp_path / "s.h5", "sheet")))
    assert found["lattice"] == {"nt": 12, "nx": 24, "ny": 16, "order_t": 4, "order_x": 4, "order_y": 4}
    assert found["scalars"]["drift_x"] == -0.125
    assert found["schema"] == "lattice-state" and found["residual_rms"] == 3.5e-11
    assert "no certificate" in found["caution"]


@given(
    step=st.integers(0, 9999),
    residual=st.floats(1e-300, 1e300),
    values=st.lists(st.floats(-1e12, 1e12), min_size=2, max_size=2),
    iterations=st.integers(0, 999_999),
    seconds=st.floats(0.0, 999_999.0),
)
def test_progress_stays_in_its_columns(
    step: int, residual: float, values: list[float], iterations: int, seconds: float
) -> None:
    names = ["period", "a_long_parameter_name"]
    line = step_line(step, residual, dict(zip(names, values, strict=True)), iterations, seconds, 310.0)
    assert len(line) == len(header(names))
    assert line.isascii() and line.isprintable()
    assert len(line.split()) == 7
    for text, value in zip(line.split()[2:4], values, strict=True):
        assert float(text) == pytest.approx(value, rel=1e-5, abs=1e-300)
