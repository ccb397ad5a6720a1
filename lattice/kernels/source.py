"""Turn a form into the text of one fused loop over a padded block.

The loop computes the expressions of one level at a time into a short ring of row buffers and combines
the ring into the rows of the scheme, so that every level is evaluated once and nothing of field size is
written but the result. Text comes from checked SymPy expressions only, never from a user's input.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import sympy

from lattice.kernels.forms import Form, Output, X, Y
from lattice.kernels.scheme import Scheme, space_stencil
from lattice.laws.law import Deriv

RING_NODES = 4096  # nodes of one level per ring buffer row group: 4 levels of it stay in a 256 kB cache
MAX_COLUMNS = 2048


@dataclass(frozen=True)
class Linear:
    """Weights of one output's constant-coefficient terms in one field component.

    Parameters
    ----------
    terms : tuple
        (coefficient, a, b) with a coefficient in scalars only.
    offsets : tuple
        (dy, dx) of every weight, in the order of the weight vector.
    first : int
        Index of the first weight.
    """

    terms: tuple[tuple[sympy.Expr, int, int], ...]
    offsets: tuple[tuple[int, int], ...]
    first: int


@dataclass
class Table:
    """What the weight vector of a kernel holds, in order; filled by `lattice.kernels.build`."""

    levels: int
    linears: list[Linear] = field(default_factory=list)
    stencils: dict[tuple[int, int], int] = field(default_factory=dict)
    scalars: dict[str, int] = field(default_factory=dict)
    statics: list[sympy.Expr] = field(default_factory=list)
    length: int = 0

    def take(self, count: int) -> int:
        """Reserve `count` entries and return the first index."""
        first, self.length = self.length, self.length + count
        return first


@dataclass(frozen=True)
class Source:
    """A generated kernel: its text, its weight table, its floating-point operations per node."""

    text: str
    table: Table
    flops: int


class Emitter:
    """Print the expressions of one form as Python text on row views.

    Parameters
    ----------
    form : Form
    scheme : Scheme
    interpolated : bool
        True: the last field is read from the buffers of an adjoint kernel.
    """

    def __init__(self, form: Form, scheme: Scheme, interpolated: bool = False) -> None:
        self.form, self.scheme, self.interpolated = form, scheme, interpolated
        self.table = Table(scheme.levels)
        self.table.take(2 * scheme.levels)
        self.components = len(form.outputs)
        self.places = {s: (f, c) for f, symbols in enumerate(form.fields) for c, s in enumerate(symbols)}
        self.rows: dict[str, tuple[str, int, int]] = {}
        self.flops = 0

    def access(self, symbol: sympy.Symbol, dy: int, dx: int) -> str:
        """Return the text of one field value at an offset, and note the row it needs."""
        field_index, component = self.places[symbol]
        if self.interpolated and field_index == len(self.form.fields) - 1:
            return self._row(f"q{component}", component, dy, dx, 1, 0)
        return self._row(f"f{field_index}", field_index, dy, dx, self.components, component)

    def _row(self, base: str, index: int, dy: int, dx: int, stride: int, component: int) -> str:
        name = f"{base}_{'m' if dy < 0 else 'p'}{abs(dy)}"
        self.rows[name] = (base, index, dy)
        offset = (self.scheme.halo_x + dx) * stride + component
        return f"{name}[i + {offset}]" if stride == 1 else f"{name}[i * {stride} + {offset}]"

    def static(self, expression: sympy.Expr, dy: int, dx: int) -> str:
        """Return the text of a value that depends on the coordinates and scalars only."""
        if expression not in self.table.statics:
            self.table.statics.append(expression)
        index = self.table.statics.index(expression)
        return self._row(f"s{index}", index, dy, dx, 1, 0)

    def scalar(self, name: str) -> str:
        """Return the text of a scalar."""
        if name not in self.table.scalars:
            self.table.scalars[name] = self.table.take(1)
        return f"w{self.table.scalars[name]}"

    def expression(self, expression: sympy.Expr) -> str:
        """Return the text of an output's expression at the node itself."""
        linear: dict[sympy.Symbol, list[tuple[sympy.Expr, int, int]]] = {}
        rest = []
        for term in sympy.Add.make_args(expression):
            found = self._linear(term)
            if found is None:
                rest.append(term)
            else:
                linear.setdefault(found[0], []).append(found[1:])
        parts = [self._stencil(symbol, terms) for symbol, terms in linear.items()]
        if rest and sympy.Add(*rest) != 0:
            parts.append(self.emit(sympy.Add(*rest), 0, 0))
        self.flops += max(0, len(parts) - 1)
        return " + ".join(parts) if parts else "0.0"

    def _linear(self, term: sympy.Expr) -> tuple[sympy.Symbol, sympy.Expr, int, int] | None:
        """Return (component, coefficient, a, b) of a constant-coefficient term, else None."""
        coefficient, rest = term.as_independent(*self.places, X, Y, Deriv, as_Add=False)
        inner, a, b = rest.args if isinstance(rest, Deriv) else (rest, 0, 0)
        return (inner, coefficient, int(a), int(b)) if inner in self.places else None

    def _stencil(self, symbol: sympy.Symbol, terms: list[tuple[sympy.Expr, int, int]]) -> str:
        offsets = sorted({o for _, a, b in terms for o in self.offsets(a, b)})
        first = self.table.take(len(offsets))
        self.table.linears.append(Linear(tuple(terms), tuple(offsets), first))
        self.flops += 2 * len(offsets) - 1
        return " + ".join(
            f"w{first + k} * {self.access(symbol, dy, dx)}" for k, (dy, dx) in enumerate(offsets)
        )

    def row_lines(self, level: str, indent: int) -> list[str]:
        """Return the lines that name every row view the emitted text reads, on a level."""
        lines = []
        for name, (base, index, dy) in sorted(self.rows.items()):
            row = f"j0 + j + {self.scheme.halo_y + dy}"
            if base[0] == "f":
                lines.append(f"{name} = {base}[{level}, {row}, i0 * {self.components}:]")
            elif base[0] == "s":
                lines.append(f"{name} = statics[{index}, {row}, i0:]")
            else:
                lines.append(f"{name} = q[{index}, j + {self.scheme.halo_y + dy}]")
        return [" " * indent + line for line in lines]

    def offsets(self, a: int, b: int) -> list[tuple[int, int]]:
        """Return the offsets (dy, dx) of a derivative's nonzero weights, in order."""
        return sorted(space_stencil(a, b, self.scheme.order_x, self.scheme.order_y))

    def emit(self, expression: sympy.Expr, dy: int, dx: int) -> str:
        """Return the text of any expression at an offset, nested derivatives written out."""
        if expression.is_Number or expression.is_NumberSymbol:
            return repr(float(expression))
        if expression in self.places:
            return self.access(expression, dy, dx)
        if not self._moving(expression) and expression.free_symbols & {X, Y}:
            return self.static(expression, dy, dx)
        if expression.is_Symbol:
            return self.scalar(expression.name)
        if isinstance(expression, Deriv):
            return self._derivative(expression, dy, dx)
        if expression.is_Add or expression.is_Mul:
            return self._sequence(expression, dy, dx)
        if expression.is_Pow:
            return self._power(expression, dy, dx)
        (argument,) = expression.args
        self.flops += 10  # a library call; counted as ten operations in the roofline
        return f"np.{type(expression).__name__}({self.emit(argument, dy, dx)})"

    def _moving(self, expression: sympy.Expr) -> bool:
        return bool(expression.has(Deriv) or expression.free_symbols & self.places.keys())

    def _sequence(self, expression: sympy.Expr, dy: int, dx: int) -> str:
        still = [a for a in expression.args if not self._moving(a) and a.free_symbols & {X, Y}]
        args = [a for a in expression.args if a not in still]
        if still:
            args.append(expression.func(*still))
        self.flops += len(args) - 1
        mark = " + " if expression.is_Add else " * "
        return "(" + mark.join(self.emit(a, dy, dx) for a in args) + ")"

    def _power(self, expression: sympy.Expr, dy: int, dx: int) -> str:
        base, exponent = expression.args
        text = self.emit(base, dy, dx)
        if exponent.is_Integer and 2 <= int(exponent) <= 8:
            self.flops += int(exponent) - 1
            return "(" + " * ".join([text] * int(exponent)) + ")"
        if exponent == -1:
            self.flops += 1
            return f"(1.0 / {text})"
        if exponent.is_Integer and -8 <= int(exponent) < -1:
            self.flops += abs(int(exponent))
            return "(1.0 / (" + " * ".join([text] * -int(exponent)) + "))"
        self.flops += 10
        return f"({text} ** {self.emit(exponent, dy, dx)})"

    def _derivative(self, atom: sympy.Expr, dy: int, dx: int) -> str:
        inner, a, b = atom.args
        key = (int(a), int(b))
        offsets = self.offsets(*key)
        if key not in self.table.stencils:
            self.table.stencils[key] = self.table.take(len(offsets))
        first = self.table.stencils[key]
        self.flops += 2 * len(offsets) - 1
        terms = (f"w{first + k} * {self.emit(inner, dy + oy, dx + ox)}" for k, (oy, ox) in enumerate(offsets))
        return "(" + " + ".join(terms) + ")"


def generate(form: Form, scheme: Scheme) -> Source:
    """Return the source of a form's kernel `kernel(out, *fields, statics, w)`.

    Parameters
    ----------
    form : Form
    scheme : Scheme

    Returns
    -------
    Source
        `out` has shape (levels, rows, columns*components) without halo, every field the same with halo,
        `statics` shape (n, rows, columns) with halo, `w` the weight vector of the table.
    """
    outputs = form.outputs
    if scheme.levels == 1:
        outputs = tuple(Output(o.expression, False) for o in outputs)
        form = Form(form.name, "gather", form.fields, outputs, form.scalars, form.dimensions)
    if form.kind == "adjoint":
        return _adjoint(form, scheme)
    return _gather(form, scheme)


def _gather(form: Form, scheme: Scheme) -> Source:
    evolving = [c for c, o in enumerate(form.outputs) if o.evolving]
    nodal = [c for c, o in enumerate(form.outputs) if not o.evolving]
    late, early = Emitter(form, scheme), Emitter(form, scheme)
    early.table = late.table
    ring = [late.expression(form.outputs[c].expression) for c in evolving]
    nodes = [early.expression(form.outputs[c].expression) for c in nodal]
    body = _opening(form, scheme, len(evolving))
    if evolving:
        body += _ring_levels(late, scheme, ring)
        body += _combine(form, scheme, evolving, late)
    if nodal:
        body += _nodal_levels(early, scheme, nodal, nodes)
    return Source(module_function(form, late.table, body), late.table, late.flops + early.flops)


def _opening(form: Form, scheme: Scheme, buffers: int) -> list[str]:
    return [
        f"lt, ly, lx = out.shape[0], out.shape[1], out.shape[2] // {len(form.outputs)}",
        f"width = min(lx, {MAX_COLUMNS})",
        f"depth = max(1, min(ly, {RING_NODES} // width))",
        f"ring = np.empty(({scheme.levels * max(1, buffers)}, depth, width))",
        "for j0 in range(0, ly, depth):",
        " rows = min(depth, ly - j0)",
        " for i0 in range(0, lx, width):",
        "  cols = min(width, lx - i0)",
        f"  for m in range(lt + {scheme.levels - 1 if buffers else 0}):",
    ]


def _ring_levels(emitter: Emitter, scheme: Scheme, texts: list[str]) -> list[str]:
    count = len(texts)
    return [
        f"   slot = (m % {scheme.levels}) * {count}",
        "   for j in range(rows):",
        *emitter.row_lines(f"m + {scheme.halo_t - scheme.below}", 4),
        *(f"    g{e} = ring[slot + {e}, j]" for e in range(count)),
        "    for i in range(cols):",
        *(f"     g{e}[i] = {text}" for e, text in enumerate(texts)),
    ]


def _combine(form: Form, scheme: Scheme, evolving: list[int], emitter: Emitter) -> list[str]:
    levels, components = scheme.levels, len(form.outputs)
    lines = [f"   if m >= {levels - 1}:", f"    n = m - {levels - 1}", "    for j in range(rows):"]
    lines.append(f"     o = out[n, j0 + j, i0 * {components}:]")
    differenced = {e: form.outputs[c].differenced for e, c in enumerate(evolving)}
    for f in sorted({emitter.places[s][0] for s in differenced.values() if s is not None}):
        for k in range(levels):
            level = f"n + {scheme.halo_t - scheme.below + k}"
            lines.append(f"     d{f}_{k} = f{f}[{level}, j0 + j + {scheme.halo_y}, i0 * {components}:]")
    for e in range(len(evolving)):
        for k in range(levels):
            lines.append(f"     r{e}_{k} = ring[((n + {k}) % {levels}) * {len(evolving)} + {e}, j]")
    lines.append("     for i in range(cols):")
    for e, c in enumerate(evolving):
        terms = [f"w{levels + k} * r{e}_{k}[i]" for k in range(levels)]
        if differenced[e] is not None:
            f, component = emitter.places[differenced[e]]
            offset = scheme.halo_x * components + component
            terms += [f"w{k} * d{f}_{k}[i * {components} + {offset}]" for k in range(levels)]
        emitter.flops += 2 * len(terms) - 1
        lines.append(f"      o[i * {components} + {c}] = " + " + ".join(terms))
    return lines


def _nodal_levels(emitter: Emitter, scheme: Scheme, nodal: list[int], texts: list[str]) -> list[str]:
    components = emitter.components
    shift = scheme.below if any(o.evolving for o in emitter.form.outputs) else 0
    return [
        f"   n = m - {shift}",
        "   if 0 <= n < lt:",
        "    for j in range(rows):",
        f"     o = out[n, j0 + j, i0 * {components}:]",
        *emitter.row_lines(f"n + {scheme.halo_t}", 5),
        "     for i in range(cols):",
        *(f"      o[i * {components} + {c}] = {text}" for c, text in zip(nodal, texts, strict=True)),
    ]


def _adjoint(form: Form, scheme: Scheme) -> Source:
    """Return the source of an adjoint kernel: transposed interpolation first, expressions second."""
    emitter = Emitter(form, scheme, interpolated=True)
    texts = [emitter.expression(o.expression) for o in form.outputs]
    levels, components = scheme.levels, len(form.outputs)
    last = len(form.fields) - 1
    top = scheme.halo_t + levels - 1 - (levels - 1 - scheme.below)
    lines = [
        f"lt, ly, lx = out.shape[0], out.shape[1], out.shape[2] // {components}",
        f"width = min(lx, {MAX_COLUMNS})",
        f"depth = max(1, min(ly, {RING_NODES} // width))",
        f"q = np.empty(({components}, depth + {2 * scheme.halo_y}, width + {2 * scheme.halo_x}))",
        "for j0 in range(0, ly, depth):",
        " rows = min(depth, ly - j0)",
        " for i0 in range(0, lx, width):",
        "  cols = min(width, lx - i0)",
        "  for n in range(lt):",
        f"   for j in range(rows + {2 * scheme.halo_y}):",
    ]
    for k in range(levels):
        lines.append(f"    b_{k} = f{last}[n + {top - k}, j0 + j, i0 * {components}:]")
    lines += [f"    a{c} = q[{c}, j]" for c in range(components)]
    lines.append(f"    for i in range(cols + {2 * scheme.halo_x}):")
    for c, output in enumerate(form.outputs):
        if output.evolving:
            terms = [f"w{levels + k} * b_{k}[i * {components} + {c}]" for k in range(levels)]
            emitter.flops += 4 * levels - 1
            lines.append(f"     a{c}[i] = " + " + ".join(terms))
        else:
            lines.append(f"     a{c}[i] = f{last}_own[i * {components} + {c}]")
    own = f"    f{last}_own = f{last}[n + {scheme.halo_t}, j0 + j, i0 * {components}:]"
    lines.insert(len(lines) - components - 1, own)
    lines.append("   for j in range(rows):")
    lines += emitter.row_lines(f"n + {scheme.halo_t}", 4)
    for k in range(levels):
        row = f"j0 + j + {scheme.halo_y}, i0 * {components}:"
        lines.append(f"    e_{k} = f{last}[n + {top - k}, {row}]")
    lines += [f"    o = out[n, j0 + j, i0 * {components}:]", "    for i in range(cols):"]
    for c, (output, text) in enumerate(zip(form.outputs, texts, strict=True)):
        terms = [text]
        if output.evolving:
            offset = scheme.halo_x * components + c
            terms += [f"w{k} * e_{k}[i * {components} + {offset}]" for k in range(levels)]
        lines.append(f"     o[i * {components} + {c}] = " + " + ".join(terms))
    return Source(module_function(form, emitter.table, lines), emitter.table, emitter.flops)


def module_function(form: Form, table: Table, lines: list[str]) -> str:
    """Return the module text around a kernel's body."""
    fields = ", ".join(f"f{k}" for k in range(len(form.fields)))
    head = [f"def kernel(out, {fields}, statics, w):"]
    head += [f"    w{k} = w[{k}]" for k in range(table.length)]
    return "\n".join([*head, *("    " + line for line in lines)]) + "\n"
