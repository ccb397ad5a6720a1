"""Turns what the schema finds wrong into the user's words: requirement, value, remedy."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

from pydantic import BaseModel
from pydantic_core import ErrorDetails

from lattice.job.choices import START_KINDS
from lattice.job.problems import Problem, did_you_mean, listed, printable
from lattice.job.schema import Job, OwnParameter
from lattice.job.starts import START_MODELS, Wave

Place = tuple[int | str, ...]

_KINDS = {
    "int_type": "an integer",
    "int_from_float": "an integer",
    "float_type": "a number",
    "string_type": "a string",
    "bool_type": "true or false",
    "tuple_type": "a list",
    "dict_type": "a table",
    "model_type": "a table",
    "model_attributes_type": "a table",
}
_BOUNDS = {
    "greater_than": "> {gt}",
    "greater_than_equal": ">= {ge}",
    "less_than": "< {lt}",
    "less_than_equal": "<= {le}",
}


def problems_from(found: Sequence[ErrorDetails]) -> list[Problem]:
    """Return the schema's findings as problems in the user's words.

    A list with a bad item is also found too short; only the item is worth telling.
    """
    problems = [(problem_from(details), details["type"]) for details in found]
    keys = [problem.key for problem, _ in problems]
    return [
        problem
        for problem, kind in problems
        if kind != "too_short" or not any(key.startswith(f"{problem.key}[") for key in keys)
    ]


def problem_from(details: ErrorDetails) -> Problem:
    """Return one finding of the schema as a problem in the user's words."""
    place = plain_place(details["loc"])
    kind = details["type"]
    write = _WRITERS.get(kind, _other)
    return Problem(key_text(place), write(place, details))


def plain_place(location: Sequence[int | str]) -> Place:
    """Return the path as typed, without the schema's own marks for alternatives."""
    place = list(location)
    if len(place) > 1 and place[0] == "start" and place[1] in START_MODELS:
        del place[1]
    if place[:2] == ["law", "parameters"] and len(place) > 3 and place[3] in ("number", "table"):
        del place[3]
    return tuple(place)


def key_text(place: Sequence[int | str]) -> str:
    """Return a path as the user writes it; items of a list are counted from 1.

    Examples
    --------
    >>> key_text(("start", "modes", 0, "kx"))
    'start.modes[1].kx'
    """
    text = ""
    for part in place:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return printable(text)


def value_text(value: Any) -> str:
    """Return a value as TOML would write it, shortened where long."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        text = f"'{printable(value)}'"
    elif isinstance(value, (tuple, list)):
        text = "[" + ", ".join(value_text(item) for item in value) + "]"
    elif isinstance(value, Mapping):
        text = "{" + ", ".join(f"{key} = {value_text(item)}" for key, item in value.items()) + "}"
    else:
        text = str(value)
    return text if len(text) <= 80 else text[:77] + "..."


def _wrong_type(place: Place, details: ErrorDetails) -> str:
    wanted = _KINDS[details["type"]]
    given = details["input"]
    return f"must be {wanted}, got {value_text(given)}{_type_remedy(wanted, given, place)}"


def _type_remedy(wanted: str, given: Any, place: Place) -> str:
    if isinstance(given, str) and wanted in ("an integer", "a number", "true or false"):
        return "; write it without quotes"
    if wanted == "an integer" and isinstance(given, float) and given.is_integer():
        return f"; write {int(given)}"
    if wanted == "a list":
        return "; put it in [ ]"
    if wanted == "a string":
        return "; put it in quotes"
    if wanted == "a table":
        return f"; write [{key_text(place)}] and its keys below"
    return ""


def _out_of_bounds(place: Place, details: ErrorDetails) -> str:
    limits = {name: f"{limit:g}" for name, limit in details["ctx"].items()}
    bound = _BOUNDS[details["type"]].format(**limits)
    return f"must be {bound}, got {value_text(details['input'])}"


def _choice(place: Place, details: ErrorDetails) -> str:
    wanted = details["ctx"]["expected"].replace("'", "")
    return f"must be one of {wanted.replace(' or ', ', ')}, got {value_text(details['input'])}"


def _missing(place: Place, details: ErrorDetails) -> str:
    name = place[-1]
    if len(place) == 1:
        return f"is required; add a table [{name}]"
    return f"is required; add {name} = ... to [{key_text(place[:-1])}]"


def _unknown(place: Place, details: ErrorDetails) -> str:
    name = str(place[-1])
    known = known_keys(place[:-1], details["loc"])
    where = _table_text(place[:-1], details["loc"])
    elsewhere = [] if name in known else _sections_with(name)
    if elsewhere:
        return f"is not a key of {where}; move it to [{elsewhere[0]}]"
    return f"is not a key of {where}{did_you_mean(name, known)}; known are {listed(known)}"


def _table_text(place: Place, location: Place) -> str:
    if not place:
        return "a job file"
    if place == ("start",) and len(location) > 2:
        return f"start.kind = '{location[1]}'"
    return f"[{key_text(place)}]"


def _no_kind(place: Place, details: ErrorDetails) -> str:
    return f"must say which start: add kind = one of {listed(START_KINDS)}"


def _wrong_kind(place: Place, details: ErrorDetails) -> str:
    given = str(details["ctx"]["tag"])
    return f"kind must be one of {listed(START_KINDS)}, got '{given}'{did_you_mean(given, START_KINDS)}"


def _not_finite(place: Place, details: ErrorDetails) -> str:
    return f"must be a finite number, got {value_text(details['input'])}"


def _too_short(place: Place, details: ErrorDetails) -> str:
    return f"must have at least {details['ctx']['min_length']} item(s), got {value_text(details['input'])}"


def _too_long(place: Place, details: ErrorDetails) -> str:
    return f"must have at most {details['ctx']['max_length']} item(s), got {value_text(details['input'])}"


def _empty_text(place: Place, details: ErrorDetails) -> str:
    return "must not be an empty string"


def _other(place: Place, details: ErrorDetails) -> str:
    return f"cannot be used as given, got {value_text(details['input'])}"


_WRITERS: dict[str, Callable[[Place, ErrorDetails], str]] = {
    **dict.fromkeys(_KINDS, _wrong_type),
    **dict.fromkeys(_BOUNDS, _out_of_bounds),
    "literal_error": _choice,
    "missing": _missing,
    "extra_forbidden": _unknown,
    "union_tag_not_found": _no_kind,
    "union_tag_invalid": _wrong_kind,
    "finite_number": _not_finite,
    "too_short": _too_short,
    "too_long": _too_long,
    "string_too_short": _empty_text,
}


def known_keys(place: Sequence[int | str], location: Sequence[int | str] = ()) -> list[str]:
    """Return the keys allowed in the table at a place."""
    if place[:2] == ("law", "parameters"):
        return list(OwnParameter.model_fields)
    if place[:1] == ("start",):
        return _start_keys(place, location)
    model: type[BaseModel] = Job
    for part in place:
        annotation = model.model_fields[str(part)].annotation
        if not (isinstance(annotation, type) and issubclass(annotation, BaseModel)):
            return []
        model = annotation
    return list(model.model_fields)


def _start_keys(place: Sequence[int | str], location: Sequence[int | str]) -> list[str]:
    if len(place) > 1:
        return list(Wave.model_fields)
    kind = str(location[1]) if len(location) > 1 else ""
    return list(START_MODELS[kind].model_fields) if kind in START_MODELS else ["kind"]


def _sections_with(name: str) -> list[str]:
    sections = [section for section in Job.model_fields if section != "start"]
    return [section for section in sections if name in known_keys((section,))]
