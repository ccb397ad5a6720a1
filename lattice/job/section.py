"""What a section of a job file is made of: a strict table, and keys that describe themselves."""

from __future__ import annotations

from typing import Annotated, Any

from pydantic import BaseModel, ConfigDict, Field
from pydantic.config import JsonDict

Positive = Annotated[float, Field(gt=0)]
Count = Annotated[int, Field(ge=1)]
Name = Annotated[str, Field(min_length=1)]


def key(description: str, default: Any = ..., *, shown: str = "", **bounds: Any) -> Any:
    """Describe one key; `shown` is what the reference prints instead of the default."""
    extra: JsonDict = {"shown": shown} if shown else {}
    return Field(default, description=description, json_schema_extra=extra, **bounds)


class Section(BaseModel):
    """A table of the job file: unknown keys refused, types as written, frozen."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)
