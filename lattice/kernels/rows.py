"""Generate the loop that fills the rows of a sparse Jacobian from a law's tangent form."""

from __future__ import annotations

import sympy

from lattice.kernels.emitter import Emitter, Place
from lattice.kernels.forms import Form
from lattice.kernels.scheme import Scheme
from lattice.kernels.source import Source, function, kernel_arguments, on_levels
from lattice.kernels.table import Table
from lattice.laws.law import Deriv

Point = tuple[int, int, int]


def row_points(form: Form, scheme: Scheme) -> tuple[tuple[Point, ...], ...]:
    """Return for every output the (dy, dx, component) its expressions couple to, in order.

    An evolving output couples to them on each of the scheme's levels. The diagonal is always among them.
    """
    return tuple(tuple(row.points) for row in _make_rows(form, scheme)[1])


class _Row:
    """The text of every coefficient of one output of a tangent form, by point."""

    def __init__(self, c: int, form: Form, table: Table, halo_x: int) -> None:
        state, direction = form.fields
        places = {symbol: Place("f0", len(state), c) for c, symbol in enumerate(state)}
        self.output, self.table = form.outputs[c], table
        self.emitter = Emitter(table, places, halo_x)
        self.direction = {symbol: c for c, symbol in enumerate(direction)}
        found: dict[Point, list[str]] = {(0, 0, c): []}  # a time difference or a pin may be added to it
        self._collect(self.output.expression, 0, 0, [], found)
        self.points = dict(sorted(found.items()))

    def _collect(
        self, expression: sympy.Expr, dy: int, dx: int, factors: list[str], found: dict[Point, list[str]]
    ) -> None:
        """Add the coefficients of an expression linear in the direction, at an offset."""
        for term in sympy.Add.make_args(sympy.expand(expression)):
            linear = [f for f in sympy.Mul.make_args(term) if f.free_symbols & self.direction.keys()]
            if not linear:
                continue
            (factor,) = linear
            rest = term / factor
            texts = factors if rest == 1 else [*factors, self.emitter.value(rest, dy, dx)]
            if factor in self.direction:
                found.setdefault((dy, dx, self.direction[factor]), []).append(" * ".join(texts) or "1.0")
            else:
                self._inside(factor, dy, dx, texts, found)

    def _inside(self, atom: Deriv, dy: int, dx: int, texts: list[str], found: dict[Point, list[str]]) -> None:
        inner, a, b = atom.args
        stencil = self.table.stencil(((sympy.Integer(1), int(a), int(b)),))
        for k, group in enumerate(stencil.groups):
            for oy, ox, sign in group:
                weight = f"{'-' if sign < 0 else ''}w{stencil.first + k}"
                self._collect(inner, dy + oy, dx + ox, [weight, *texts], found)


def _make_rows(form: Form, scheme: Scheme) -> tuple[Table, list[_Row]]:
    table = Table(scheme.levels, scheme.order_x, scheme.order_y)
    form = on_levels(form, scheme)
    return table, [_Row(c, form, table, scheme.halo_x) for c in range(len(form.outputs))]


def generate_rows(form: Form, scheme: Scheme) -> Source:
    """Return the source of `kernel(out, u, statics, w)` that fills the values of a Jacobian's rows.

    Parameters
    ----------
    form : Form
        A tangent form.
    scheme : Scheme

    Returns
    -------
    Source
        `out` has shape (levels, rows, columns*stride): per node the outputs in order, per evolving output
        the scheme's levels in order, per level the points of `row_points`.
    """
    table, rows = _make_rows(form, scheme)
    sizes = [len(r.points) * (scheme.levels if r.output.evolving else 1) for r in rows]
    stride = sum(sizes)
    lines = [
        f"lt, ly, lx = out.shape[0], out.shape[1], out.shape[2] // {stride}",
        "for n in range(lt):",
        " for j in range(ly):",
        "  o = out[n, j]",
    ]
    first = 0
    for row, size in zip(rows, sizes, strict=True):
        lines += _levels(row, len(rows), scheme, first, stride)
        if row.output.evolving:
            lines += _difference(row, scheme, first, stride)
        first += size
    return Source(function("kernel", kernel_arguments(1), table, lines), table, 0)


def _levels(row: _Row, components: int, scheme: Scheme, first: int, stride: int) -> list[str]:
    lines = []
    evolving = row.output.evolving
    for k in range(scheme.levels) if evolving else (scheme.below,):
        level = f"f0[n + {scheme.halo_t - scheme.below + k}"
        for name, (base, dy) in sorted(row.emitter.views.items()):
            array = f"statics[{base[1:]}" if base[0] == "s" else level
            lines.append(f"  {name} = {array}, j + {scheme.halo_y + dy}]")
        lines.append("  for i in range(lx):")
        lines += [f"   {line}" for line in row.emitter.lines]
        start = first + (k * len(row.points) if evolving else 0)
        midpoint = f"w{scheme.levels + k} * " if evolving else ""
        for index, texts in enumerate(row.points.values()):
            value = f"{midpoint}({' + '.join(texts)})" if texts else "0.0"
            lines.append(f"   o[i * {stride} + {start + index}] = {value}")
    return lines


def _difference(row: _Row, scheme: Scheme, first: int, stride: int) -> list[str]:
    assert row.output.differenced is not None
    own = list(row.points).index((0, 0, row.direction[row.output.differenced]))
    lines = ["  for i in range(lx):"]
    for k in range(scheme.levels):
        lines.append(f"   o[i * {stride} + {first + k * len(row.points) + own}] += w{k}")
    return lines
