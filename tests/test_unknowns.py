"""Which scalars are unknown, what condition fixes each, and how they are packed with the field."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest

from lattice.errors import InputError, LatticeError
from lattice.geometry.lattice import Lattice
from lattice.system.system import System
from lattice.system.unknowns import pair_unknowns
from tests.problems import TURN, Array, law_of, random_field, random_unknowns, system_of, values_of

STEADY, LINE = Lattice(1, 1, 16), Lattice(9, 1, 16)
PLANE, FLAT = Lattice(9, 14, 15, 2), Lattice(1, 14, 15, 2)


@pytest.fixture(autouse=True)
def numpy_kernels(monkeypatch: pytest.MonkeyPatch) -> None:
    # That compiled loops equal these is shown in test_kernels.
    monkeypatch.setenv("LATTICE_KERNELS", "numpy")


def paired(name: str, lattice: Lattice, free: tuple[str, ...]) -> dict[str, str]:
    law = law_of(name)
    return {u.name: u.condition for u in pair_unknowns(law, lattice, free, values_of(law))}


@pytest.mark.parametrize(
    ("name", "lattice", "free", "wanted"),
    [
        ("swift-hohenberg", LINE, ("period", "drift_x"), {"period": "phase_t", "drift_x": "phase_x"}),
        ("swift-hohenberg", LINE, ("drift_x", "period"), {"drift_x": "phase_x", "period": "phase_t"}),
        # A length or a parameter takes a phase that is left, time first.
        ("swift-hohenberg", LINE, ("length_x",), {"length_x": "phase_t"}),
        ("swift-hohenberg", LINE, ("r", "period"), {"r": "phase_x", "period": "phase_t"}),
        ("swift-hohenberg", LINE, ("r", "length_x"), {"r": "phase_t", "length_x": "phase_x"}),
        ("swift-hohenberg", STEADY, ("drift_x",), {"drift_x": "phase_x"}),
        ("swift-hohenberg", STEADY, (), {}),
        # An open mean is given, and its source is always free.
        ("kuramoto-sivashinsky", STEADY, (), {"source_u": "mean_u"}),
        ("kuramoto-sivashinsky", LINE, ("period",), {"period": "phase_t", "source_u": "mean_u"}),
        ("kuramoto-sivashinsky", LINE, ("source_u",), {"source_u": "mean_u"}),
        ("kuramoto-sivashinsky-2d", FLAT, ("drift_y", "drift_x"),
         {"drift_y": "phase_y", "drift_x": "phase_x", "source_phi": "mean_phi"}),
        # The force of Kolmogorov flow depends on y: nothing shifts along y.
        ("kolmogorov", PLANE, ("period", "Re"), {"period": "phase_t", "Re": "phase_x", "source_om": "mean_om"}),
    ],
)  # fmt: skip
def test_each_free_scalar_has_its_own_condition(
    name: str, lattice: Lattice, free: tuple[str, ...], wanted: dict[str, str]
) -> None:
    assert paired(name, lattice, free) == wanted


@pytest.mark.parametrize(
    ("name", "lattice", "free", "most"),
    [
        ("swift-hohenberg", STEADY, ("drift_x", "r"), 1),
        ("swift-hohenberg", LINE, ("period", "drift_x", "r"), 2),
        ("burgers", STEADY, ("nu",), 0),
        ("kolmogorov", PLANE, ("period", "drift_x", "length_x"), 2),
    ],
)
def test_more_scalars_than_conditions_are_refused(
    name: str, lattice: Lattice, free: tuple[str, ...], most: int
) -> None:
    with pytest.raises(InputError, match=f"solve.free: at most {most} scalars .* got {len(free)}"):
        paired(name, lattice, free)


def test_a_unit_is_the_scalars_size_or_what_moves_the_state_once_around() -> None:
    law = law_of("kuramoto-sivashinsky")
    values = values_of(law) | {"period": 4.0, "length_x": 20.0, "drift_x": 0.1, "dispersion": 0.0}
    units = {u.name: u.unit for u in pair_unknowns(law, LINE, ("period", "drift_x"), values)}
    assert units == {"period": 4.0, "drift_x": 5.0, "source_u": 1.0}
    fast = {**values, "drift_x": -7.0}
    assert {u.name: u.unit for u in pair_unknowns(law, LINE, ("drift_x",), fast)}["drift_x"] == 7.0
    # A parameter at zero has no size of its own.
    assert pair_unknowns(law, LINE, ("dispersion",), values)[0].unit == 1.0


@pytest.fixture
def system() -> Iterator[System]:
    made = system_of("kuramoto-sivashinsky")
    yield made
    made.destroy()


def test_packing_and_reading_give_back_field_and_scalars(system: System) -> None:
    field = random_field(system.law, system.lattice, 3)
    x = system.vector()
    given = {"period": 3.1, "drift_x": -0.7, "source_u": 0.02, "dispersion": 0.4}
    system.pack(field, given, x)
    assert np.array_equal(system.field_of(x), field)
    assert system.values_of(x) == pytest.approx({**values_of(system.law), **given}, rel=1e-15)
    assert x.getSize() == field.size + 3
    x.destroy()


def test_a_relative_change_of_a_scalar_weighs_as_much_as_one_of_every_node(system: System) -> None:
    x = system.vector()
    system.pack(np.ones(system.blocks.shape), {}, x)
    before = x.copy()
    system.pack(np.ones(system.blocks.shape) * 1.001, {}, x)
    before.axpy(-1.0, x)
    by_field = before.norm()
    system.pack(np.ones(system.blocks.shape) * 1.001, {"period": system.values["period"] * 1.001}, x)
    moved = x.copy()
    system.pack(np.ones(system.blocks.shape) * 1.001, {"period": system.values["period"] / 1.001}, x)
    moved.axpy(-1.0, x)
    assert moved.norm() == pytest.approx(by_field, rel=1e-3)
    for vector in (x, before, moved):
        vector.destroy()


def conditions_at(system: System, field: Array) -> Array:
    x, out = system.vector(), system.vector()
    system.pack(field, {}, x)
    system.residual(x, out)
    found = system.border_of(out) / system.root_size
    for vector in (x, out):
        vector.destroy()
    return found


def test_conditions_hold_at_the_reference_and_fail_where_the_state_has_slid() -> None:
    system = system_of("kuramoto-sivashinsky")
    nt, _, nx = system.lattice.shape
    t, x = np.meshgrid(np.arange(nt) * TURN / nt, np.arange(nx) * TURN / nx, indexing="ij")
    wave = (np.sin(x + 0.3) * (1.0 + 0.5 * np.cos(t)))[:, None, :, None]
    reference = system.vector()
    system.pack(wave, {}, reference)
    system.set_reference(reference)
    names = [u.name for u in system.unknowns]
    assert names == ["period", "drift_x", "source_u"]
    assert conditions_at(system, wave) == pytest.approx([0.0, 0.0, 0.0], abs=1e-14)
    in_time = conditions_at(system, np.roll(wave, 1, axis=0))
    in_space = conditions_at(system, np.roll(wave, 1, axis=2))
    lifted = conditions_at(system, wave + 0.25)
    assert abs(in_time[0]) > 0.05
    assert abs(in_time[1]) < 1e-13
    assert abs(in_space[1]) > 0.05
    assert lifted == pytest.approx([0.0, 0.0, 0.25], abs=1e-13)
    reference.destroy()
    system.destroy()


def test_a_given_mean_is_the_one_that_is_kept() -> None:
    from mpi4py import MPI

    law = law_of("kuramoto-sivashinsky")
    system = System(law, LINE, values_of(law), ("period",), {"u": 0.5}, MPI.COMM_SELF)
    x = random_unknowns(system, 2)
    system.set_reference(x)
    field = random_field(law, LINE, 2)
    assert conditions_at(system, field)[1] == pytest.approx(field.mean() - 0.5, abs=1e-14)
    x.destroy()
    system.destroy()


@pytest.mark.parametrize(
    ("flat_along", "axis", "message"),
    [
        ("time", 0, "the field does not change in time, so period cannot be solved for"),
        ("x", 2, "the field does not vary along x, so drift_x cannot be solved for"),
    ],
)
def test_a_start_that_a_phase_does_not_move_is_refused(flat_along: str, axis: int, message: str) -> None:
    system = system_of("kuramoto-sivashinsky")
    field = random_field(system.law, system.lattice, 2)
    x = system.vector()
    system.pack(np.broadcast_to(field.mean(axis=axis, keepdims=True), field.shape), {}, x)
    with pytest.raises(LatticeError, match=message):
        system.set_reference(x)
    x.destroy()
    system.destroy()


def test_a_wave_that_only_travels_cannot_have_period_and_drift_free() -> None:
    system = system_of("kuramoto-sivashinsky")
    nt, _, nx = system.lattice.shape
    t, x = np.meshgrid(np.arange(nt) / nt, np.arange(nx) / nx, indexing="ij")
    reference = system.vector()
    system.pack(np.cos(TURN * (x - t))[:, None, :, None], {}, reference)
    with pytest.raises(LatticeError, match="change the field in the same way"):
        system.set_reference(reference)
    reference.destroy()
    system.destroy()
