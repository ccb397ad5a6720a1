"""Turn a form into the text of fused loops over a padded block.

The block is cut into parts whose buffers stay in the cache: some rows, or in one space dimension some
columns. In a part the levels follow one another. On every level each expression is computed once and
added with its weights to the rows it belongs to, which wait in buffers until they are complete (a
transposed finite-impulse-response filter in time). Nothing of field size is written but the result.
Text comes from checked SymPy expressions only, never from a user's input.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from lattice.kernels.forms import Form, Output
from lattice.kernels.loops import LevelLoops
from lattice.kernels.scheme import Scheme
from lattice.kernels.table import Table

PART_BYTES = 768 * 1024  # what a part's buffers and the input it reads on one level may fill of the cache
LEAST_ROWS = 8


@dataclass(frozen=True)
class Source:
    """A generated kernel.

    Parameters
    ----------
    text : str
        A function `kernel`; where there are buffers also `loops`, which it calls: the one to compile.
    table : Table
        What its weights and static fields are.
    flops : int
        Floating-point operations per node.
    buffers : int
        How many buffers `loops` takes as its last arguments, after two integers.
    """

    text: str
    table: Table
    flops: int
    buffers: int = 0


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
    form = on_levels(form, scheme)
    level = LevelLoops(form, scheme)
    arguments = kernel_arguments(len(form.fields))
    parts = _parts(level, len(form.outputs))
    if not level.buffers:
        text = function("kernel", arguments, level.table, [*_whole(form), *parts])
        return Source(text, level.table, level.flops)
    inner = [*arguments, "depth", "width", *(f"b{k}" for k in range(level.buffers))]
    text = function("loops", inner, level.table, parts)
    text += "\n\n" + function("kernel", arguments, None, _sizes(form, level, arguments))
    return Source(text, level.table, level.flops, level.buffers)


def on_levels(form: Form, scheme: Scheme) -> Form:
    """Return the form as it is on the scheme's levels: without time differences where there is one."""
    if scheme.levels > 1:
        return form
    outputs = tuple(Output(o.expression, False) for o in form.outputs)
    return replace(form, kind="gather", outputs=outputs)


def kernel_arguments(fields: int) -> list[str]:
    """Return the names of a kernel's arguments."""
    return ["out", *(f"f{k}" for k in range(fields)), "statics", "w"]


def function(name: str, arguments: list[str], table: Table | None, lines: list[str]) -> str:
    """Return the text of a function; with a table, its weights are named first."""
    weights = [f"w{k} = w[{k}]" for k in range(table.length)] if table else []
    body = "".join(f"    {line}\n" for line in (*weights, *lines))
    return f"def {name}({', '.join(arguments)}):\n{body}"


def _whole(form: Form) -> list[str]:
    """Return the lines that make the whole block one part: nothing is kept from level to level."""
    return ["depth = out.shape[1]", f"width = out.shape[2] // {len(form.outputs)}"]


def _sizes(form: Form, level: LevelLoops, arguments: list[str]) -> list[str]:
    """Return the lines that choose the size of the parts, make the buffers and run the loops."""
    scheme, components = level.scheme, len(form.outputs)
    rows = len(form.fields) + 1 + (scheme.levels - 1 if form.kind == "adjoint" else 0)
    nodes = PART_BYTES // (8 * (level.buffers + rows * components))
    columns = f"out.shape[2] // {components}"
    if level.flat:
        lines = ["depth = 1", f"width = min({columns}, {nodes})", f"size = width + {2 * scheme.halo_x}"]
    else:
        lines = [
            f"width = {columns}",
            f"depth = min(out.shape[1], max({LEAST_ROWS}, {nodes} // width))",
            f"size = (depth + {2 * scheme.halo_y}) * (width + {2 * scheme.halo_x})",
        ]
    # Buffers a multiple of 4096 bytes apart would compete for the same lines of the cache.
    lines.append(f"b = np.zeros(({level.buffers}, size + (72 - size) % 512))")
    buffers = [f"b[{k}]" for k in range(level.buffers)]
    return [*lines, f"loops({', '.join([*arguments, 'depth', 'width', *buffers])})"]


def _parts(level: LevelLoops, components: int) -> list[str]:
    """Return the lines that cut the block into parts and run through their levels."""
    lines = [f"lt, ly, lx = out.shape[0], out.shape[1], out.shape[2] // {components}"]
    if not level.flat:
        lines.append(f"p = lx + {2 * level.scheme.halo_x}")
    for k in level.fields:
        lines.append(f"e{k} = f{k}.reshape((f{k}.shape[0], f{k}.shape[1] * f{k}.shape[2]))")
    if level.table.statics:
        lines.append("st = statics.reshape((statics.shape[0], statics.shape[1] * statics.shape[2]))")
    return [
        *lines,
        "for j0 in range(0, ly, depth):",
        " rows = min(depth, ly - j0)",
        " for i0 in range(0, lx, width):",
        "  cols = min(width, lx - i0)",
        f"  base = {'i0' if level.flat else 'j0 * p'}",
        f"  for m in range(lt + {level.late}):",
        *(f"   {line}" for line in level.lines),
    ]
