"""How the coarse lattice and the smoother are chosen, said and overridden, and whole runs with them."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from mpi4py import MPI

from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.job.schema import CoarseSection
from lattice.solve.coarse_lattice import RULED, TAIL, Choice, choose
from lattice.spectral.transform import Transform
from lattice.store.statefile import read_meta, read_whole
from lattice.system.constant_part import ConstantPart
from lattice.system.system import System
from tests.levels import marched, window
from tests.mpi import run_module
from tests.parallel import attracting_film
from tests.problems import TURN, law_of
from tests.solving import scalars

FILM = "kuramoto-sivashinsky"
BOX = {"period": 25.0, "length_x": 25.0}
FINE = Lattice(72, 1, 50)


@pytest.fixture(autouse=True)
def numpy_kernels(monkeypatch: pytest.MonkeyPatch) -> None:
    # Choosing evaluates hardly anything: compiling would take nearly all the time.
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


def choice(name: str, lattice: Lattice, spin_up: float = 60.0, keys: dict | None = None, **given) -> Choice:
    system, residual = window(name, lattice, spin_up, **given)
    transform, constant = Transform(system.blocks), ConstantPart(system.operator)
    constant.update()
    try:
        return choose(system, transform, constant, CoarseSection(**(keys or {})))
    finally:
        residual.destroy()
        transform.destroy()
        system.destroy()


def test_film_gets_the_lattice_of_its_active_waves_and_the_spectral_smoother():
    found = choice(FILM, FINE, **BOX)
    # Spacings near 1.0 in x and 0.7 in t.
    assert found.lattice.nx == pytest.approx(25, abs=5)
    assert found.lattice.nt == pytest.approx(36, abs=8)
    assert (found.lattice.order_x, found.smoother) == (8, "spectral")
    # The claim behind it, from the field itself: hardly any energy beyond the lattice's waves.
    energy = np.abs(np.fft.fft2(marched(FILM, FINE, 60.0, tuple(BOX.items()))[:, 0, :, 0])) ** 2
    for axis, nodes in ((0, found.lattice.nt), (1, found.lattice.nx)):
        number = np.abs(np.fft.fftfreq(energy.shape[axis], 1.0 / energy.shape[axis]))
        along = energy.sum(axis=1 - axis)
        assert along[number >= nodes // 2].sum() <= TAIL * along.sum()


def test_slabs_of_too_few_levels_are_refused_where_they_are_asked_for():
    with pytest.raises(InputError, match=r"solve.coarse.smoother: must be 'auto' or 'spectral' below 8"):
        choice(FILM, Lattice(6, 1, 50), keys={"smoother": "slabs"}, **BOX)


def test_reason_names_lattice_smoother_and_why():
    found = choice(FILM, FINE, **BOX)
    text = f"coarse lattice {found.lattice.nt} x {found.lattice.nx} of order 8 for 72 x 50: "
    assert found.reason.startswith(text)
    assert "smoother spectral: beyond it the constant-coefficient part rules" in found.reason
    assert re.search(r"\d(e-\d+)? of the energy lies beyond", found.reason)


def test_refining_the_fine_lattice_keeps_the_coarse_one():
    coarse = choice(FILM, FINE, **BOX).lattice
    finer = choice(FILM, Lattice(142, 1, 100), **BOX).lattice
    assert abs(finer.nx - coarse.nx) <= 2
    assert abs(finer.nt - coarse.nt) <= 4


def test_kolmogorov_flow_at_40_gets_slabs():
    box = {"period": 4.0, "length_x": TURN, "length_y": TURN, "Re": 40.0}
    found = choice("kolmogorov", Lattice(16, 16, 16, 2), 20.0, **box)
    assert found.smoother == "slabs"
    number = re.search(r"fluctuating coefficients are still (\S+) of the constant part", found.reason)
    assert number and float(number[1]) > RULED


def test_keys_of_the_job_override_what_would_be_chosen():
    found = choice(FILM, FINE, keys={"nt": 40, "nx": 30, "order": 6, "smoother": "slabs"}, **BOX)
    assert found.lattice == Lattice(40, 1, 30, 1, 4, 6, 6)
    assert found.smoother == "slabs"
    # What is not given is chosen still.
    assert choice(FILM, FINE, keys={"nt": 40}, **BOX).lattice.nx == choice(FILM, FINE, **BOX).lattice.nx


def test_a_coarse_lattice_has_the_levels_its_halo_needs():
    # Slabs halve the levels; the halo of order 8, as wide in time as in space, is 5 of them.
    box = {"period": 1.0, "length_x": 25.0}
    found = choice(FILM, Lattice(8, 1, 50), keys={"order": 8, "smoother": "slabs"}, **box)
    system = System(law_of(FILM), found.lattice, scalars(law_of(FILM), **box), (), {}, MPI.COMM_SELF)
    assert min(found.lattice.nt, found.lattice.nx) >= max(system.blocks.halos)
    system.destroy()


def test_a_lattice_that_is_itself_too_coarse_is_refused_with_a_remedy():
    with pytest.raises(InputError) as caught:
        choice(FILM, Lattice(34, 1, 24), **BOX)
    assert caught.value.key == "solve.preconditioner"
    message = str(caught.value)
    assert "34 x 24" in message
    assert "refine the lattice" in message and "'direct'" in message


JOB = """
[law]
name = "kuramoto-sivashinsky"

[box]
period = 17.67
length_x = 17.631

[lattice]
nt = 32
nx = 32

[start]
kind = "array"
file = "film.npy"

[solve]
free = ["period", "drift_x"]
residual_rms = 1e-12

[output]
picture = false
"""


def test_a_run_with_two_levels_on_two_ranks_ends_in_the_state_of_direct_lu(tmp_path: Path):
    np.save(tmp_path / "film.npy", attracting_film(levels=32, nodes=32))
    (tmp_path / "film.toml").write_text(JOB, encoding="utf-8")
    keys = {
        "direct": ["solve.preconditioner=direct"],
        "coarse": [
            "solve.preconditioner=coarse",
            "solve.coarse.nt=24",
            "solve.coarse.nx=22",
            "solve.coarse.order=4",
        ],
    }
    said = {}
    for kind, pairs in keys.items():
        given = [word for pair in pairs for word in ("--set", pair)]
        done = run_module(
            2, "lattice", "solve", "film.toml", *given, "--out", kind,
            cwd=tmp_path, timeout=200.0, env={"LATTICE_KERNELS": "numpy"},
        )  # fmt: skip
        said[kind] = done.stdout + done.stderr
    metas = {kind: read_meta(tmp_path / kind / "state.h5") for kind in said}
    assert {meta.outcome for meta in metas.values()} == {"converged"}
    difference = read_whole(tmp_path / "coarse" / "state.h5") - read_whole(tmp_path / "direct" / "state.h5")
    assert np.abs(difference).max() < 1e-8
    for name in ("period", "drift_x"):
        assert metas["coarse"].values[name] == pytest.approx(metas["direct"].values[name], abs=1e-8)
    assert "coarse lattice 24 x 22 of order 4 for 32 x 32" in said["coarse"]
    assert "coarse lattice" not in said["direct"]
