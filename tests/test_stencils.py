"""Difference weights: published values, an independent library, exactness on polynomials."""

from __future__ import annotations

from fractions import Fraction

import pytest
import sympy
from hypothesis import given
from hypothesis import strategies as st

from lattice.geometry.stencils import (
    SPACE_ORDERS,
    TIME_ORDERS,
    central,
    half_width,
    staggered,
    weights,
)
from lattice.kernels.scheme import space_stencil, time_weights

# B. Fornberg, Math. Comp. 51 (1988) 699-706: its recursion, run anew in exact rational arithmetic; the
# values agree with the tables there for centred and half-way points (tables from memory).
CENTRAL = {
    (1, 2): "-1/2 0 1/2",
    (1, 4): "1/12 -2/3 0 2/3 -1/12",
    (1, 6): "-1/60 3/20 -3/4 0 3/4 -3/20 1/60",
    (1, 8): "1/280 -4/105 1/5 -4/5 0 4/5 -1/5 4/105 -1/280",
    (2, 2): "1 -2 1",
    (2, 4): "-1/12 4/3 -5/2 4/3 -1/12",
    (2, 6): "1/90 -3/20 3/2 -49/18 3/2 -3/20 1/90",
    (2, 8): "-1/560 8/315 -1/5 8/5 -205/72 8/5 -1/5 8/315 -1/560",
    (3, 2): "-1/2 1 0 -1 1/2",
    (3, 4): "1/8 -1 13/8 0 -13/8 1 -1/8",
    (4, 2): "1 -4 6 -4 1",
    (4, 4): "-1/6 2 -13/2 28/3 -13/2 2 -1/6",
    (4, 6): "7/240 -2/5 169/60 -122/15 91/8 -122/15 169/60 -2/5 7/240",
}
HALFWAY = {
    (0, 2): "1/2 1/2",
    (0, 4): "-1/16 9/16 9/16 -1/16",
    (0, 6): "3/256 -25/256 75/128 75/128 -25/256 3/256",
    (1, 2): "-1 1",
    (1, 4): "1/24 -9/8 9/8 -1/24",
    (1, 6): "-3/640 25/384 -75/64 75/64 -25/384 3/640",
}

small = st.integers(-20, 20)
fractions = st.builds(Fraction, small, st.integers(1, 7))


def exact(text: str) -> tuple[Fraction, ...]:
    return tuple(Fraction(word) for word in text.split())


@pytest.mark.parametrize(("derivative", "order"), CENTRAL)
def test_central_weights_are_fornbergs(derivative: int, order: int) -> None:
    assert central(derivative, order) == exact(CENTRAL[derivative, order])


@pytest.mark.parametrize(("derivative", "order"), HALFWAY)
def test_weights_at_the_midpoint_are_fornbergs(derivative: int, order: int) -> None:
    assert staggered(derivative, order) == exact(HALFWAY[derivative, order])


@pytest.mark.parametrize("derivative", range(9))
@pytest.mark.parametrize("order", SPACE_ORDERS)
def test_half_width_is_what_the_order_needs_and_no_more(derivative: int, order: int) -> None:
    found = central(derivative, order)
    assert len(found) == 2 * half_width(derivative, order) + 1
    assert derivative == 0 or found[0] != 0


def moment(found: tuple[Fraction, ...], first: Fraction, degree: int) -> Fraction:
    """Return what weights on consecutive nodes make of s**degree."""
    return sum((w * (first + k) ** degree for k, w in enumerate(found)), Fraction(0))


@pytest.mark.parametrize("derivative", range(1, 9))
@pytest.mark.parametrize("order", SPACE_ORDERS)
def test_central_weights_have_their_order_exactly(derivative: int, order: int) -> None:
    found, first = central(derivative, order), Fraction(-half_width(derivative, order))
    for degree in range(derivative + order):
        wanted = sympy.factorial(derivative) if degree == derivative else 0
        assert moment(found, first, degree) == wanted
    assert moment(found, first, derivative + order) != 0


@pytest.mark.parametrize("derivative", [0, 1])
@pytest.mark.parametrize("order", TIME_ORDERS)
def test_midpoint_weights_have_their_order_exactly(derivative: int, order: int) -> None:
    found = staggered(derivative, order)
    first = Fraction(1, 2) - order // 2  # the lowest level, seen from the midpoint
    for degree in range(order + derivative):
        assert moment(found, first, degree) == (1 if degree == derivative else 0)
    assert moment(found, first, order + derivative) != 0


@pytest.mark.parametrize("order", SPACE_ORDERS)
@pytest.mark.parametrize("derivative", range(9))
def test_central_weights_are_even_or_odd(derivative: int, order: int) -> None:
    found, sign = central(derivative, order), (-1) ** derivative
    assert found == tuple(sign * w for w in reversed(found))


@given(st.lists(fractions, min_size=1, max_size=6, unique=True), fractions, st.data())
def test_weights_on_any_nodes_are_those_of_an_independent_library(
    nodes: list[Fraction], point: Fraction, data: st.DataObject
) -> None:
    derivative = data.draw(st.integers(0, len(nodes) - 1))
    rational = [sympy.Rational(n.numerator, n.denominator) for n in nodes]
    at = sympy.Rational(point.numerator, point.denominator)
    wanted = sympy.finite_diff_weights(derivative, rational, at)[derivative][-1]
    assert [sympy.Rational(w.numerator, w.denominator) for w in weights(derivative, nodes, point)] == wanted


@given(
    st.lists(fractions, min_size=1, max_size=6, unique=True),
    fractions,
    st.lists(small, min_size=6),
    st.data(),
)
def test_weights_are_exact_on_every_polynomial_the_nodes_determine(
    nodes: list[Fraction], point: Fraction, coefficients: list[int], data: st.DataObject
) -> None:
    derivative = data.draw(st.integers(0, len(nodes) - 1))
    s = sympy.Symbol("s")
    polynomial = sympy.Poly(coefficients[: len(nodes)], s)
    values = [polynomial.eval(sympy.Rational(n.numerator, n.denominator)) for n in nodes]
    found = sum(sympy.Rational(w.numerator, w.denominator) * v
                for w, v in zip(weights(derivative, nodes, point), values, strict=True))  # fmt: skip
    derived = polynomial.diff((s, derivative)) if derivative else polynomial
    assert found == derived.eval(sympy.Rational(point.numerator, point.denominator))


def test_a_mixed_derivative_is_the_product_of_its_axes() -> None:
    # u_xxyy at second order: the outer product of 1, -2, 1 with itself.
    assert space_stencil(2, 2, 2, 2) == {
        (j, i): float((-2 if j == 0 else 1) * (-2 if i == 0 else 1)) for j in (-1, 0, 1) for i in (-1, 0, 1)
    }
    assert space_stencil(1, 0, 4, 8).keys() == {(0, -2), (0, -1), (0, 1), (0, 2)}
    assert space_stencil(0, 1, 8, 2) == {(-1, 0): -0.5, (1, 0): 0.5}


def test_a_row_of_a_steady_lattice_has_no_time_difference() -> None:
    assert time_weights(1) == ([0.0], [1.0])
    assert time_weights(4)[1] == [-1 / 16, 9 / 16, 9 / 16, -1 / 16]
