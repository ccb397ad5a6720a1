"""The notation of a law: formulas such as `u_t + u*u_x + u_xx = 0` to equations, by a parser of our own.

Grammar, with the usual precedence (`-u**2` is `-(u**2)`, `**` binds to the right)::

    equation = sum "=" sum
    sum      = product { ("+" | "-") product }
    product  = sign { ("*" | "/") sign }
    sign     = { "+" | "-" } power
    power    = postfix [ "**" sign ]
    postfix  = atom [ subscript ]
    atom     = number | name | function "(" sum ")" | "lap" "(" sum ")" | "(" sum ")"

A subscript of letters x, y after a component (`u_xxy`) or a closing parenthesis (`(u**2)_x`) is a derivative;
`_t` is allowed once in an equation, on a bare component. No text is ever evaluated as code: every name is
looked up in the law's own list, and sizes, nesting, exponents and numbers are limited before any arithmetic.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from typing import TypeVar

import sympy

from lattice.errors import FormulaError
from lattice.laws import bounds
from lattice.laws.calculus import conserve, count_terms, differentiate, order_of
from lattice.laws.law import Equation, symbol
from lattice.laws.names import FUNCTIONS, Names, declare, suggest
from lattice.laws.tokens import Token, refuse, split_tokens

NESTING_AT_MOST = 40
ORDER_PER_AXIS = 6
ORDER_IN_TOTAL = 8

_Result = TypeVar("_Result")


def read_equations(
    texts: Sequence[str], components: Sequence[str], parameters: Iterable[str], dimensions: int
) -> tuple[Equation, ...]:
    """Read the formulas of a law.

    Parameters
    ----------
    texts : sequence of str
        One formula per component. A formula with `c_t` belongs to component c; the others are constraints
        and belong to the remaining components in order.
    components, parameters : names
        Every name the formulas may use besides x, y, pi and the functions.
    dimensions : int
        1 or 2.

    Returns
    -------
    tuple of Equation
        In the order of `components`.

    Raises
    ------
    FormulaError
        For a formula that cannot be read, with the place.
    InputError
        For names that cannot be used.

    Examples
    --------
    >>> read_equations(["u_t + u*u_x + u_xx = 0"], ["u"], [], 1)[0].expression
    Deriv(u, 2, 0) + Deriv(u**2, 1, 0)/2
    """
    names = declare(components, parameters, dimensions)
    if len(texts) != len(names.components):
        raise FormulaError(
            f"a law must have one equation per component, got {len(texts)} equations "
            f"for {len(names.components)} components ({', '.join(names.components)})"
        )
    read = [_Parser(text, names).equation() for text in texts]
    return _assign(read, texts, names)


def read_expression(
    text: str, components: Sequence[str], parameters: Iterable[str], dimensions: int
) -> sympy.Expr:
    """Read one expression (no `=`, no time derivative) in the notation; errors as `read_equations`."""
    return _Parser(text, declare(components, parameters, dimensions)).expression()


def _assign(
    read: list[tuple[str | None, sympy.Expr]], texts: Sequence[str], names: Names
) -> tuple[Equation, ...]:
    evolving: dict[str, sympy.Expr] = {}
    for (component, expression), text in zip(read, texts, strict=True):
        if component in evolving:
            raise refuse(f"{component}_t must stand in one equation only; remove one of them", text, 0)
        if component is not None:
            evolving[component] = expression
    constraints = iter(expression for component, expression in read if component is None)
    return tuple(
        Equation(name, True, evolving[name]) if name in evolving else Equation(name, False, next(constraints))
        for name in names.components
    )


class _Parser:
    """Recursive descent over the tokens of one formula."""

    def __init__(self, text: str, names: Names) -> None:
        if not isinstance(text, str):
            raise FormulaError(f"a formula must be a text, got {type(text).__name__}; put it in quotes")
        self.text, self.names = text, names
        self.tokens = split_tokens(text)
        self.place = 0
        self.depth = 0
        self.fields = frozenset(symbol(name) for name in names.components)
        # Dummies, so that no name in the text can stand for them.
        self.rates = {name: sympy.Dummy(f"{name}_t", real=True) for name in names.components}
        self.first_rate: Token | None = None

    # -- tokens ---------------------------------------------------------------------------------------

    @property
    def token(self) -> Token:
        return self.tokens[self.place]

    def advance(self) -> Token:
        token = self.token
        self.place += 1
        return token

    def accept(self, *symbols: str) -> Token | None:
        if self.token.kind == "symbol" and self.token.text in symbols:
            return self.advance()
        return None

    def fail(self, message: str, token: Token) -> FormulaError:
        return refuse(message, self.text, token.position)

    # -- equation -------------------------------------------------------------------------------------

    def equation(self) -> tuple[str | None, sympy.Expr]:
        """Return the component with the time derivative (None for a constraint) and G."""
        left = self.sum()
        equals = self.accept("=")
        if equals is None:
            raise self._unexpected("an equation must have one '=', for instance '= 0' at its end")
        right = self.sum()
        self._expect_end("an equation must end after its right-hand side")
        return self._solve_for_rate(left - right, equals)

    def expression(self) -> sympy.Expr:
        """Return a whole text without `=` as an expression in standard form."""
        value = self.sum()
        self._expect_end("an expression must end here")
        if self.first_rate is not None:
            raise self.fail("a time derivative must stand in an equation", self.first_rate)
        return self._finish(value, self.tokens[0])

    def _expect_end(self, message: str) -> None:
        if self.token.kind != "end":
            raise self._unexpected(message)

    def _unexpected(self, message: str) -> FormulaError:
        token = self.token
        if token.text == ")":
            message = "parentheses must be balanced: this ')' closes nothing"
        elif token.text == "==":
            message = "an equation must be written with one '='"
        elif token.kind == "subscript":
            message = "a subscript must follow a component or a closing parenthesis directly"
        elif token.kind in ("number", "name") or token.text == "(":
            message = f"an operator is missing before {token.text!r}; write * for a product"
        return self.fail(message, token)

    def _solve_for_rate(self, value: sympy.Expr, equals: Token) -> tuple[str | None, sympy.Expr]:
        rates = [name for name, rate in self.rates.items() if value.has(rate)]
        if not rates:
            expression = self._finish(value, equals)
            if not expression.free_symbols & self.fields:
                raise self.fail("an equation must contain a component, but none is left in this one", equals)
            return None, expression
        place = self.first_rate or equals
        if len(rates) > 1:
            found = " and ".join(f"{name}_t" for name in rates)
            raise self.fail(f"an equation must have one time derivative, got {found}", place)
        rate = self.rates[rates[0]]
        factor = sympy.diff(value, rate)
        if not factor.is_number or factor == 0:
            raise self.fail(
                f"{rates[0]}_t must stand alone with a number as factor; divide the equation by its factor",
                place,
            )
        return rates[0], self._finish(self._divided(value.subs(rate, 0), factor), equals)

    def _divided(self, value: sympy.Expr, factor: sympy.Expr) -> sympy.Expr:
        return sympy.Add(*(term / factor for term in sympy.Add.make_args(value)))

    def _finish(self, value: sympy.Expr, token: Token) -> sympy.Expr:
        self._at(token, count_terms, value)
        return self._at(token, bounds.smooth, self._at(token, conserve, value, self.fields))

    def _at(self, token: Token, function: Callable[..., _Result], *arguments: object) -> _Result:
        """Call `function` and give its refusal the place of `token`."""
        try:
            return function(*arguments)
        except FormulaError as error:
            raise self.fail(error.message, token) from None

    # -- grammar --------------------------------------------------------------------------------------

    def sum(self) -> sympy.Expr:
        self._enter()
        terms = [self.product()]
        while operator := self.accept("+", "-"):
            term = self.product()
            terms.append(-term if operator.text == "-" else term)
        self.depth -= 1
        return self._at(self.token, bounds.bounded, sympy.Add(*terms))

    def product(self) -> sympy.Expr:
        factors = [self.sign()]
        while operator := self.accept("*", "/"):
            place = self.token
            factor = self.sign()
            divides = operator.text == "/"
            factors.append(self._at(place, bounds.inverse, factor) if divides else factor)
        return self._at(self.token, bounds.bounded, sympy.Mul(*factors))

    def sign(self) -> sympy.Expr:
        negative = False
        while operator := self.accept("+", "-"):
            negative ^= operator.text == "-"
        value = self.power()
        return -value if negative else value

    def power(self) -> sympy.Expr:
        base = self.postfix()
        operator = self.accept("**")
        if operator is None:
            return base
        self._enter()
        place = self.token
        exponent = self.sign()
        self.depth -= 1
        return self._at(place, bounds.power, base, exponent, self.fields)

    def postfix(self) -> sympy.Expr:
        value, closed = self.atom()
        if closed and self.token.kind == "subscript":
            return self._subscripted(value, self.advance())
        return value

    def atom(self) -> tuple[sympy.Expr, bool]:
        """Return the value, and whether it ended with a parenthesis, which a subscript may follow."""
        token = self.advance()
        if token.kind == "number":
            return sympy.Rational(token.text), False
        if token.kind == "name":
            return self._named(token)
        if token.text == "(":
            return self._inside(token), True
        self.place -= 1
        if token.kind == "end" or token.text in (")", "="):
            raise self.fail("a number, a name or a parenthesis is missing here", token)
        raise self._unexpected(f"a number, a name or a parenthesis must stand here, got {token.text!r}")

    def _inside(self, opening: Token) -> sympy.Expr:
        value = self.sum()
        if self.accept(")") is None:
            if self.token.kind == "end" or self.token.text == "=":
                raise self.fail("parentheses must be balanced: this '(' is never closed", opening)
            raise self._unexpected("parentheses must be balanced")
        return value

    def _enter(self) -> None:
        self.depth += 1
        if self.depth > NESTING_AT_MOST:
            raise self.fail(f"parentheses must nest at most {NESTING_AT_MOST} deep; simplify", self.token)

    # -- names ----------------------------------------------------------------------------------------

    def _named(self, token: Token) -> tuple[sympy.Expr, bool]:
        name = token.text
        if name in FUNCTIONS or name == "lap":
            return self._call(token), True
        if name in self.names.components or name in self.names.parameters:
            return symbol(name), False
        if name == "pi":
            return sympy.pi, False
        if name in ("x", "y"):
            return self._coordinate(token), False
        split = self.names.split(name)
        if split is None:
            raise self._unknown(token)
        head, letters = split
        return self._derivative_of_component(head, letters, token), False

    def _coordinate(self, token: Token) -> sympy.Expr:
        if token.text == "y" and self.names.dimensions == 1:
            raise self.fail("y must not appear in a law of 1 dimension; set dimensions = 2", token)
        return symbol(token.text)

    def _unknown(self, token: Token) -> FormulaError:
        name = token.text
        head, _, letters = name.rpartition("_")
        if name == "t":
            return self.fail("t must not appear: a law must not depend on time itself", token)
        if head in self.names.parameters:
            return self.fail(
                f"{name!r} must be the derivative of a component, but {head!r} is a parameter", token
            )
        if head in self.names.components:
            return self.fail(f"a subscript must be made of x, y, t, got {letters!r} in {name!r}", token)
        known = (*self.names.known(), *(f"{c}_{s}" for c in self.names.components for s in ("t", "x", "xx")))
        usable = ", ".join((*self.names.components, *self.names.parameters))
        remedy = suggest(name, known) or f"; this law has {usable}; declare a parameter under law.parameters"
        return self.fail(f"unknown name {name!r}{remedy}", token)

    def _call(self, token: Token) -> sympy.Expr:
        opening = self.accept("(")
        if opening is None:
            raise self.fail(f"{token.text} must be followed by its argument in parentheses", token)
        argument = self._inside(opening)
        if token.text == "lap":
            return self._laplacian(argument, token)
        return self._at(token, bounds.apply, token.text, argument)

    # -- derivatives ----------------------------------------------------------------------------------

    def _derivative_of_component(self, name: str, letters: str, token: Token) -> sympy.Expr:
        if "t" not in letters:
            return self._derivative(symbol(name), letters, token)
        if letters != "t":
            raise self.fail(
                f"a time derivative must be the plain {name}_t, got {token.text!r}; "
                "write higher or mixed ones with a further component",
                token,
            )
        self.first_rate = self.first_rate or token
        return self.rates[name]

    def _subscripted(self, value: sympy.Expr, token: Token) -> sympy.Expr:
        letters = token.text[1:]
        if not letters or set(letters) - set("xy"):
            remedy = "; put _t on a bare component" if "t" in letters else ""
            raise self.fail(
                f"a subscript of a parenthesis must be made of x, y, got {token.text!r}{remedy}", token
            )
        return self._derivative(value, letters, token)

    def _derivative(self, value: sympy.Expr, letters: str, token: Token) -> sympy.Expr:
        if "y" in letters and self.names.dimensions == 1:
            raise self.fail(f"{token.text!r} has y in a law of 1 dimension; set dimensions = 2", token)
        return self._differentiated(value, letters.count("x"), letters.count("y"), token)

    def _laplacian(self, value: sympy.Expr, token: Token) -> sympy.Expr:
        along_x = self._differentiated(value, 2, 0, token)
        if self.names.dimensions == 1:
            return along_x
        return along_x + self._differentiated(value, 0, 2, token)

    def _differentiated(self, value: sympy.Expr, a: int, b: int, token: Token) -> sympy.Expr:
        if value.has(*self.rates.values()):
            raise self.fail("a time derivative must not be differentiated in space", token)
        self._check_order(max(a, b), a + b, token)
        result = self._at(token, differentiate, value, a, b, self.fields)
        in_x, in_y, total = order_of(result)
        self._check_order(max(in_x, in_y), total, token)
        return result

    def _check_order(self, on_axis: int, total: int, token: Token) -> None:
        if on_axis > ORDER_PER_AXIS or total > ORDER_IN_TOTAL:
            raise self.fail(
                f"derivatives must be of order <= {ORDER_PER_AXIS} along one axis "
                f"and <= {ORDER_IN_TOTAL} in all, got {on_axis} and {total}",
                token,
            )
