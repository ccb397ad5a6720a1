"""The laws that ship with the package, one small TOML file each, and laws of the user's own.

Listing names reads no formula and does not import SymPy.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cache
from math import isfinite
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError
from lattice.laws.names import declare, suggest

if TYPE_CHECKING:
    from lattice.laws.law import Law, Parameter

FOLDER = Path(__file__).with_name("named")

_TEXTS = ("name", "title", "source")
_OPTIONAL_TEXTS = ("scaling", "notes", "best_for")
_KEYS = (*_TEXTS, *_OPTIONAL_TEXTS, "dimensions", "components", "equations", "parameters")
_MEANS = {"balances": ("gain", "loss"), "observables": ("formula", "meaning")}
"""Tables of means that a law file may give, with the keys of an entry; all but the meaning are formulas."""
_PARAMETER_KEYS = ("default", "unit", "meaning")


def law_names() -> list[str]:
    """Return the names of the shipped laws, sorted."""
    return sorted(path.stem for path in FOLDER.glob("*.toml"))


@dataclass(frozen=True)
class Summary:
    """What a list of laws shows of one: read from its file without reading its formulas."""

    name: str
    title: str
    dimensions: int
    components: tuple[str, ...]


def law_summaries() -> list[Summary]:
    """Return a summary of every shipped law, sorted by name. Does not import SymPy."""
    return [_summary(FOLDER / f"{name}.toml") for name in law_names()]


def _summary(path: Path) -> Summary:
    content = _load_toml(path)
    return Summary(
        name=path.stem,
        title=_text(content, "title", path),
        dimensions=_dimensions(content, path),
        components=tuple(_texts(content, "components", path)),
    )


@cache
def load_law(name: str) -> Law:
    """Return a shipped law.

    Parameters
    ----------
    name : str
        One of `law_names`.

    Returns
    -------
    Law

    Raises
    ------
    InputError
        When there is no law of that name.

    Examples
    --------
    >>> load_law("kuramoto-sivashinsky").components
    ('u',)
    """
    names = law_names()
    if name not in names:
        remedy = suggest(name, names)
        raise InputError(f"law.name must be one of {', '.join(names)}, got {name!r:.60}{remedy}")
    return read_law_file(FOLDER / f"{name}.toml")


def read_law(
    name: str,
    equations: Sequence[str],
    components: Sequence[str],
    parameters: Mapping[str, float | Parameter],
    dimensions: int,
) -> Law:
    """Return a law from formulas.

    Parameters
    ----------
    name : str
        Shown in reports and stored with states; "own" for a formula of a job file.
    equations, components : sequence of str
        One formula per component; see `lattice.laws.notation`.
    parameters : dict of str to float or Parameter
        Default values, or descriptions that hold them.
    dimensions : int
        Space dimensions, 1 or 2.

    Raises
    ------
    InputError
        For names, numbers or formulas (FormulaError) that cannot be used.
    """
    from lattice.laws.law import Law
    from lattice.laws.notation import read_equations
    from lattice.laws.symmetry import find_symmetries

    described = tuple(_parameter(key, value) for key, value in parameters.items())
    names = declare(components, parameters, dimensions)
    read = read_equations(equations, names.components, names.parameters, dimensions)
    return Law(
        name=name,
        dimensions=dimensions,
        components=names.components,
        equations=read,
        parameters=described,
        text=tuple(equations),
        symmetries=find_symmetries(read, names.components, names.parameters, dimensions),
    )


def _parameter(name: str, value: float | Parameter) -> Parameter:
    from lattice.laws.law import Parameter

    if isinstance(value, Parameter):
        return value
    return Parameter(name, _finite(value, f"law.parameters.{name}"))


def _finite(value: Any, key: str) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not isfinite(value):
        raise InputError(f"{key} must be a finite number, got {value!r:.60}")
    return float(value)


def read_law_file(path: Path) -> Law:
    """Return the law of a file such as those in `lattice/laws/named`.

    Raises
    ------
    InputError
        For a file that is not TOML, has unknown or missing keys, or values of the wrong type.
    """
    content = _load_toml(path)
    _check_keys(content, (*_KEYS, *_MEANS), path)
    texts = {key: _text(content, key, path) for key in _TEXTS}
    texts |= {key: _text(content, key, path) for key in _OPTIONAL_TEXTS if key in content}
    if texts["name"] != path.stem:
        message = f"must be {path.stem!r}, the name of the file, got {texts['name']!r}"
        raise InputError(message, file=path.name, key="name")
    parameters = _parameters(_table(content.get("parameters", {}), "parameters", path), path)
    law = read_law(
        texts["name"],
        _texts(content, "equations", path),
        _texts(content, "components", path),
        parameters,
        _dimensions(content, path),
    )
    return replace(
        law,
        title=texts["title"],
        source=texts["source"],
        scaling=texts.get("scaling", ""),
        notes=texts.get("notes", ""),
        best_for=texts.get("best_for", ""),
        balances=_means(content, "balances", law, path),
        observables=_means(content, "observables", law, path),
    )


def _load_toml(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise InputError("must exist; check the path", file=str(path)) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"must be a TOML file: {error}", file=path.name) from None


def _check_keys(table: Mapping[str, Any], known: Sequence[str], path: Path, prefix: str = "") -> None:
    for key in table:
        if key not in known:
            remedy = suggest(key, known)
            raise InputError(
                f"unknown key{remedy}; known are {', '.join(known)}", file=path.name, key=prefix + key
            )


def _required(content: Mapping[str, Any], key: str, path: Path) -> Any:
    if key not in content:
        raise InputError("is missing; every law file must have it", file=path.name, key=key)
    return content[key]


def _text(content: Mapping[str, Any], key: str, path: Path) -> str:
    value = _required(content, key, path)
    if not isinstance(value, str) or not value.strip():
        raise InputError(f"must be a text that is not empty, got {value!r:.60}", file=path.name, key=key)
    return " ".join(value.split()) if key not in ("scaling", "notes") else value.strip()


def _texts(content: Mapping[str, Any], key: str, path: Path) -> list[str]:
    value = _required(content, key, path)
    if not isinstance(value, list) or not value or not all(isinstance(item, str) for item in value):
        raise InputError(f"must be a list of texts, got {value!r:.60}", file=path.name, key=key)
    return value


def _dimensions(content: Mapping[str, Any], path: Path) -> int:
    value = _required(content, "dimensions", path)
    if isinstance(value, bool) or value not in (1, 2):
        raise InputError(f"must be 1 or 2, got {value!r:.60}", file=path.name, key="dimensions")
    return int(value)


def _table(value: Any, key: str, path: Path) -> dict[str, Any]:
    if not isinstance(value, dict):
        raise InputError(f"must be a table [{key}], got {value!r:.60}", file=path.name, key=key)
    return value


def _parameters(table: Mapping[str, Any], path: Path) -> dict[str, Parameter]:
    from lattice.laws.law import Parameter

    found = {}
    for name, entry in table.items():
        key = f"parameters.{name}"
        content = _table(entry, key, path)
        _check_keys(content, _PARAMETER_KEYS, path, f"{key}.")
        default = _finite(_required(content, "default", path), f"{path.name}: {key}.default")
        texts = {part: _text(content, part, path) for part in ("unit", "meaning")}
        found[name] = Parameter(name, default, texts["unit"], texts["meaning"])
    return found


def _means(content: Mapping[str, Any], table: str, law: Law, path: Path) -> tuple[tuple[str, str, str], ...]:
    """Return the entries of a table of means, after reading their formulas as expressions of the law."""
    from lattice.laws.notation import read_expression

    found, parameters = [], [p.name for p in law.parameters]
    for name, entry in _table(content.get(table, {}), table, path).items():
        key = f"{table}.{name}"
        given = _table(entry, key, path)
        _check_keys(given, _MEANS[table], path, f"{key}.")
        first, second = (_text(given, part, path) for part in _MEANS[table])
        for text in (first, second) if table == "balances" else (first,):
            read_expression(text, law.components, parameters, law.dimensions)
        found.append((name, first, second))
    return tuple(found)
