"""Values from the command line, `--set section.key=value`, laid over a job file's tables."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping, Sequence
from typing import Any

from lattice.errors import InputError
from lattice.job.problems import printable

_KEY = re.compile(r"[A-Za-z_][A-Za-z0-9_-]*(\.[A-Za-z0-9_-]+)*")


def read_override(text: str) -> tuple[tuple[str, ...], Any]:
    """Split `section.key=value`; the value is TOML, or a bare string where it is not.

    Raises
    ------
    InputError
        Without an equals sign, a key or a value.

    Examples
    --------
    >>> read_override("lattice.nx=96")
    (('lattice', 'nx'), 96)
    >>> read_override("law.name=film")
    (('law', 'name'), 'film')
    """
    key, equals, value = text.partition("=")
    if not equals or not _KEY.fullmatch(key.strip()) or not value.strip():
        raise InputError(
            f"must be written section.key=value, got '{printable(text)}'; for example --set lattice.nx=96",
            key="--set",
        )
    return tuple(key.strip().split(".")), _value(value.strip())


def lay_over(tables: Mapping[str, Any], overrides: Sequence[str]) -> tuple[dict[str, Any], tuple[str, ...]]:
    """Return the tables with every override laid over them, and the keys overridden.

    Raises
    ------
    InputError
        Where an override is malformed or reaches into a key that is not a table.
    """
    result: dict[str, Any] = _copied(tables)
    keys = []
    for text in overrides:
        path, value = read_override(text)
        _put(result, path, value)
        keys.append(".".join(path))
    return result, tuple(keys)


def _value(text: str) -> Any:
    try:
        table = tomllib.loads(f"value = {text}")
    except tomllib.TOMLDecodeError:
        return text
    return table["value"] if table.keys() == {"value"} else text


def _put(tables: dict[str, Any], path: tuple[str, ...], value: Any) -> None:
    here: Any = tables
    for depth, part in enumerate(path[:-1], start=1):
        here = here.setdefault(part, {})
        if not isinstance(here, dict):
            raise InputError(
                f"cannot set {'.'.join(path)}: {'.'.join(path[:depth])} is not a table; set the whole key",
                key="--set",
            )
    here[path[-1]] = value


def _copied(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _copied(item) for key, item in value.items()}
    return value
