"""Formulas are read as they are meant, written back, and refused with the place that is wrong."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
import sympy
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from lattice.errors import FormulaError, InputError
from lattice.laws.calculus import conserve, count_terms, differentiate, multiply_out, order_of, vary
from lattice.laws.law import Deriv, symbol
from lattice.laws.names import declare
from lattice.laws.notation import read_equations, read_expression
from lattice.laws.writing import write_expression
from tests.periodic_fields import Box, evaluate

u, v, phi, om, psi = (symbol(name) for name in ("u", "v", "phi", "om", "psi"))
nu, a_b, x, y = (symbol(name) for name in ("nu", "a_b", "x", "y"))

NAMES = (["u", "v", "phi"], ["nu", "a_b"], 2)


def read(text: str) -> sympy.Expr:
    return read_expression(text, *NAMES)


# -- what a formula means ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "meaning"),
    [
        ("u", u),
        ("phi_xx", Deriv(phi, 2, 0)),
        ("u_xyx", Deriv(u, 2, 1)),
        ("a_b*u", a_b * u),
        ("-u**2", -(u**2)),
        ("2**3**2*u", 512 * u),
        ("u/2/nu", u / (2 * nu)),
        ("u - v - 1", u - v - 1),
        ("--u", u),
        ("u*-v", -u * v),
        ("u**-2", 1 / u**2),
        ("0.1*u", u / 10),
        ("2.5e-3*u", u / 400),
        (".5*u", u / 2),
        ("pi*u", sympy.pi * u),
        ("(u**2)_x", Deriv(u**2, 1, 0)),
        ("(u**2)_xy", Deriv(u**2, 1, 1)),
        ("(u)_xx", Deriv(u, 2, 0)),
        ("(u_x)_xy", Deriv(u, 2, 1)),
        ("(nu*u + 3*v_x)_x", nu * Deriv(u, 1, 0) + 3 * Deriv(v, 2, 0)),
        ("(2*nu*u*v)_y", 2 * nu * Deriv(u * v, 0, 1)),
        ("(u*(1 + v))_x", Deriv(u, 1, 0) + Deriv(u * v, 1, 0)),
        ("((u**2)_x)_x", Deriv(u**2, 2, 0)),
        ("(u*u_xx)_x", Deriv(u * Deriv(u, 2, 0), 1, 0)),
        ("sin(u)_x", Deriv(sympy.sin(u), 1, 0)),
        ("(sin(nu*y))_y", nu * sympy.cos(nu * y)),
        ("(nu)_x + u", u),
        ("lap(u)", Deriv(u, 2, 0) + Deriv(u, 0, 2)),
        ("lap(lap(u))", Deriv(u, 4, 0) + 2 * Deriv(u, 2, 2) + Deriv(u, 0, 4)),
        ("lap(lap(u))_x", Deriv(u, 5, 0) + 2 * Deriv(u, 3, 2) + Deriv(u, 1, 4)),
        ("sqrt(1 + u**2)", sympy.sqrt(1 + u**2)),
        ("exp(u)*sech(v)*tanh(x)", sympy.exp(u) * sympy.sech(v) * sympy.tanh(x)),
        ("nu**0.5*u", sympy.sqrt(nu) * u),
        ("u/(1 + v**2)", u / (1 + v**2)),
        ("phi_x**2", Deriv(phi, 1, 0) ** 2),
        ("\tu\n +  v ", u + v),
    ],
)
def test_text_has_its_usual_meaning(text, meaning):
    assert sympy.expand(read(text) - meaning) == 0


@pytest.mark.parametrize(
    ("text", "meaning"),
    [
        ("u*u_x", Deriv(u**2, 1, 0) / 2),
        ("u_y*nu*u**2", nu * Deriv(u**3, 0, 1) / 3),
        ("(1 - u**2)*u_x", Deriv(u, 1, 0) - Deriv(u**3, 1, 0) / 3),
        ("u*(v + u_x)", u * v + Deriv(u**2, 1, 0) / 2),
        ("(1 + nu*u)**2*u_x", Deriv(u, 1, 0) + nu * Deriv(u**2, 1, 0) + nu**2 * Deriv(u**3, 1, 0) / 3),
        ("v*u_x", v * Deriv(u, 1, 0)),
        ("u*v*u_x", u * v * Deriv(u, 1, 0)),
        ("u*u_xx", u * Deriv(u, 2, 0)),
        ("u*u_x*u_y", u * Deriv(u, 1, 0) * Deriv(u, 0, 1)),
        ("u*u_x**2", u * Deriv(u, 1, 0) ** 2),
        ("sin(x)*u*u_x", sympy.sin(x) * u * Deriv(u, 1, 0)),
        ("sin(u)*u_x", sympy.sin(u) * Deriv(u, 1, 0)),
        ("u_x/u", Deriv(u, 1, 0) / u),
    ],
)
def test_advection_by_a_polynomial_of_the_field_becomes_conservative(text, meaning):
    assert read(text) == meaning


def test_equations_come_in_the_order_of_components_with_signs_as_moved_to_the_left():
    texts = ["om + lap(psi) = 0", "2*om_t = nu*lap(om) - psi_y*om_x"]
    first, second = read_equations(texts, ["om", "psi"], ["nu"], 2)
    laplacian = {name: Deriv(name, 2, 0) + Deriv(name, 0, 2) for name in (om, psi)}
    assert (first.component, first.evolving) == ("om", True)
    expected = (Deriv(psi, 0, 1) * Deriv(om, 1, 0) - nu * laplacian[om]) / 2
    assert sympy.expand(first.expression - expected) == 0
    assert (second.component, second.evolving) == ("psi", False)
    assert second.expression == om + laplacian[psi]


def test_time_derivative_on_the_right_is_normalised_to_plus_one():
    (equation,) = read_equations(["u_xx = u_t"], ["u"], [], 1)
    assert equation.expression == -Deriv(u, 2, 0)
    (equation,) = read_equations(["-(u_t + u)/4 = 0"], ["u"], [], 1)
    assert equation.expression == u


def test_laplacian_has_no_y_in_one_dimension():
    assert read_expression("lap(lap(u))", ["u"], [], 1) == Deriv(u, 4, 0)


# -- properties ----------------------------------------------------------------------------------------

_numbers = st.integers(0, 9).map(str)
_operators = st.sampled_from(["+", "-", "*", "/", "**"])


@st.composite
def arithmetic(draw, depth=3):
    """Text of plain arithmetic with whole exponents, in the precedence Python gives it as well."""
    if depth == 0 or draw(st.booleans()):
        return draw(_numbers)
    operator = draw(_operators)
    left = draw(arithmetic(depth=depth - 1))
    if operator == "**":
        return f"{left}**{draw(st.sampled_from(['0', '1', '2', '-1', '-2']))}"
    right = draw(arithmetic(depth=depth - 1))
    text = f"{left}{operator}{right}"
    return draw(st.sampled_from([text, f"({text})", f"-{text}", f"(-{text})"]))


@settings(deadline=None)
@given(arithmetic())
def test_precedence_is_that_of_python(text):
    exact = "".join(f"Fraction({c})" if c.isdigit() else c for c in text)
    try:
        # Python itself is the reference; the text is made above, not read from anywhere.
        expected = eval(exact, {"Fraction": Fraction})
    except ZeroDivisionError:
        with pytest.raises(FormulaError, match="zero"):
            read(f"u + {text}")
        return
    value = read(f"u + {text}") - u
    assert Fraction(int(value.p), int(value.q)) == expected


@st.composite
def expressions(draw, depth=3):
    """A SymPy expression in standard form, made without the parser."""
    fields = {u, v, phi}
    if depth == 0:
        leaves = [u, v, phi, nu, a_b, x, y, sympy.Rational(3, 7), sympy.Integer(2), sympy.pi]
        leaf = draw(st.sampled_from(leaves))
        return differentiate(leaf, *draw(st.sampled_from([(0, 0), (1, 0), (0, 2), (2, 1)])), fields)
    parts = [draw(expressions(depth=depth - 1)) for _ in range(2)]
    kind = draw(st.sampled_from(["add", "add", "mul", "mul", "power", "function", "derivative", "ratio"]))
    if kind == "add":
        return sympy.Add(*parts)
    if kind == "mul":
        return sympy.Mul(*parts)
    if kind == "power":
        return parts[0] ** draw(st.integers(2, 3))
    if kind == "function":
        return draw(st.sampled_from([sympy.sin, sympy.cos, sympy.tanh, sympy.cosh]))(parts[0])
    if kind == "ratio":
        return parts[0] / (5 + draw(st.sampled_from([u, v, nu])) ** 2)
    return differentiate(parts[0], *draw(st.sampled_from([(1, 0), (0, 1), (1, 1)])), fields)


@settings(max_examples=150, deadline=None)
@given(expressions())
def test_an_expression_written_and_read_again_is_the_same(expression):
    assume(max(order_of(expression)[:2]) <= 6 and order_of(expression)[2] <= 8)
    fields = frozenset({u, v, phi})
    assert multiply_out(read(write_expression(expression)) - conserve(expression, fields)) == 0


class Sample:
    """A formula as text next to its values, built together: the values owe nothing to the parser."""

    box = Box(48, 5.0, 48, 4.0)
    rng = np.random.default_rng(7)
    u_values = box.smooth_field(rng)
    v_values = box.smooth_field(rng)

    def __init__(self, text: str, values: np.ndarray) -> None:
        self.text, self.values = text, values


@st.composite
def samples(draw, depth=3):
    box = Sample.box
    if depth == 0:
        leaves = {
            "u": Sample.u_values,
            "v": Sample.v_values,
            "nu": np.asarray(0.3),
            "2": np.asarray(2.0),
            "0.25": np.asarray(0.25),
            "sin(2*pi*x/5)": np.sin(2 * np.pi * box.x / 5),
        }
        text = draw(st.sampled_from(sorted(leaves)))
        return Sample(text, leaves[text])
    one, two = draw(samples(depth=depth - 1)), draw(samples(depth=depth - 1))
    kind = draw(st.sampled_from(["+", "-", "*", "(_x", "(_yy", "lap", "tanh", "neg"]))
    if kind == "+":
        return Sample(f"{one.text} + {two.text}", one.values + two.values)
    if kind == "-":
        return Sample(f"{one.text} - ({two.text})", one.values - two.values)
    if kind == "*":
        return Sample(f"({one.text})*({two.text})", one.values * two.values)
    if kind == "neg":
        return Sample(f"-({one.text})", -one.values)
    if kind == "tanh":
        return Sample(f"tanh(0.2*({one.text}))", np.tanh(0.2 * one.values))
    if kind == "lap":
        return Sample(f"lap({one.text})", box.derivative(one.values, 2, 0) + box.derivative(one.values, 0, 2))
    order = (1, 0) if kind == "(_x" else (0, 2)
    return Sample(f"({one.text}){kind[1:]}", box.derivative(one.values, *order))


@settings(max_examples=100, deadline=None)
@given(samples())
def test_reading_keeps_the_values_of_a_formula(sample):
    expression = read_expression(sample.text, ["u", "v"], ["nu"], 2)
    values = {"u": Sample.u_values, "v": Sample.v_values, "nu": 0.3}
    found = evaluate(expression, Sample.box, values)
    # Fourth derivatives of waves up to number 12 amplify rounding by about 1e5; products resolve exactly.
    largest = np.abs(sample.values).max()
    np.testing.assert_allclose(found, sample.values, rtol=0, atol=1e-7 * max(1.0, largest))


@settings(deadline=None)
@given(expressions(depth=2))
def test_varying_a_field_is_the_derivative_by_an_added_constant(expression):
    fields = {u, v, phi}
    shift = sympy.Dummy("shift", real=True)

    def shifted(part):
        if part == u:
            return u + shift
        if isinstance(part, Deriv):
            return differentiate(
                shifted(part.args[0]), int(part.args[1]), int(part.args[2]), fields | {shift}
            )
        return part.func(*map(shifted, part.args)) if part.args else part

    by_limit = sympy.diff(shifted(expression).replace(Deriv, _spread(shift, fields)), shift).subs(shift, 0)
    assert multiply_out(by_limit - vary(expression, u, fields)) == 0


def _spread(shift, fields):
    """Take powers of a constant `shift` out of derivatives, to first order."""

    def spread(inner, a, b):
        first = differentiate(sympy.diff(inner, shift).subs(shift, 0), int(a), int(b), fields)
        return differentiate(inner.subs(shift, 0), int(a), int(b), fields) + shift * first

    return spread


# -- what is refused -----------------------------------------------------------------------------------

REFUSED = [
    # equation, message, offset of the pointer
    ("u_t + w = 0", "unknown name 'w'", 6),
    ("u_t + vv_x = 0", "did you mean 'v_x'", 6),
    ("u_t + nuu = 0", "did you mean 'nu'", 6),
    ("u_t + sine(u) = 0", "did you mean 'sin'", 6),
    ("u_t + (u = 0", r"this '\(' is never closed", 6),
    ("u_t + u) = 0", r"this '\)' closes nothing", 7),
    ("u_t + () = 0", "is missing here", 7),
    ("u_t + u", "must have one '='", 7),
    ("u_t = u = 0", "must end after its right-hand side", 8),
    ("u_t == u", "one '='", 4),
    ("u_t + 2u = 0", "operator is missing before 'u'", 7),
    ("u_t + u v = 0", "operator is missing before 'v'", 8),
    ("u_t + u(v) = 0", r"operator is missing before '\('", 7),
    ("u_t + u + = 0", "is missing here", 10),
    ("u_t + * u = 0", "must stand here", 6),
    ("", "is missing here", 0),
    ("u_t + sin = 0", "must be followed by its argument", 6),
    ("u_t + lap u = 0", "must be followed by its argument", 6),
    ("u_t + u^2 = 0", "write \\*\\* for a power", 7),
    ("u_t + u_xxxxxxx = 0", "got 7 and 7", 6),
    ("u_t + u_xxxxxyyyy = 0", "got 5 and 9", 6),
    ("u_t + ((u*u_xxxx)_xx)_x = 0", "got 7 and 7", 21),
    ("u_t + lap(lap(lap(lap(u)))) = 0", "got 8 and 8", 6),
    ("u_t + u_z = 0", "a subscript must be made of x, y, t, got 'z'", 6),
    ("u_t + nu_x = 0", "'nu' is a parameter", 6),
    ("u_t + (u)_z = 0", "must be made of x, y", 9),
    ("u_t + (u)_x_y = 0", "must be made of x, y", 9),
    ("u_t + (u)_t = 0", "put _t on a bare component", 9),
    ("u_t + u _x = 0", "must follow a component or a closing parenthesis directly", 8),
    ("u_t + t*u = 0", "must not depend on time", 6),
    ("u_tt + u = 0", "plain u_t", 0),
    ("u_xt + u = 0", "plain u_t", 0),
    ("u_t*u = 0", "number as factor", 0),
    ("nu*u_t + u = 0", "number as factor", 3),
    ("u_t**2 + u = 0", "number as factor", 0),
    ("1/u_t + u = 0", "number as factor", 2),
    ("sin(u_t) = 0", "number as factor", 4),
    ("lap(u_t) + u = 0", "must not be differentiated in space", 0),
    ("u_t + v_t = 0", "one time derivative, got u_t and v_t", 0),
    ("u_t - u_t = 0", "must contain a component", 10),
    ("nu = 0", "must contain a component", 3),
    ("u_t + u**0.5 = 0", "must be a whole number, got 1/2", 9),
    ("u_t + x**0.5 = 0", "must be a whole number", 9),
    ("u_t + u**v = 0", "an exponent must be a number", 9),
    ("u_t + u**nu = 0", "an exponent must be a number", 9),
    ("u_t + u**33 = 0", "at or below 32", 9),
    ("u_t + (u**8)**8 = 0", "at or below 32", 14),
    ("u_t + u**20*u**20 = 0", "at or below 32", 18),
    ("u_t + u/0 = 0", "must not be zero", 8),
    ("u_t + u/(v - v) = 0", "must not be zero", 8),
    ("u_t + 1/u_x = 0", "must not contain derivatives", 8),
    ("u_t + sqrt(u**2) = 0", "must be smooth", 6),
    ("u_t + log(0)*u = 0", "real", 6),
    ("u_t + sqrt(-1)*u = 0", "real", 6),
    ("u_t + log(-2)*u = 0", "real", 6),
    ("u_t + exp(1000)*u = 0", "rescale", 6),
    ("u_t + 1e100*u = 0", "exponent of at most 99", 6),
    ("u_t + e*u = 0", "unknown name 'e'", 6),
    ("u_t + (1 + u + v + phi + u_x + v_x)**12 = 0", "at most 200 terms", 40),
    ("u_t + ((1 + u + v + phi + u_x + v_x)**12)_x = 0", "at most 200 terms", 41),
]


@pytest.mark.parametrize(("text", "message", "position"), REFUSED)
def test_a_wrong_formula_is_refused_at_its_place(text, message, position):
    with pytest.raises(FormulaError, match=message) as refusal:
        read_equations([text, "v = u", "phi = u"], *NAMES)
    assert refusal.value.position == position
    if text:
        pointer = str(refusal.value).splitlines()
        assert pointer[-2].strip() == text.strip()
        assert pointer[-1] == " " * (4 + position) + "^"


@pytest.mark.parametrize("text", ["u_t + y*u = 0", "u_t + u_y = 0", "u_t + (u)_y = 0"])
def test_y_is_refused_in_one_dimension(text):
    with pytest.raises(FormulaError, match="1 dimension; set dimensions = 2"):
        read_equations([text], ["u"], [], 1)


@pytest.mark.parametrize(
    ("texts", "message"),
    [
        (["u_t = v"], "one equation per component, got 1 equations for 2 components"),
        (["u_t = v", "v_t = u", "u = v"], "got 3 equations"),
        (["u_t = v", "u_t = u"], "u_t must stand in one equation only"),
    ],
)
def test_each_component_needs_one_equation(texts, message):
    with pytest.raises(FormulaError, match=message):
        read_equations(texts, ["u", "v"], [], 1)


@pytest.mark.parametrize(
    ("components", "parameters", "message"),
    [
        (["u", "u"], [], "one name twice, got 'u'"),
        (["u"], ["u"], "one name twice, got 'u'"),
        (["u_1"], [], "plain name"),
        (["1u"], [], "plain name"),
        (["\u03c6"], [], "plain name"),
        (["u"], ["__class__"], "plain name"),
        (["u"], ["a" * 41], "at most 40 characters"),
        ([7], [], "plain name"),
        (["u"], ["u_x"], "reads like the derivative of component 'u'"),
        (["u"], ["u_tt"], "reads like the derivative of component 'u'"),
        (["x"], [], "a meaning of its own"),
        (["u"], ["sin"], "a meaning of its own"),
        (["u"], ["period"], "a meaning of its own"),
        (["u"], ["drift_x"], "a meaning of its own"),
        (["u"], ["source_u"], "must not begin with source_"),
        (["u"], ["lambda"], "a word of Python"),
        ([], [], "1 to 8 components, got 0"),
        ([f"u{n}" for n in range(9)], [], "1 to 8 components, got 9"),
        (["u"], [f"p{n}" for n in range(41)], "at most 40 parameters, got 41"),
    ],
)
def test_names_that_cannot_be_used_are_refused(components, parameters, message):
    with pytest.raises(InputError, match=message):
        declare(components, parameters, 1)


@pytest.mark.parametrize("dimensions", [0, 3, "1"])
def test_dimensions_other_than_one_and_two_are_refused(dimensions):
    with pytest.raises(InputError, match=r"law\.dimensions must be 1 or 2"):
        declare(["u"], [], dimensions)


def test_a_parameter_may_have_underscores_that_no_component_claims():
    (equation,) = read_equations(["u_t + k_x*u = 0"], ["u"], ["k_x"], 1)
    assert equation.expression == symbol("k_x") * u


def test_a_long_formula_shows_the_part_around_the_place():
    text = "u_t + " + "u + " * 200 + "w = 0"
    with pytest.raises(FormulaError) as refusal:
        read_equations([text], ["u"], [], 1)
    *_, shown, pointer = str(refusal.value).splitlines()
    assert len(shown) <= 100
    assert shown[pointer.index("^")] == "w"


@settings(deadline=None)
@given(expressions(depth=2))
def test_terms_are_counted_without_multiplying_out(expression):
    counted = count_terms(expression)
    assert len(sympy.Add.make_args(multiply_out(expression))) <= counted
