"""Generate the loop that fills the rows of a sparse Jacobian from a law's tangent form."""

from __future__ import annotations

import sympy

from lattice.kernels.forms import Form, Output
from lattice.kernels.scheme import Scheme
from lattice.kernels.source import Emitter, Source, module_function

Point = tuple[int, int, int]


def row_points(form: Form, scheme: Scheme) -> tuple[tuple[Point, ...], ...]:
    """Return for every output the (dy, dx, component) its expressions couple to, in order.

    An evolving output couples to them on each of the scheme's levels. The diagonal is always among them.
    """
    return tuple(tuple(texts) for texts in _Coefficients(form, scheme).points)


class _Coefficients:
    """The text of every coefficient of a tangent form, by output and point."""

    def __init__(self, form: Form, scheme: Scheme) -> None:
        self.emitter = Emitter(form, scheme)
        self.direction = {symbol: c for c, symbol in enumerate(form.fields[1])}
        self.points: list[dict[Point, list[str]]] = []
        for c, output in enumerate(form.outputs):
            found: dict[Point, list[str]] = {(0, 0, c): []}  # a time difference or a pin may be added to it
            self._collect(output.expression, 0, 0, [], found)
            self.points.append(dict(sorted(found.items())))

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
            texts = factors if rest == 1 else [*factors, self.emitter.emit(rest, dy, dx)]
            if factor in self.direction:
                found.setdefault((dy, dx, self.direction[factor]), []).append(" * ".join(texts) or "1.0")
            else:
                self._inside(factor, dy, dx, texts, found)

    def _inside(
        self, atom: sympy.Expr, dy: int, dx: int, texts: list[str], found: dict[Point, list[str]]
    ) -> None:
        inner, a, b = atom.args
        key, table = (int(a), int(b)), self.emitter.table
        offsets = self.emitter.offsets(*key)
        if key not in table.stencils:
            table.stencils[key] = table.take(len(offsets))
        for k, (oy, ox) in enumerate(offsets):
            self._collect(inner, dy + oy, dx + ox, [*texts, f"w{table.stencils[key] + k}"], found)


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
    if scheme.levels == 1:
        outputs = tuple(Output(o.expression, False) for o in form.outputs)
        form = Form(form.name, form.kind, form.fields, outputs, form.scalars, form.dimensions)
    coefficients = _Coefficients(form, scheme)
    emitter = coefficients.emitter
    sizes = [
        len(p) * (scheme.levels if o.evolving else 1)
        for p, o in zip(coefficients.points, form.outputs, strict=True)
    ]
    stride = sum(sizes)
    lines = [
        f"lt, ly, lx = out.shape[0], out.shape[1], out.shape[2] // {stride}",
        "j0 = 0",
        "i0 = 0",
        "for n in range(lt):",
        " for j in range(ly):",
        "  o = out[n, j]",
    ]
    first = 0
    for c, (output, points) in enumerate(zip(form.outputs, coefficients.points, strict=True)):
        lines += _levels(output, points, emitter, scheme, first, stride)
        if output.evolving:
            lines += _difference(output, points, coefficients, scheme, first, stride)
        first += sizes[c]
    form = Form(form.name, form.kind, form.fields[:1], form.outputs, form.scalars, form.dimensions)
    return Source(module_function(form, emitter.table, lines), emitter.table, 0)


def _levels(
    output: Output, points: dict[Point, list[str]], emitter: Emitter, scheme: Scheme, first: int, stride: int
) -> list[str]:
    lines = []
    for k in range(scheme.levels) if output.evolving else (scheme.below,):
        level = f"n + {scheme.halo_t - scheme.below + k}"
        lines += [*emitter.row_lines(level, 2), "  for i in range(lx):"]
        start = first + (k * len(points) if output.evolving else 0)
        midpoint = f"w{scheme.levels + k} * " if output.evolving else ""
        for index, texts in enumerate(points.values()):
            value = f"{midpoint}({' + '.join(texts)})" if texts else "0.0"
            lines.append(f"   o[i * {stride} + {start + index}] = {value}")
    return lines


def _difference(
    output: Output,
    points: dict[Point, list[str]],
    coefficients: _Coefficients,
    scheme: Scheme,
    first: int,
    stride: int,
) -> list[str]:
    assert output.differenced is not None
    own = list(points).index((0, 0, coefficients.direction[output.differenced]))
    lines = ["  for i in range(lx):"]
    for k in range(scheme.levels):
        lines.append(f"   o[i * {stride} + {first + k * len(points) + own}] += w{k}")
    return lines
