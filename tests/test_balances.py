"""Balances derived from laws, and observables, against identities and exact solutions."""

from __future__ import annotations

import numpy as np
import pytest
import sympy

from lattice.check.balances import balances_of, measure_balances
from lattice.check.fourier import Fourier
from lattice.check.observables import measure, read_named
from lattice.check.resolution import measure_resolution
from lattice.check.statistics import correlation_length
from lattice.check.subject import open_subject
from lattice.check.variational import vanishes
from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law, read_law, read_law_file
from lattice.laws.law import Deriv, symbol
from tests.checking import FILM, store
from tests.solving import TURN, Solved, nodes, scalars, solve


def terms(law, name: str) -> set[str]:
    """Return the terms of a balance, as text."""
    found = next(b for b in balances_of(law) if b.name == name)
    return {str(term) for term in found.terms}


def subject_of(path, law, lattice, field, **values):
    from mpi4py import MPI

    law = load_law(law) if isinstance(law, str) else law
    return open_subject(store(path, law, lattice, Solved(field, scalars(law, **values), None)), MPI.COMM_SELF)


def test_energy_balances_are_derived():
    # d/dt <u^2>/2 = <u_x^2> - <u_xx^2> for the film law (derived by parts): advection drops out.
    assert terms(load_law(FILM), "energy") == {"u*Deriv(u, 2, 0)", "u*Deriv(u, 4, 0)", "-source_u*u"}
    # d/dt <|A|^2>/2 = <|A|^2> - <|grad A|^2> - <|A|^4> for the complex Ginzburg-Landau law (derived): neither b nor
    # c enters.
    assert terms(load_law("ginzburg-landau"), "energy") == {
        "-u**2", "-v**2", "u**4", "v**4", "2*u**2*v**2", "-u*Deriv(u, 2, 0)", "-v*Deriv(v, 2, 0)",
    }  # fmt: skip
    # Advection of vorticity drops out of the enstrophy balance, though of neither of its two terms alone.
    assert not any("Deriv(psi" in term for term in terms(load_law("kolmogorov"), "energy"))


def test_a_law_of_odd_derivatives_only_has_no_energy_balance_to_keep():
    assert all(b.name != "energy" for b in balances_of(load_law("korteweg-de-vries")))


@pytest.mark.parametrize("power", [1, 2, 3])
def test_total_derivatives_have_no_mean_and_others_have(power):
    u, v = symbol("u"), symbol("v")
    product = u**power * v
    whole = sympy.Mul(power, u ** (power - 1), v, Deriv(u, 1, 0)) + u**power * Deriv(v, 1, 0)
    assert vanishes(whole, (u, v))
    assert vanishes(Deriv(product, 0, 2), (u, v))
    assert not vanishes(whole + u * v, (u, v))


def test_work_equals_dissipation_in_the_laminar_shear_flow(tmp_path):
    # u = (Re/n^2) sin(n y), D = I = Re/(2 n^2), energy Re^2/(4 n^4) (derived; Chandler and Kerswell, J. Fluid Mech.
    # 722 (2013) 554, from memory).
    re, n = 10.0, 2.0
    y = nodes(24, TURN)[:, None]
    vorticity = -re / n * np.cos(n * y) * np.ones((24, 16))
    field = np.stack([vorticity, vorticity / n**2], axis=-1)[None]
    lattice = Lattice(1, 24, 16, dimensions=2)
    subject = subject_of(
        tmp_path / "laminar.h5", "kolmogorov", lattice, field, Re=re, n=n, length_x=TURN, length_y=TURN
    )
    fourier = Fourier(subject.law, subject.system.blocks, subject.owned, subject.values)
    found = {b.name: b for b in measure_balances(subject, fourier)}
    work = found["kinetic_energy"]
    assert work.origin == "law file"
    assert work.gain == pytest.approx(re / (2.0 * n**2), rel=1e-12)
    assert work.loss == pytest.approx(re / (2.0 * n**2), rel=1e-12)
    assert found["energy"].computed_to_expected == pytest.approx(1.0, rel=1e-12)
    numbers = measure(
        subject.system, subject.owned, subject.values, read_named(subject.law, ["speed=psi_y**2/2"])
    )
    assert numbers["speed"] == pytest.approx(re**2 / (4.0 * n**4), rel=1e-12)
    assert numbers["kinetic_energy_production"] == pytest.approx(re / (2.0 * n**2), rel=1e-12)
    fourier.destroy()
    subject.destroy()


def test_a_turning_wave_has_the_observables_of_its_formula(tmp_path):
    # A = R exp(i Q x) in the frame that turns at -omega: R^2 = 1 - Q^2 (Aranson and Kramer, Rev. Mod. Phys. 74
    # (2002) 99, from memory). Q = 1/2: R^2 = 3/4; <|A_x|^2> = Q^2 R^2, <|A|^4> = R^4.
    q, square = 0.5, 0.75
    x = nodes(32, 2.0 * TURN)
    amplitude = np.sqrt(square) * np.exp(1j * q * x)
    field = np.stack([amplitude.real, amplitude.imag], axis=-1)[None, None]
    lattice = Lattice(1, 1, 32)
    values = {"b": 0.0, "c": 1.0, "length_x": 2.0 * TURN, "rotation": -square}
    subject = subject_of(tmp_path / "wave.h5", "ginzburg-landau", lattice, field, **values)
    numbers = measure(subject.system, subject.owned, subject.values)
    assert numbers["mean_square"] == pytest.approx(square, rel=1e-12)
    assert numbers["production"] == pytest.approx(square, rel=1e-12)
    assert numbers["dissipation"] == pytest.approx(q**2 * square + square**2, rel=1e-12)
    assert numbers["max_u"] == pytest.approx(np.sqrt(square), rel=1e-10)
    fourier = Fourier(subject.law, subject.system.blocks, subject.owned, subject.values)
    along_x = measure_resolution(fourier, subject.owned)[0]
    assert correlation_length(along_x) == pytest.approx(1.0 / q, rel=1e-4)  # of a single wave: 1/k
    assert along_x.last_third < 1e-28
    fourier.destroy()
    subject.destroy()


def test_extremes_are_those_of_the_series_not_of_the_nodes(tmp_path):
    law = read_law("own", ("u_t - lap(u) = 0",), ("u",), {}, 2)
    t, y, x = (nodes(n, TURN).reshape(s) for n, s in ((6, (-1, 1, 1)), (8, (1, -1, 1)), (10, (1, 1, -1))))
    field = np.cos(t - 0.3) + 0.5 * np.cos(2 * y - 0.2) * np.cos(x - 1.1) + 0.1 * np.sin(2 * x)
    lattice = Lattice(6, 8, 10, dimensions=2)
    values = {"period": TURN, "length_x": TURN, "length_y": TURN}
    subject = subject_of(tmp_path / "own.h5", law, lattice, field[..., None], **values)
    from scipy.optimize import minimize

    def negative(p):
        t, y, x = p
        return -(np.cos(t - 0.3) + 0.5 * np.cos(2 * y - 0.2) * np.cos(x - 1.1) + 0.1 * np.sin(2 * x))

    exact = -min(minimize(negative, (0.3, 0.1, x0), tol=1e-14).fun for x0 in (1.0, 0.5))
    numbers = measure(subject.system, subject.owned, subject.values)
    assert numbers["max_u"] == pytest.approx(exact, abs=1e-10)
    assert numbers["max_u"] > field.max() + 1e-4
    subject.destroy()


def test_gray_scott_feeds_what_it_consumes(tmp_path):
    # u = (1 - sqrt(1 - 4 (F+k)^2/F))/2, v = F (1 - u)/(F + k) at F = 0.04, k = 0.05: 0.2820550528, 0.3190866432
    # (derived). A bump that decays would not balance; the uniform state does.
    u, v = 0.2820550528, 0.3190866432
    field = np.broadcast_to(np.array([u, v]), (1, 1, 8, 2)).copy()
    lattice = Lattice(1, 1, 8)
    values = {"F": 0.04, "k": 0.05, "length_x": 2.5}
    subject = subject_of(tmp_path / "uniform.h5", "gray-scott", lattice, field, **values)
    fourier = Fourier(subject.law, subject.system.blocks, subject.owned, subject.values)
    found = {b.name: b for b in measure_balances(subject, fourier)}
    assert found["mean of u"].error < 1e-9
    assert found["mean of u"].gain == pytest.approx(0.04, rel=1e-9)
    assert found["mean of v"].gain == pytest.approx(u * v**2, rel=1e-12)
    fourier.destroy()
    subject.destroy()


def test_observables_of_the_user_are_read_or_refused():
    law = load_law(FILM)
    names = [entry.name for entry in read_named(law, ["slope=u_x**2", "curved = u_xx**2"])]
    assert names[-2:] == ["slope", "curved"]
    for bad in (["slope"], ["=u"], ["slope=w_x"], ["a=u", "a=u**2"], ["interface_excess=u"]):
        with pytest.raises(InputError):
            read_named(law, bad)


def test_a_state_off_its_lattice_solution_is_not_in_balance(tmp_path):
    length, nx = 7.0248147310, 24
    x = nodes(nx, TURN)
    start = 2.4 * np.sin(x) - 0.35 * np.sin(2 * x)
    steady = solve(FILM, Lattice(1, 1, nx), start[None, None, :], ("drift_x",), length_x=length)
    for factor, least, most in ((1.0, 0.0, 1e-3), (1.1, 0.0, 1e-3), (None, 0.05, 1.0)):
        # A multiple keeps the balance of a quadratic energy, another shape does not.
        field = steady.field * factor if factor else steady.field + 0.5 * np.cos(3 * x)[None, None, :, None]
        subject = subject_of(tmp_path / "state.h5", FILM, Lattice(1, 1, nx), field, length_x=length)
        fourier = Fourier(subject.law, subject.system.blocks, subject.owned, subject.values)
        energy = next(b for b in measure_balances(subject, fourier) if b.name == "energy")
        assert least <= energy.error <= most
        fourier.destroy()
        subject.destroy()


GOOD = """
name = "decay"
title = "A law for tests"
source = "made up for tests"
dimensions = 1
components = ["u"]
equations = ["u_t - u_xx + u = 0"]

[balances.loss]
gain = "u_x**2"
loss = "u**2"

[observables.slope]
formula = "u_x**2"
meaning = "mean square slope"
"""


def test_a_law_file_may_give_balances_and_observables(tmp_path):
    path = tmp_path / "decay.toml"
    path.write_text(GOOD)
    law = read_law_file(path)
    assert law.balances == (("loss", "u_x**2", "u**2"),)
    assert law.observables == (("slope", "u_x**2", "mean square slope"),)
    for old, new in (
        ('gain = "u_x', 'gain = "w_x'),
        ('loss = "u**2"', 'lost = "u"'),
        ('u_x**2"\nmeaning', 'u_x**"\nmeaning'),
    ):
        path.write_text(GOOD.replace(old, new))
        with pytest.raises(InputError):
            read_law_file(path)
