"""What varies: `[[vary]]` tables to one set of values per member.

The keys of one table vary together (as in zip); several tables are combined in every way, the last
changing fastest.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from itertools import product
from typing import Any

from lattice.job.problems import did_you_mean, listed
from lattice.job.wording import value_text

Values = dict[str, Any]
"""Values of one member by dotted key."""

MOST_MEMBERS = 10_000
"""More are a slip of the pen: every member is checked before the first begins, and has its own folder."""
RANGE_KEYS = ("from", "to", "step", "count")


class VaryError(ValueError):
    """What is wrong with one key of `vary`.

    Parameters
    ----------
    key, message : str
        The key as typed, and requirement, value, remedy.
    """

    def __init__(self, key: str, message: str) -> None:
        self.key, self.message = key, message
        super().__init__(f"{key}: {message}")


def expand(tables: Any) -> list[Values]:
    """Return the values of every member.

    Parameters
    ----------
    tables : list of dict
        As TOML has `[[vary]]`.

    Raises
    ------
    VaryError

    Examples
    --------
    >>> expand([{"start": {"seed": [1, 2]}}, {"box": {"length_x": {"from": 20.0, "to": 22.0, "count": 2}}}])
    ... # doctest: +NORMALIZE_WHITESPACE
    [{'start.seed': 1, 'box.length_x': 20.0}, {'start.seed': 1, 'box.length_x': 22.0},
     {'start.seed': 2, 'box.length_x': 20.0}, {'start.seed': 2, 'box.length_x': 22.0}]
    """
    if isinstance(tables, Mapping):
        tables = [tables]
    if not isinstance(tables, Sequence) or isinstance(tables, str) or not tables:
        raise VaryError("vary", "must be one or more tables; write [[vary]] and keys of the job below it")
    columns = [_rows(table, f"vary[{number}]") for number, table in enumerate(tables, start=1)]
    _judge_overlap(columns)
    members = math.prod(len(rows) for rows in columns)
    if members > MOST_MEMBERS:
        raise VaryError("vary", f"must make at most {MOST_MEMBERS} members, got {members}; split it up")
    return [{key: value for row in rows for key, value in row.items()} for rows in product(*columns)]


def _rows(table: Any, place: str) -> list[Values]:
    """Return the values of one table, whose keys vary together."""
    if not isinstance(table, Mapping) or not table:
        raise VaryError(place, 'must name keys of the job, as in start.seed = [0, 1, 2]; got "nothing"')
    lists = {key: values_of(value, f"{place}.{key}") for key, value in _flat(table)}
    counts = {len(values) for values in lists.values()}
    if len(counts) > 1:
        given = listed(f"{key}: {len(values)}" for key, values in lists.items())
        raise VaryError(
            place,
            f"must have as many values for each of its keys, which vary together, got {given};"
            " give the same number, or each key a [[vary]] table of its own for all combinations",
        )
    return [dict(zip(lists, row, strict=True)) for row in zip(*lists.values(), strict=True)]


def _flat(table: Mapping[str, Any], prefix: str = "") -> Iterator[tuple[str, Any]]:
    """Yield dotted keys with their lists or ranges; TOML reads `start.seed` as a table in a table."""
    for name, value in table.items():
        key = f"{prefix}{name}"
        if isinstance(value, Mapping) and not _is_range(value):
            yield from _flat(value, f"{key}.")
        else:
            yield key, value


def _is_range(value: Mapping[str, Any]) -> bool:
    return not value or "from" in value or "to" in value


def values_of(value: Any, place: str) -> list[Any]:
    """Return the values of one key: of a list, or of a range written as a table.

    Examples
    --------
    >>> values_of({"from": 0, "to": 3}, "")
    [0, 1, 2, 3]
    >>> values_of({"from": 20.0, "to": 21.0, "count": 3}, "")
    [20.0, 20.5, 21.0]
    """
    if isinstance(value, Mapping):
        return _range(value, place)
    if not isinstance(value, list):
        raise VaryError(
            place,
            f"must be a list of values, or a range as {{ from = 0, to = 19 }}, got {value_text(value)};"
            " put it in [ ]",
        )
    if not value:
        raise VaryError(place, "must have at least one value, got []; add some or remove the key")
    return list(value)


def _range(table: Mapping[str, Any], place: str) -> list[Any]:
    for name in table:
        if name not in RANGE_KEYS:
            hint = did_you_mean(name, RANGE_KEYS)
            raise VaryError(
                f"{place}.{name}", f"is not a key of a range{hint}; known are {listed(RANGE_KEYS)}"
            )
    for name in ("from", "to"):
        if name not in table:
            raise VaryError(place, f"is a range without {name}; add {name} = ...")
    for name, number in table.items():
        if isinstance(number, bool) or not isinstance(number, (int, float)) or not math.isfinite(number):
            raise VaryError(f"{place}.{name}", f"must be a number, got {value_text(number)}")
    if "count" in table and "step" in table:
        raise VaryError(place, "must have count or step, not both; remove one")
    return _counted(table, place) if "count" in table else _stepped(table, place)


def _counted(table: Mapping[str, Any], place: str) -> list[Any]:
    first, last, count = table["from"], table["to"], table["count"]
    if not isinstance(count, int) or count < 2:
        raise VaryError(f"{place}.count", f"must be an integer >= 2, got {value_text(count)}")
    _judge_size(count, place)
    values = [first + (last - first) * i / (count - 1) for i in range(count)]
    whole = isinstance(first, int) and isinstance(last, int) and all(v.is_integer() for v in values)
    return [int(v) for v in values] if whole else [float(v) for v in values]


def _stepped(table: Mapping[str, Any], place: str) -> list[Any]:
    first, last, step = table["from"], table["to"], table.get("step", 1)
    if "step" not in table and not (isinstance(first, int) and isinstance(last, int)):
        raise VaryError(place, "needs a count or a step, since its ends are no integers; add count = ...")
    if step == 0 or (last - first) / step < 0:
        raise VaryError(
            f"{place}.step", f"must lead from {first} to {last}, got {step}; give it the other sign"
        )
    # A last value that rounding alone keeps out belongs to the range.
    count = math.floor((last - first) / step * (1.0 + 1e-12) + 1e-9) + 1
    _judge_size(count, place)
    return [first + step * i for i in range(count)]


def _judge_size(count: int, place: str) -> None:
    if count > MOST_MEMBERS:
        raise VaryError(place, f"must have at most {MOST_MEMBERS} values, got {count}; make it shorter")


def _judge_overlap(columns: Sequence[Sequence[Values]]) -> None:
    seen: dict[str, int] = {}
    for number, rows in enumerate(columns, start=1):
        for key in rows[0]:
            if key in seen:
                raise VaryError(
                    f"vary[{number}].{key}", f"varies in vary[{seen[key]}] already; name a key once"
                )
            seen[key] = number


def lay_in(tables: Mapping[str, Any], values: Values) -> dict[str, Any]:
    """Return the base job's tables with a member's values in them.

    A key that is part of another one, such as `start.seed` of `start`, is laid over it.

    Raises
    ------
    VaryError
        Where a key reaches into something that is not a table.

    Examples
    --------
    >>> lay_in({"start": {"kind": "march"}}, {"start.seed": 3})
    {'start': {'kind': 'march', 'seed': 3}}
    """
    result: dict[str, Any] = _copied(tables)
    for key in sorted(values, key=lambda name: name.count(".")):
        here: Any = result
        parts = key.split(".")
        for depth, part in enumerate(parts[:-1], start=1):
            here = here.setdefault(part, {})
            if not isinstance(here, dict):
                known = ".".join(parts[:depth])
                raise VaryError(key, f"cannot vary: {known} is not a table; vary {known} as a whole")
        here[parts[-1]] = _copied(values[key])
    return result


def _copied(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _copied(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_copied(item) for item in value]
    return value


def label(values: Values) -> str:
    """Return a member's values in one line.

    Examples
    --------
    >>> label({"start.seed": 3, "box.length_x": 22.0})
    'start.seed = 3, box.length_x = 22.0'
    """
    return ", ".join(f"{key} = {value_text(value)}" for key, value in values.items())
