"""The settings of a run as pydantic models: one class a section of the file."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

__all__ = [
    "Category",
    "Cross",
    "Feed",
    "FieldSettings",
    "Learner",
    "ListOf",
    "MessagePaths",
    "Metrics",
    "Quantity",
    "Settings",
    "Space",
    "State",
    "Words",
]

UNICODE_VERSION = "14.0.0"
"""Unicode version of the tokenizer's tables (`stream/features/unicode_tables`)."""

TokenValue = Literal["presence", "count", "log_count"]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]


class Section(BaseModel):
    """Unknown keys are errors; nothing changes after loading."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=False)


class Feed(Section):
    """Where messages come from. `paths` are glob patterns, relative to the settings file."""

    kind: Literal["log"] = "log"
    paths: tuple[str, ...] = ()
    max_line_bytes: int = Field(1_048_576, ge=64, le=1 << 30)


class MessagePaths(Section):
    """Dotted paths into the JSON object of a message, and the limits a message must keep."""

    id: str | None = None
    time: str | None = None
    label: str | None = None
    weight: str | None = None
    max_tokens: int = Field(16_384, ge=1, le=1 << 20)
    max_reject_share: float = Field(0.01, ge=0, le=1)
    rejects_allowed_before: int = Field(1_000, ge=0)


class Named(Section):
    """A field: `path` in the message, `name` in the hash and in reports (the path by default)."""

    path: str = Field(min_length=1)
    name: str = ""

    @model_validator(mode="before")
    @classmethod
    def _name_is_path(cls, data: Any) -> Any:
        if isinstance(data, dict) and not data.get("name") and "path" in data:
            return {**data, "name": data["path"]}
        return data


class Words(Named):
    """Free text, cut into folded runs of letters and digits."""

    kind: Literal["words"] = "words"
    value: TokenValue = "presence"
    pairs: bool = False
    drop: tuple[str, ...] = ()


class Category(Named):
    """One text, whole number or yes/no taken whole: one token."""

    kind: Literal["category"] = "category"


class Quantity(Named):
    """A number: as it is, as sign(x) ln(1 + |x|), or by the bin it falls in (`bins` are edges)."""

    kind: Literal["quantity"] = "quantity"
    scale: Literal["plain", "logarithmic"] = "plain"
    bins: tuple[float, ...] = ()


class ListOf(Named):
    """A list of texts or whole numbers, each a token."""

    kind: Literal["list"] = "list"
    value: TokenValue = "presence"


FieldSettings = Annotated[Words | Category | Quantity | ListOf, Field(discriminator="kind")]


class Cross(Section):
    """Tokens of two or more fields taken together; `paths` name fields (by name)."""

    paths: tuple[str, ...] = Field(min_length=2, max_length=8)


class Space(Section):
    """The weight space: 2**address_bits addresses, hashed with `seed`."""

    address_bits: int = Field(40, ge=20, le=63)
    seed: int = Field(0, ge=0, le=0xFFFFFFFF)
    unit_length: bool = False


class Learner(Section):
    """How weights are updated; `horizon` is in learned messages. See docs/settings.md."""

    method: Literal["ftrl", "truncated-gradient"] = "ftrl"
    learning_rate: float = Field(0.1, gt=0, le=1e6, allow_inf_nan=False)
    damping: float = Field(1.0, gt=0, le=1e9, allow_inf_nan=False)
    l1: NotNegative = 0.0
    l1_per_example: NotNegative = 1e-4
    l2: NotNegative = 0.0
    horizon: int | None = Field(None, ge=1)


class State(Section):
    """What is kept: the folder, how often it is written, and what bounds the memory."""

    folder: str = "state"
    checkpoint_every: int = Field(1_000_000, ge=1)
    keep_checkpoints: int = Field(3, ge=1)
    keep_snapshots: int = Field(10, ge=1)
    admit_after: int = Field(1, ge=1, le=200)
    admission_bytes: int = Field(16 << 20, ge=1 << 10, le=1 << 36)
    admission_halved_every: int = Field(10_000_000, ge=1)
    idle_after: int | None = Field(None, ge=1)
    max_live: int | None = Field(None, ge=1_000)


class Metrics(Section):
    """Progressive metrics: `window` in messages; `slice_by` names a category field."""

    window: int = Field(100_000, ge=1)
    slice_by: str | None = None


class Settings(Section):
    """Everything a run needs, checked."""

    feed: Feed = Feed()
    message: MessagePaths = MessagePaths()
    fields: tuple[FieldSettings, ...] = ()
    crosses: tuple[Cross, ...] = ()
    space: Space = Space()
    learner: Learner = Learner()
    state: State = State()
    metrics: Metrics = Metrics()

    def fingerprint(self) -> dict[str, Any]:
        """The feature space as JSON types: two models whose fingerprints differ do not mix."""
        return {
            "address_bits": self.space.address_bits,
            "seed": self.space.seed,
            "unit_length": self.space.unit_length,
            "fields": [f.model_dump(mode="json") for f in self.fields],
            "crosses": [list(c.paths) for c in self.crosses],
            "unicode": UNICODE_VERSION,
            "tokenizer": 1,
        }
