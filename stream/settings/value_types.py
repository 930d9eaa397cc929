"""Types that keys of settings share: pydantic's types with limits in, checked values out."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field

from stream.settings import checks

__all__ = [
    "DottedPath",
    "Duration",
    "File",
    "Number",
    "Partition",
    "Seconds",
    "Section",
    "Server",
    "Strength",
    "TokenValue",
    "Topic",
    "Whole",
]

MOST = 10**15
"""Upper limit of plain counts: far past any feed, well inside 64 bits."""

TokenValue = Literal["presence", "count", "log_count"]
Whole = Annotated[int, BeforeValidator(checks.number), Field(le=MOST)]
Number = Annotated[float, BeforeValidator(checks.number), Field(allow_inf_nan=False)]
Seconds = Number
Topic = Annotated[
    str,
    AfterValidator(checks.topic_name),
    Field(json_schema_extra={"allowed": "the name of a topic"}),
]
Duration = Annotated[
    str,
    AfterValidator(checks.duration),
    Field(json_schema_extra={"allowed": 'a text such as "90m", "48h" or "30d", from "1s" to "3650d"'}),
]
Partition = Annotated[int, BeforeValidator(checks.number), Field(ge=0, le=(1 << 31) - 1)]
Server = Annotated[str, AfterValidator(checks.server)]
File = Annotated[str, Field(min_length=1)]
Strength = Annotated[Number, Field(ge=0, le=1e9)]
DottedPath = Annotated[
    str, AfterValidator(checks.dotted_path), Field(json_schema_extra={"allowed": "a dotted path"})
]


class Section(BaseModel):
    """Unknown keys are errors; nothing changes after loading."""

    model_config = ConfigDict(extra="forbid", frozen=True)
