"""Print the expressions of one generated loop as assignments to local names."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass

import sympy

from lattice.kernels.forms import X, Y
from lattice.kernels.plan import ROOT_EXPONENTS
from lattice.kernels.table import Offset, Table, Term
from lattice.laws.law import Deriv

LIBRARY_FLOPS = 10  # what a call of a library counts in the roofline
LONGEST_CHAIN = 8  # operations that wait for one another: a core works on several chains at once
Factors = Counter[sympy.Expr]
Part = tuple[str, str]


@dataclass(frozen=True)
class Weighted:
    """A group of a stencil's offsets, on what the stencil acts on."""

    terms: tuple[Term, ...]
    group: int
    inner: sympy.Expr


@dataclass(frozen=True)
class Scaled:
    """A sum of derivatives that several expressions share, times a constant."""

    coefficient: sympy.Expr
    terms: tuple[Term, ...]
    inner: sympy.Expr


@dataclass(frozen=True)
class Products:
    """A sum of products."""

    terms: tuple[sympy.Expr, ...]


Item = Weighted | Scaled | Products


@dataclass(frozen=True)
class Place:
    """Where the values of a symbol are: `base` names an array whose rows are viewed, node by node.

    Parameters
    ----------
    base : str
    stride, component : int
        Values per node, and which of them.
    """

    base: str
    stride: int = 1
    component: int = 0


class Emitter:
    """Print expressions as assignments that each compute something once.

    Parameters
    ----------
    table : Table
    places : dict of sympy.Symbol to Place
    margin : int
        Index of the first node of the loop in a row view.

    Attributes
    ----------
    lines : list of str
        The assignments, to stand in a loop over `i`.
    views : dict of str to (str, int)
        The row views they read: base and row offset.
    flops : int
        Floating-point operations per node.
    """

    def __init__(self, table: Table, places: dict[sympy.Symbol, Place], margin: int) -> None:
        self.table, self.places, self.margin = table, places, margin
        self.lines: list[str] = []
        self.views: dict[str, tuple[str, int]] = {}
        self.flops = 0
        self.shared: set[sympy.Expr] = set()
        self._names: dict[object, str] = {}

    def value(self, expression: sympy.Expr, dy: int = 0, dx: int = 0) -> str:
        """Return the name or number that holds an expression at an offset."""
        if expression in self.places:
            place = self.places[expression]
            return self.load(place, dy, dx)
        if not self._moving(expression):
            return self._still(expression, dy, dx)
        key = (expression, dy, dx)
        if key not in self._names:
            return self.bind(key, self._text(expression, dy, dx))
        return self._names[key]

    def share(self, expressions: list[sympy.Expr]) -> None:
        """Choose what is differentiated once for all expressions, where that takes fewer operations."""
        split = [self._split(e) for e in expressions]
        ready = {_unit_terms(d) for _, rest in split for term in rest for d in term.atoms(Deriv)}
        for inner in {inner for linear, _ in split for inner in linear}:
            uses = [linear[inner] for linear, _ in split if inner in linear]
            merged = sum(len(self.table.offsets(tuple(terms))) for terms in uses)
            sums = {key for terms in uses for _, key in _by_coefficient(terms)}
            apart = sum(len(self.table.offsets(key)) for key in sums if (inner, key) not in ready)
            if apart + sum(len(_by_coefficient(terms)) for terms in uses) < merged:
                self.shared.add(inner)

    def _split(self, expression: sympy.Expr) -> tuple[dict[sympy.Expr, list[Term]], list[sympy.Expr]]:
        """Return the constant-coefficient derivatives of a sum by what they act on, and its other terms."""
        linear: dict[sympy.Expr, list[Term]] = {}
        others = []
        for term in sympy.Add.make_args(expression):
            coefficient, rest = term.as_independent(*self.places, X, Y, Deriv, as_Add=False)
            if isinstance(rest, Deriv):
                inner, a, b = rest.args
                linear.setdefault(inner, []).append((coefficient, int(a), int(b)))
            elif rest in self.places:
                linear.setdefault(rest, []).append((coefficient, 0, 0))
            else:
                others.append(term)
        return linear, others

    def _factors(self, term: sympy.Expr) -> tuple[sympy.Expr, Factors]:
        """Return a product as the factor that does not depend on the fields and those that do."""
        still, factors = sympy.Integer(1), Factors()
        for factor in sympy.Mul.make_args(term):
            base, exponent = factor.as_base_exp()
            if not self._moving(factor):
                still *= factor
            elif exponent.is_Integer and 0 < exponent <= 8:
                factors[base] += int(exponent)
            else:
                factors[factor] += 1
        return still, factors

    def items(self, expression: sympy.Expr) -> list[Item]:
        """Return the parts of a sum that may be added in any order, those on the node's own row first."""
        linear, rest = self._split(expression)
        items: list[Item] = []
        for inner, terms in linear.items():
            if inner in self.shared or [t[1:] for t in terms] == [(0, 0)]:
                items += [Scaled(c, key, inner) for c, key in _by_coefficient(terms)]
            else:
                stencil = self.table.stencil(tuple(terms))
                items += [Weighted(stencil.terms, k, inner) for k in range(len(stencil.groups))]
        items += [Products(tuple(rest))] if rest else []
        return sorted(items, key=lambda item: isinstance(item, Weighted) and self._group(item)[0][0] != 0)

    def total(self, items: Iterable[Item], dy: int = 0, dx: int = 0) -> str:
        """Return the text of a sum, as several chains of operations where it is long."""
        parts = [part for item in items for part in self._parts(item, dy, dx)]
        chains = -(-len(parts) // LONGEST_CHAIN)
        size = -(-len(parts) // max(1, chains))
        sums = [self._joined(parts[k : k + size]) for k in range(0, len(parts), size or 1)]
        self.flops += max(0, chains - 1)
        return " + ".join(f"({text})" for text in sums) if chains > 1 else "".join(sums) or "0.0"

    def constants(self) -> set[str]:
        """Return the weights and numbers that the lines read; each takes a register."""
        return set(re.findall(r"\bw\d+\b|(?<![\w.\[])\d+\.\d+", "\n".join(self.lines)))

    def _text(self, expression: sympy.Expr, dy: int, dx: int) -> str:
        if expression.is_Add:
            return self.total(self.items(expression), dy, dx)
        if isinstance(expression, Deriv):
            inner, key = _unit_terms(expression)
            return self._stencil(key, inner, dy, dx)
        if expression.is_Mul:
            return self._joined(self._nested([self._factors(expression)], dy, dx))
        if expression.is_Pow:
            return self._power(expression, dy, dx)
        self.flops += LIBRARY_FLOPS
        return f"np.{type(expression).__name__}({self.value(expression.args[0], dy, dx)})"

    def _parts(self, item: Item, dy: int, dx: int) -> list[Part]:
        if isinstance(item, Weighted):
            return [self._weighted(item, dy, dx)]
        if isinstance(item, Scaled):
            return [self._scaled(item.coefficient, [self._unit_sum(item, dy, dx)], dy, dx)]
        return self._nested([self._factors(term) for term in item.terms], dy, dx)

    def _weighted(self, item: Weighted, dy: int, dx: int) -> Part:
        group = self._group(item)
        values = [("-" if s < 0 else "+", self.value(item.inner, dy + y, dx + x)) for y, x, s in group]
        text = self._joined(values)
        self.flops += 1
        weight = self.table.stencil(item.terms).first + item.group
        return "+", f"w{weight} * " + (f"({text})" if len(group) > 1 else text)

    def _group(self, item: Weighted) -> tuple[Offset, ...]:
        return self.table.stencil(item.terms).groups[item.group]

    def _stencil(self, key: tuple[Term, ...], inner: sympy.Expr, dy: int, dx: int) -> str:
        groups = range(len(self.table.stencil(key).groups))
        return self.total([Weighted(key, k, inner) for k in groups], dy, dx)

    def _unit_sum(self, item: Scaled, dy: int, dx: int) -> str:
        """Return the name of a sum of derivatives without coefficients."""
        inner, key = item.inner, item.terms
        if len(key) == 1:
            return self.value(Deriv(inner, *key[0][1:]) if any(key[0][1:]) else inner, dy, dx)
        name = (inner, key, dy, dx)
        if name not in self._names:
            self.bind(name, self._stencil(key, inner, dy, dx))
        return self._names[name]

    def _nested(self, terms: list[tuple[sympy.Expr, Factors]], dy: int, dx: int) -> list[Part]:
        """Return a sum of products with the commonest factors taken out, by Horner's rule."""
        uses = Counter(factor for _, factors in terms for factor in factors)
        best = max(uses, key=lambda f: (uses[f], -list(uses).index(f)), default=None)
        if best is None or uses[best] < 2:
            return [self._scaled(c, self._values(factors, dy, dx), dy, dx) for c, factors in terms]
        inside = [(c, factors - Counter([best])) for c, factors in terms if best in factors]
        outside = [(c, factors) for c, factors in terms if best not in factors]
        text = self._joined(self._nested(inside, dy, dx))
        self.flops += 1
        product = ("+", f"{self.value(best, dy, dx)} * ({text})")
        return [product, *self._nested(outside, dy, dx)]

    def _values(self, factors: Factors, dy: int, dx: int) -> list[str]:
        return [self.value(factor, dy, dx) for factor in factors.elements()]

    def _scaled(self, coefficient: sympy.Expr, values: list[str], dy: int, dx: int) -> Part:
        """Return a product and its sign."""
        sign = "-" if coefficient == -1 else "+"
        if coefficient not in (1, -1) or not values:
            values = [self._still(abs(coefficient) if coefficient == -1 else coefficient, dy, dx), *values]
        self.flops += len(values) - 1
        return sign, " * ".join(values)

    def _joined(self, parts: list[Part]) -> str:
        self.flops += max(0, len(parts) - 1)
        text = "".join(f" {sign} {part}" for sign, part in parts)
        return text.removeprefix(" + ").replace(" - ", "-", 1 if text.startswith(" - ") else 0) or "0.0"

    def _power(self, expression: sympy.Expr, dy: int, dx: int) -> str:
        base, exponent = expression.args
        if exponent in ROOT_EXPONENTS:
            self.flops += LIBRARY_FLOPS
            root = f"np.sqrt({self.value(base, dy, dx)})"
            return root if exponent > 0 else f"1.0 / {root}"
        if exponent.is_Integer and -8 <= int(exponent) < 0:
            self.flops += 1
            return f"1.0 / {self.value(base ** -int(exponent), dy, dx)}"
        if exponent.is_Integer and int(exponent) <= 8:
            self.flops += 1
            half = int(exponent) // 2
            return f"{self.value(base**half, dy, dx)} * {self.value(base ** (int(exponent) - half), dy, dx)}"
        self.flops += LIBRARY_FLOPS
        return f"{self.value(base, dy, dx)} ** {self.value(exponent, dy, dx)}"

    def _still(self, expression: sympy.Expr, dy: int, dx: int) -> str:
        """Return the name of what does not depend on the fields: a static field, a weight or a number."""
        if expression.free_symbols & {X, Y}:
            return self.load(Place(f"s{self.table.static(expression)}"), dy, dx)
        if expression.free_symbols:
            return f"w{self.table.constant(expression)}"
        return repr(float(expression))

    def load(self, place: Place, dy: int = 0, dx: int = 0) -> str:
        """Return the name that holds a value of an array at an offset."""
        key = (place, dy, dx)
        if key in self._names:
            return self._names[key]
        view = f"{place.base}_{'m' if dy < 0 else 'p'}{abs(dy)}"
        self.views[view] = (place.base, dy)
        offset = (self.margin + dx) * place.stride + place.component
        index = "i" if place.stride == 1 else f"i * {place.stride}"
        return self.bind(key, f"{view}[{index} + {offset}]")

    def bind(self, key: object, text: str) -> str:
        """Add an assignment and return its name, under which `key` is found again."""
        self._names[key] = name = f"a{len(self._names)}"
        self.lines.append(f"{name} = {text}")
        return name

    def _moving(self, expression: sympy.Expr) -> bool:
        return bool(expression.has(Deriv) or expression.free_symbols & self.places.keys())


def _unit_terms(atom: sympy.Expr) -> tuple[sympy.Expr, tuple[Term, ...]]:
    """Return what a `Deriv` acts on, and its only term."""
    inner, a, b = atom.args
    return inner, ((sympy.Integer(1), int(a), int(b)),)


def _by_coefficient(terms: list[Term]) -> list[tuple[sympy.Expr, tuple[Term, ...]]]:
    """Return every coefficient with the derivatives it multiplies; values themselves stand alone."""
    found: dict[tuple[sympy.Expr, bool], list[Term]] = {}
    for coefficient, a, b in terms:
        found.setdefault((coefficient, a + b > 0), []).append((sympy.Integer(1), a, b))
    return [(coefficient, tuple(sorted(key))) for (coefficient, _), key in found.items()]
