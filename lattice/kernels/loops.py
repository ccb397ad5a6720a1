"""Write the loops that compute one level of a form from its fields.

Every loop but the last runs through all nodes of a part at once, halo columns between its rows included;
the last one writes the rows of the result. No loop reads many more weights than fit into registers.
"""

from __future__ import annotations

import re

import sympy

from lattice.kernels.emitter import Emitter, Item, Place
from lattice.kernels.forms import Form, Output
from lattice.kernels.plan import Plan, Reach
from lattice.kernels.scheme import Scheme
from lattice.kernels.table import Table

WEIGHTS_AT_ONCE = 11  # of the 16 vector registers of AVX2; what does not fit is read again at every node
MOST_WEIGHTS = 14  # of sums that may share the last loop with the weights in time
Sums = list[tuple[int, Item]]


class LevelLoops:
    """The loops over one level `m`, in the order in which they run.

    Parameters
    ----------
    form : Form
        As it is on the scheme's levels.
    scheme : Scheme

    Attributes
    ----------
    lines : list of str
        Loops over a part that starts at node `base` and has `rows` rows of `cols` columns; `p` is the
        number of columns of a padded row.
    table : Table
    buffers : int
        They read and write arrays `b0`, `b1`, ... of one padded part each.
    fields : list of int
        The input fields they read, as flat levels `e0`, `e1`, ...
    late : int
        How many levels after its own lowest one a row of the result is complete.
    flops : int
        Operations per node.
    """

    def __init__(self, form: Form, scheme: Scheme) -> None:
        self.form, self.scheme = form, scheme
        self.table = Table(scheme.levels, scheme.order_x, scheme.order_y)
        self.buffers = self.flops = 0
        self._gathers = form.kind == "gather"
        self._components = len(form.outputs)
        self._plan = Plan(scheme, frozenset(s for symbols in form.fields for s in symbols))
        self._expressions = [self._plan.lower(o.expression) for o in form.outputs]
        differenced = [o.differenced for o in form.outputs if o.differenced is not None]
        self._extents = self._plan.extents([*self._expressions, *differenced])
        self._places: dict[sympy.Symbol, Place] = {}
        self._times: dict[int, int] = {}
        self.fields = [k for k, symbols in enumerate(form.fields) if {*symbols} & self._extents.keys()]
        self.late = scheme.levels - 1 if self._gathers and any(o.evolving for o in form.outputs) else 0
        self.lines = self._levels()
        self.lines += [] if self._gathers else self._transposed()
        self.lines += self._separated() + self._stored() + self._outputs()

    @property
    def flat(self) -> bool:
        """Whether there is no y axis, so that a part is a piece of one row."""
        return self.scheme.halo_y == 0

    def _levels(self) -> list[str]:
        """Return the lines that name the levels of the input fields."""
        scheme, lines = self.scheme, []
        for k in self.fields:
            if self._gathers or k < len(self.form.fields) - 1:
                lines.append(f"u{k} = e{k}[m + {scheme.halo_t - (scheme.below if self.late else 0)}]")
            else:
                top = scheme.halo_t + scheme.below
                lines += [f"v{n} = e{k}[m + {top - n}]" for n in range(scheme.levels)]
        return lines

    def _transposed(self) -> list[str]:
        """Return an adjoint's first loop: the transposed midpoints and time differences of its last field."""
        symbols = self.form.fields[-1]
        extent = self._largest([s for s in symbols if s in self._extents])
        emitter, stores = self._emitter(extent), list[str]()
        levels, own = self.scheme.levels, self.scheme.below
        for c, (symbol, output) in enumerate(zip(symbols, self.form.outputs, strict=True)):
            values = {
                k: emitter.load(Place(f"v{k}", self._components, c))
                for k in (range(levels) if output.evolving else (own,))
            }
            if symbol in self._extents:
                text = _weighted(levels, values) if output.evolving else values[own]
                self._places[symbol] = Place(f"b{self._store(emitter, stores, text)}")
            if output.evolving:
                self._times[c] = self._store(emitter, stores, _weighted(0, values))
                emitter.flops += 2 * (2 * levels - 1)
        return self._loop(emitter, extent, stores)

    def _separated(self) -> list[str]:
        """Return the loop that takes the components of the fields apart, where there are several."""
        interleaved = {
            symbol: Place(f"u{k}", self._components, c)
            for k, symbols in enumerate(self.form.fields)
            for c, symbol in enumerate(symbols)
            if symbol in self._extents and symbol not in self._places
        }
        if self._components == 1 or not interleaved:
            self._places |= interleaved
            return []
        extent = self._largest(list(interleaved))
        emitter, stores = self._emitter(extent), list[str]()
        for symbol, place in interleaved.items():
            self._places[symbol] = Place(f"b{self._store(emitter, stores, emitter.load(place))}")
        return self._loop(emitter, extent, stores)

    def _stored(self) -> list[str]:
        """Return the loops that fill the buffers of the plan, those on equal rows together."""
        groups: dict[tuple[int, int], list[int]] = {}
        for index, stored in enumerate(self._plan.stored):
            groups.setdefault((stored.depth, self._extents[stored.symbol][0]), []).append(index)
        lines = []
        for _, members in sorted(groups.items()):
            group = [self._plan.stored[index] for index in members]
            extent = self._largest([s.symbol for s in group])
            emitter, stores = self._emitter(extent), list[str]()
            for stored in group:
                buffer = self._store(emitter, stores, emitter.value(stored.expression))
                self._places[stored.symbol] = Place(f"b{buffer}")
            lines += self._loop(emitter, extent, stores)
        return lines

    def _outputs(self) -> list[str]:
        """Return the loops that sum up the expressions, and the last one."""
        first = self._emitter((0, 0))
        first.share(self._expressions)
        items = [(c, item) for c, e in enumerate(self._expressions) if e != 0 for item in first.items(e)]
        last = self._emitter((0, 0), first)
        if self.flat and self._constants(items, first) <= MOST_WEIGHTS:
            components = dict.fromkeys(c for c, _ in items)
            sums = {c: last.bind(c, last.total(i for k, i in items if k == c)) for c in components}
            return self._last(last, sums)
        kept: dict[int, int] = {}
        lines = []
        for members in self._shares(items, first):
            emitter, stores = self._emitter((0, 0), first), list[str]()
            for c in dict.fromkeys(c for c, _ in members):
                text = emitter.total(item for k, item in members if k == c)
                if c in kept:
                    emitter.flops += 1
                    text = f"b{kept[c]}[i] + {text}"
                else:
                    kept[c] = self._take()
                stores.append(f"b{kept[c]}[i] = {text}")
            lines += self._loop(emitter, (0, 0), stores)
        last.views |= {f"d{buffer}": (f"d{buffer}", 0) for buffer in kept.values()}
        return lines + self._last(last, {c: last.bind(c, f"d{buffer}[i]") for c, buffer in kept.items()})

    def _shares(self, items: Sums, first: Emitter) -> list[Sums]:
        """Return the items of sums in as few loops as their weights allow, in order."""
        loops: list[Sums] = []
        for item in items:
            if not loops or self._constants([*loops[-1], item], first) > WEIGHTS_AT_ONCE:
                loops.append([])
            loops[-1].append(item)
        return loops

    def _constants(self, items: Sums, first: Emitter) -> int:
        emitter = self._emitter((0, 0), first)
        for k, (_, item) in enumerate(items):
            emitter.bind(k, emitter.total([item]))
        return len(emitter.constants())

    def _last(self, emitter: Emitter, sums: dict[int, str]) -> list[str]:
        """Return the loop that completes the sums in time and writes the result's rows."""
        stores: list[str] = []
        for c, output in enumerate(self.form.outputs):
            result = f"o[i * {self._components} + {c}]"
            if not self._gathers:
                stores.append(f"{result} = {self._with_difference(emitter, c, sums.get(c))}")
            elif output.evolving:
                stores += self._spread(emitter, result, output, sums.get(c))
            else:
                stores += self._delayed(result, sums.get(c, "0.0"))
        self.flops += emitter.flops
        dense = {f"d{k}": (f"d{k}", 0) for k in re.findall(r"\bd(\d+)\[", " ".join(stores))}
        views = sorted((emitter.views | dense).items())
        level = f"m - {self.late}" if self.late else "m"
        return [
            "for j in range(rows):",
            f" o = out[max(0, {level}), j0 + j, i0 * {self._components}:]",
            *(f" {name} = {self._row(base)}" for name, (base, _) in views),
            " for i in range(cols):",
            *(f"  {line}" for line in (*emitter.lines, *stores)),
        ]

    def _spread(self, emitter: Emitter, result: str, output: Output, value: str | None) -> list[str]:
        """Return the lines that add an evolving output's level to the rows it belongs to."""
        levels = self.scheme.levels
        sources = [(levels, value)] if value else []
        if output.differenced is not None:
            sources.append((0, emitter.value(output.differenced)))
        if not sources:
            return [f"{result} = 0.0"]
        waiting = [f"d{self._take()}[i]" for _ in range(levels - 1)]
        emitter.flops += 2 * len(sources) * levels - 1
        lines = []
        for k, target in zip(reversed(range(levels)), [result, *waiting], strict=True):
            terms = [f"w{first + k} * {name}" for first, name in sources]
            lines.append(f"{target} = " + " + ".join([waiting[levels - 1 - k], *terms] if k else terms))
        return lines

    def _delayed(self, result: str, value: str) -> list[str]:
        """Return the lines that hold a nodal output back until its level is written."""
        waiting = [f"d{self._take()}[i]" for _ in range(self.late - self.scheme.below if self.late else 0)]
        return [f"{to} = {of}" for to, of in zip([result, *waiting], [*waiting, value], strict=True)]

    def _with_difference(self, emitter: Emitter, c: int, value: str | None) -> str:
        """Return an adjoint's sum with its time difference."""
        parts = [value] if value else []
        parts += [emitter.load(Place(f"b{self._times[c]}"))] if c in self._times else []
        emitter.flops += max(0, len(parts) - 1)
        return " + ".join(parts) or "0.0"

    def _take(self) -> int:
        self.buffers += 1
        return self.buffers - 1

    def _emitter(self, extent: Reach, first: Emitter | None = None) -> Emitter:
        emitter = Emitter(self.table, self._places, self.scheme.halo_x - extent[1])
        emitter.shared = first.shared if first else set()
        return emitter

    def _largest(self, symbols: list[sympy.Symbol]) -> Reach:
        reaches = [self._extents[s] for s in symbols]
        return max(rows for rows, _ in reaches), max(columns for _, columns in reaches)

    def _store(self, emitter: Emitter, stores: list[str], text: str) -> int:
        """Add the assignment of a value to a new buffer, with halo, and return its number."""
        buffer = self._take()
        emitter.views[f"b{buffer}_p0"] = (f"b{buffer}", 0)
        stores.append(f"b{buffer}_p0[i + {emitter.margin}] = {text}")
        return buffer

    def _loop(self, emitter: Emitter, extent: Reach, stores: list[str]) -> list[str]:
        """Return a loop over the nodes of a part and `extent` rows and columns of its halo."""
        self.flops += emitter.flops
        rows, columns = extent
        count = f"cols + {2 * columns}"
        if not self.flat:
            count += f" + (rows + {2 * rows} - 1) * p"
        views = sorted(emitter.views.items())
        return [
            *(f"{name} = {self._view(base, rows, dy)}" for name, (base, dy) in views),
            f"for i in range({count}):",
            *(f" {line}" for line in (*emitter.lines, *stores)),
        ]

    def _view(self, base: str, rows: int, dy: int) -> str:
        """Return the view of an array from the start of a loop on, `dy` rows away."""
        return self._from(base, "" if self.flat else f"{self.scheme.halo_y - rows + dy} * p")

    def _row(self, base: str) -> str:
        """Return the view of an array's row `j`; `d` buffers have no halo before the first row."""
        if base[0] == "d":
            return self._from(f"b{base[1:]}", "" if self.flat else "j * p")
        return self._from(base, "" if self.flat else f"(j + {self.scheme.halo_y}) * p")

    def _from(self, base: str, start: str) -> str:
        """Return the view of an array from a node of the part on."""
        if base[0] == "b":
            return f"{base}[{start}:]"
        start = f"base + {start}" if start else "base"
        if base[0] == "s":
            return f"st[{base[1:]}, {start}:]"
        return f"{base}[{start}:]" if self._components == 1 else f"{base}[({start}) * {self._components}:]"


def _weighted(first: int, values: dict[int, str]) -> str:
    return " + ".join(f"w{first + k} * {value}" for k, value in values.items())
