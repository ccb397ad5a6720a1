"""The job file's reference as Markdown, made from the schema: `python -m lattice.job.reference`."""

from __future__ import annotations

import sys
from types import NoneType, UnionType
from typing import Annotated, Any, Literal, Union, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo

from lattice.job.schema import (
    CoarseSection,
    DampedSection,
    Job,
    PatchesSection,
    RefineSection,
    SubspaceSection,
)
from lattice.job.starts import START_MODELS, MemberTable, Wave
from lattice.job.wording import value_text

HEADER = "| key | value | default | meaning |\n|---|---|---|---|"
_PLAIN = {int: "integer", float: "number", str: "text", bool: "true or false"}
_BELOW: dict[str, dict[str, type[BaseModel]]] = {
    "solve": {
        "[solve.coarse]": CoarseSection,
        "[solve.patches]": PatchesSection,
        "[solve.subspace]": SubspaceSection,
        "[solve.damped]": DampedSection,
        "[solve.refine]": RefineSection,
    }
}
"""Tables inside a section, which have a table of their own in the reference."""
_BOUNDS = {"gt": ">", "ge": ">=", "lt": "<", "le": "<="}


def job_reference() -> str:
    """Return a table for every section of a job file."""
    parts = []
    for section, field in Job.model_fields.items():
        if section != "start":
            parts += [_table(f"[{section}]", _model_of(field.annotation))]
            parts += [_table(title, model) for title, model in _BELOW.get(section, {}).items()]
        else:
            parts += [_table(f'[start] with kind = "{kind}"', model) for kind, model in START_MODELS.items()]
            parts += [_table("[start.members]", MemberTable), _table("[[start.modes]]", Wave)]
    return "\n\n".join(parts) + "\n"


def _table(title: str, model: type[BaseModel]) -> str:
    rows = [
        _row(name, field)
        for name, field in model.model_fields.items()
        if name not in ("kind", "coarse", "patches", "subspace", "damped", "refine")
    ]
    return "\n".join([f"`{title}`: {_first_line(model)}", "", HEADER, *rows])


def _first_line(model: type[BaseModel]) -> str:
    text = (model.__doc__ or "").partition("\n")[0].rstrip(".")
    return text[0].lower() + text[1:]


def _row(name: str, field: FieldInfo) -> str:
    cells = [f"`{name}`", _kind_text(field), _default_text(field), field.description or ""]
    return "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def _default_text(field: FieldInfo) -> str:
    extra = field.json_schema_extra
    if isinstance(extra, dict) and "shown" in extra:
        return str(extra["shown"])
    if field.is_required():
        return "required"
    return f"`{value_text(field.default)}`".replace("'", '"')


def _kind_text(field: FieldInfo) -> str:
    bounds = [
        f"{sign} {getattr(item, name):g}"
        for item in field.metadata
        for name, sign in _BOUNDS.items()
        if hasattr(item, name)
    ]
    return " ".join([_type_text(field.annotation), ", ".join(bounds)]).strip()


def _type_text(annotation: Any) -> str:
    """Return a type in the reader's words: "list of integers", "2, 4 or 6"."""
    if annotation in _PLAIN:
        return _PLAIN[annotation]
    origin, arguments = get_origin(annotation), get_args(annotation)
    if origin is Annotated:
        return _annotated_text(arguments)
    if origin in (Union, UnionType):
        return " or ".join(_type_text(item) for item in arguments if item is not NoneType)
    if origin is Literal:
        *most, last = (str(item) for item in arguments)
        return f"{', '.join(most)} or {last}"
    if origin is tuple:
        return f"list of {_type_text(arguments[0])}"
    if origin is dict:
        return f"table of {_type_text(arguments[1])}"
    return "table"


def _annotated_text(arguments: tuple[Any, ...]) -> str:
    inner, *notes = arguments
    bounds = [
        f"{sign} {getattr(item, name):g}"
        for note in notes
        for item in getattr(note, "metadata", [note])
        for name, sign in _BOUNDS.items()
        if hasattr(item, name)
    ]
    return " ".join([_type_text(inner), ", ".join(bounds)]).strip()


def _model_of(annotation: Any) -> type[BaseModel]:
    assert isinstance(annotation, type)
    assert issubclass(annotation, BaseModel)
    return annotation


if __name__ == "__main__":
    sys.stdout.write(job_reference())
