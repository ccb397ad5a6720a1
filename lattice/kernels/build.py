"""Build a form's kernel: write its text where Numba can cache it, compile it, fill its weights.

Numba is optional. Without it the same form is evaluated by NumPy slices (`lattice.kernels.slices`).
"""

from __future__ import annotations

import hashlib
import importlib.util
import os
import re
import sys
import tempfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import sympy
from numpy.typing import NDArray

from lattice.kernels import slices
from lattice.kernels.forms import Form, X, Y
from lattice.kernels.rows import generate_rows, row_points
from lattice.kernels.scheme import Scheme, space_stencil, time_weights
from lattice.kernels.source import Source, generate
from lattice.kernels.table import Table

Array = NDArray[np.float64]

# Reassociation is left out: sums must not depend on a processor's vector width. NaN stays NaN.
FAST = "{'nsz', 'arcp', 'contract', 'afn'}"
KNOWN_LLVM = range(14, 21)  # an option that LLVM does not know ends the process


@dataclass(frozen=True)
class Geometry:
    """Where a padded block lies: spacings, and the coordinates of its padded columns and rows.

    Parameters
    ----------
    dt, dy, dx : float
        Spacings, dimensionless; `dt` is ignored on a lattice with one level.
    ys, xs : ndarray
        Coordinates of the padded rows and columns.
    """

    dt: float
    dy: float
    dx: float
    ys: Array
    xs: Array


class Loop:
    """A generated loop with its weights; `prepare` it for a geometry and scalars before a call.

    Parameters
    ----------
    form : Form
    scheme : Scheme
    source : Source
    compiled : bool
        True compiles it with Numba; False leaves `function` None until `interpret` is called.
    """

    def __init__(self, form: Form, scheme: Scheme, source: Source, compiled: bool) -> None:
        self.form, self.scheme, self.source = form, scheme, source
        self.function = _load(form, source) if compiled else None
        self._fill = _WeightFiller(source.table, form, scheme)
        self.weights = np.zeros(source.table.length)
        self.static_fields = np.zeros((0, 0, 0))
        self.values: dict[str, float] = {}
        self.geometry: Geometry | None = None

    def prepare(self, geometry: Geometry, values: Mapping[str, float]) -> None:
        """Set spacings and scalars; `values` holds every scalar of the form by name."""
        self.values = dict(values)
        self.geometry = geometry
        self._fill(self.weights, geometry, values)
        self.static_fields = self._fill.statics(geometry, values)


class Rows(Loop):
    """The loop that fills the rows of the sparse Jacobian (see `lattice.kernels.rows`)."""

    def __init__(self, form: Form, scheme: Scheme) -> None:
        compiled = have_numba()
        reading = replace(form, name="rows", fields=form.fields[:1])
        super().__init__(reading, scheme, generate_rows(form, scheme), compiled)
        self.points = row_points(form, scheme)
        if not compiled:
            self.function = _interpret(self.source.text)

    def __call__(self, out: Array, padded: Array) -> Array:
        """Fill `out`, shape (levels, rows, columns*stride), from the padded state."""
        assert self.function is not None
        self.function(out, _flat(padded), self.static_fields, self.weights)
        return out


class Kernel(Loop):
    """A form compiled for one scheme; `prepare` it for a geometry and scalars, then call it.

    Parameters
    ----------
    form : Form
    scheme : Scheme
    compiled : bool
        False evaluates with NumPy slices even where Numba is present.

    Notes
    -----
    Not collective: arithmetic on one padded block.
    """

    def __init__(self, form: Form, scheme: Scheme, compiled: bool = True) -> None:
        super().__init__(form, scheme, generate(form, scheme), compiled and have_numba())

    def __call__(self, out: Array, *fields: Array) -> Array:
        """Evaluate the form.

        Parameters
        ----------
        out : ndarray, shape (levels, rows, columns, components)
            Result, without halo, overwritten.
        *fields : ndarray, the same shape padded by the scheme's halo
            C-contiguous, halo filled.

        Returns
        -------
        ndarray
            `out`.
        """
        if self.function is None:
            assert self.geometry is not None
            slices.evaluate(self.form, self.scheme, self.geometry, self.values, out, fields)
        else:
            self.function(_flat(out), *(_flat(f) for f in fields), self.static_fields, self.weights)
        return out


def _flat(array: Array) -> Array:
    """View (levels, rows, columns, components) as (levels, rows, columns*components)."""
    return array.reshape(array.shape[0], array.shape[1], -1)


class _WeightFiller:
    """Fill a kernel's weight vector and static fields from spacings and scalars."""

    def __init__(self, table: Table, form: Form, scheme: Scheme) -> None:
        self.table, self.scheme = table, scheme
        names = [sympy.Symbol(name, real=True) for name in (*form.scalars, "length_x", "length_y")]
        self.names = list(dict.fromkeys(names))
        self.coefficients = [
            [number_of(t[0], self.names) for t in stencil.terms] for stencil in table.stencils.values()
        ]
        self.constants = [number_of(constant, self.names) for constant in table.constants]
        self.static_functions = [
            sympy.lambdify([X, Y, *self.names], expression, "numpy") for expression in table.statics
        ]

    def __call__(self, weights: Array, geometry: Geometry, values: Mapping[str, float]) -> None:
        levels = self.table.levels
        difference, midpoint = time_weights(levels)
        weights[:levels] = np.array(difference) / (geometry.dt if levels > 1 else 1.0)
        weights[levels : 2 * levels] = midpoint
        numbers = [values.get(symbol.name, 0.0) for symbol in self.names]
        for stencil, functions in zip(self.table.stencils.values(), self.coefficients, strict=True):
            total: dict[tuple[int, int], float] = {}
            for (_, a, b), function in zip(stencil.terms, functions, strict=True):
                factor = function(numbers)
                for offset, weight in self.stencil(a, b, geometry).items():
                    total[offset] = total.get(offset, 0.0) + factor * weight
            last = stencil.first + len(stencil.groups)
            weights[stencil.first : last] = [total[group[0][:2]] for group in stencil.groups]
        for function, place in zip(self.constants, self.table.constants.values(), strict=True):
            weights[place] = function(numbers)

    def stencil(self, a: int, b: int, geometry: Geometry) -> dict[tuple[int, int], float]:
        """Return the weights of a derivative on the geometry's spacings."""
        scale = geometry.dx**-a * geometry.dy**-b
        unit = space_stencil(a, b, self.scheme.order_x, self.scheme.order_y)
        return {offset: weight * scale for offset, weight in unit.items()}

    def statics(self, geometry: Geometry, values: Mapping[str, float]) -> Array:
        """Return the padded static fields, shape (n, rows, columns)."""
        x, y = geometry.xs[None, :], geometry.ys[:, None]
        shape = (len(self.static_functions), geometry.ys.size, geometry.xs.size)
        numbers = [values.get(symbol.name, 0.0) for symbol in self.names]
        fields = np.empty(shape)
        for index, function in enumerate(self.static_functions):
            fields[index] = function(x, y, *numbers)
        return fields


def number_of(expression: sympy.Expr, names: list[sympy.Symbol]) -> Callable[[list[float]], float]:
    """Return a function of the scalars' values for an expression in scalars only."""
    if expression.is_Number:
        constant = float(expression)
        return lambda numbers: constant
    function = sympy.lambdify([names], expression, "math")
    return lambda numbers: float(function(numbers))


def have_numba() -> bool:
    """Return whether Numba can be used; its import may fail on an unknown NumPy."""
    try:
        import numba  # noqa: F401 - the import itself is the question
    except Exception:  # noqa: BLE001 - ImportError or whatever its own version checks raise
        return False
    return os.environ.get("LATTICE_KERNELS", "numba") != "numpy"


def cache_folder() -> Path:
    """Return the folder of generated kernels: `NUMBA_CACHE_DIR`, else a per-user cache."""
    given = os.environ.get("NUMBA_CACHE_DIR")
    if given:
        return Path(given) / "kernels"
    home = os.environ.get("XDG_CACHE_HOME")
    return (Path(home) if home else Path.home() / ".cache") / "lattice" / "kernels"


def _load(form: Form, source: Source) -> Callable[..., None]:
    """Write a kernel's module once under a name made of its content, import and compile it.

    Many processes may do so at once: the module is renamed into place, and Numba's own index is
    written the same way.
    """
    block, line = "f8[:,:,::1]", "f8[::1]"
    arguments = [block] * (2 + len(form.fields)) + [line]
    arguments += ["i8", "i8"] + [line] * source.buffers if source.buffers else []
    options = f"cache=True, error_model='numpy', fastmath={FAST}, pipeline_class=DistinctArrays"
    compiled = "def loops(" if source.buffers else "def kernel("
    module_text = (
        "import numba\nimport numpy as np\n\nfrom lattice.kernels.distinct import DistinctArrays\n\n\n"
    ) + source.text.replace(compiled, f"@numba.njit('void({', '.join(arguments)})', {options})\n{compiled}")
    name = f"lattice_{form.name}_{hashlib.sha256(module_text.encode()).hexdigest()[:24]}"
    if name not in sys.modules:
        path = _write_once(cache_folder(), name, module_text)
        _set_vectoriser()
        try:
            _import(name, path)
        except Exception:  # noqa: BLE001 - a damaged or foreign cache entry raises whatever unpickling does
            # Numba keeps its files beside the module, or in another folder of its cache folder.
            places = (*path.parent.glob(f"__pycache__/{name}*"), *path.parent.parent.glob(f"*/{name}*.nb?"))
            for stale in places:
                stale.unlink(missing_ok=True)
            _import(name, path)
    loop: Callable[..., None] = sys.modules[name].__dict__["kernel"]
    return loop


def _import(name: str, path: Path) -> None:
    """Run a module under a name; it is known by it while it runs, as Numba's cache needs."""
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    try:
        spec.loader.exec_module(module)
    except BaseException:
        del sys.modules[name]
        raise


def _interpret(text: str) -> Callable[..., None]:
    """Return a generated loop as plain Python whose innermost loops are NumPy row operations."""
    whole_rows = re.sub(r"for i in range\((.*)\):", r"for i in (np.arange(\1),):", text)
    namespace: dict[str, Any] = {"np": np}
    exec(compile(whole_rows, "<generated rows>", "exec"), namespace)  # noqa: S102 - text made by rows.py
    loop: Callable[..., None] = namespace["kernel"]
    return loop


def _set_vectoriser() -> None:
    """Keep LLVM from turning a row's shifted values into scalars carried from node to node.

    That pass ("load PRE") runs before the vectoriser and leaves loops that cannot be vectorised. Nor are
    vectorised loops unrolled again: it slows both the compilation and the loops.
    """
    import llvmlite.binding as llvm

    if not _OPTIONS and llvm.llvm_version_info[0] in KNOWN_LLVM:
        _OPTIONS.extend(("--enable-load-pre=false", "--unroll-runtime=false"))
        for option in _OPTIONS:
            llvm.set_option("lattice", option)


_OPTIONS: list[str] = []


def _write_once(folder: Path, name: str, text: str) -> Path:
    """Write a module unless it is there, atomically; fall back to a private folder."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        path = folder / f"{name}.py"
        if not path.exists() or path.read_text() != text:
            _replace(path, text)
        return path
    except OSError:
        path = Path(tempfile.mkdtemp(prefix="lattice-kernels-")) / f"{name}.py"
        path.write_text(text)
        return path


def _replace(path: Path, text: str) -> None:
    descriptor, temporary = tempfile.mkstemp(dir=path.parent, suffix=".part")
    with os.fdopen(descriptor, "w") as file:
        file.write(text)
    Path(temporary).replace(path)
