"""The settings of a run as pydantic models, one class a section: plain values in, checked ones out.

Each key has its one home here: type, limits, default and a sentence of meaning, which errors, `bedload init`
and the test of docs/settings.md read back through `stream.settings.keys`.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    Field,
    PrivateAttr,
    StrictBool,
    field_validator,
    model_validator,
)

from stream.settings import checks
from stream.settings.outcome_feed import Outcomes
from stream.settings.value_types import (
    DottedPath,
    File,
    Number,
    Partition,
    Seconds,
    Section,
    Server,
    Strength,
    TokenValue,
    Topic,
    Whole,
)

__all__ = [
    "Category",
    "Cross",
    "Feed",
    "FieldSettings",
    "Learner",
    "ListOf",
    "MessagePaths",
    "Metrics",
    "Outcomes",
    "Quantity",
    "Rejects",
    "Scores",
    "Settings",
    "Space",
    "State",
    "Words",
    "Worker",
]

UNICODE_VERSION = "14.0.0"
"""Unicode version of the tokenizer's tables (`stream/features/unicode_tables`)."""


class Feed(Section):
    """Where messages come from."""

    kind: Literal["log", "topic"] = Field(
        default="log", description="What the feed is: log files, or a topic of a Kafka cluster."
    )
    paths: tuple[str, ...] = Field(
        default=(),
        description='JSON Lines files, plain, .gz or .zst: glob patterns relative to this file; "-" is '
        "standard input. One text counts as a list of one.",
    )
    max_line_bytes: Whole = Field(
        default=1_048_576,
        ge=64,
        le=1 << 30,
        description="A longer line, or value of a record, is rejected (bytes).",
    )
    servers: tuple[Server, ...] = Field(
        default=(),
        json_schema_extra={"allowed": "a list of host:port"},
        description="Brokers of the cluster to ask first. One text counts as a list of one.",
    )
    topic: Topic | None = Field(default=None, description="The topic to read; it is never made.")
    partitions: tuple[Partition, ...] = Field(
        default=(),
        json_schema_extra={"allowed": "a list of whole numbers"},
        description="Partitions to read; none named: all, also those that are added later.",
    )
    group: str | None = Field(
        default=None,
        min_length=1,
        description="Group to which offsets are committed for displays of the lag; never read from.",
    )
    start: str | None = Field(
        default=None,
        json_schema_extra={"allowed": '"earliest" or "latest" or an RFC 3339 time'},
        description="Where a first start without a checkpoint begins to read.",
    )
    tls: StrictBool = Field(default=False, description="Speak TLS to the brokers, and check who they are.")
    ca_file: File | None = Field(
        default=None,
        description="PEM file of the authorities that may sign for a broker; those of the system.",
    )
    cert_file: File | None = Field(
        default=None, description="PEM file of the certificate that is shown to the brokers."
    )
    key_file: File | None = Field(default=None, description="PEM file of its key, not encrypted.")
    sasl: Literal["PLAIN", "SCRAM-SHA-256", "SCRAM-SHA-512"] | None = Field(
        default=None, description="How the user proves who it is."
    )
    username: str | None = Field(default=None, min_length=1, description="The user, with sasl.")
    password_file: File | None = Field(
        default=None, description="File whose first line is the password, with sasl."
    )
    password_variable: str | None = Field(
        default=None,
        min_length=1,
        description="Environment variable that holds the password, with sasl.",
    )

    @field_validator("paths", "servers", mode="before")
    @classmethod
    def _one_is_a_list(cls, texts: Any) -> Any:
        return (texts,) if isinstance(texts, str) else texts

    @field_validator("start", mode="before")
    @classmethod
    def _start_is_a_place(cls, start: Any) -> Any:
        return checks.start(start)

    @model_validator(mode="after")
    def _keys_fit(self) -> Feed:
        checks.refuse(checks.feed_problems(self))
        return self


class MessagePaths(Section):
    """Where the parts of a message stand in its JSON object, and the limits that a message must keep."""

    id: DottedPath | None = Field(default=None, description="Dotted path of the id that scores carry.")
    time: DottedPath | None = Field(
        default=None,
        description="Dotted path of the event time: RFC 3339 text, or epoch seconds / milliseconds.",
    )
    label: DottedPath | None = Field(
        default=None,
        description="Dotted path of the outcome: true, false, 1 or 0. Absent or null: scored, not learned.",
    )
    weight: DottedPath | None = Field(
        default=None,
        description="Dotted path of the example weight, 0 to 1,000,000, that multiplies the loss.",
    )
    max_tokens: Whole = Field(
        default=16_384, ge=1, le=1 << 20, description="A message that makes more tokens is rejected."
    )
    max_reject_share: Number = Field(
        default=0.01,
        ge=0,
        le=1,
        description="Largest share of rejected messages; a run that goes past it stops.",
    )
    rejects_allowed_before: Whole = Field(
        default=1_000,
        ge=0,
        description="Messages before the share of a whole run is judged; a window that is judged by itself "
        "has at least so many, and ends the run as soon as it has more rejects than its share allows.",
    )


class Named(Section):
    """A field: `path` in the message, `name` in the hash and in reports (the path by default)."""

    path: DottedPath = Field(description="Dotted path in the message; missing or null makes no token.")
    name: str = Field(
        default="",
        description="Name in addresses and reports, unlike all others; the path where it is not given.",
        json_schema_extra={"allowed": 'a text without "&" and control characters'},
    )

    @model_validator(mode="before")
    @classmethod
    def _name_is_path(cls, data: Any) -> Any:
        if isinstance(data, dict) and not data.get("name") and "path" in data:
            return {**data, "name": data["path"]}
        return data

    @field_validator("name")
    @classmethod
    def _name_fits_address(cls, name: str) -> str:
        return checks.field_name(name)


class Words(Named):
    """Free text, cut into folded runs of letters and digits."""

    kind: Literal["words"] = Field(default="words", description="What the field holds.")
    value: TokenValue = Field(
        default="presence", description="Value of a token seen c times in the field: 1, c or ln(1 + c)."
    )
    pairs: StrictBool = Field(default=False, description="Neighbouring words as tokens too.")
    drop: tuple[str, ...] = Field(default=(), description="Words that make no token.")


class Category(Named):
    """One text, whole number or yes/no taken whole: one token."""

    kind: Literal["category"] = Field(default="category", description="What the field holds.")


class Quantity(Named):
    """A number: as it is, as sign(x) ln(1 + |x|), or by the bin it falls in (`bins` are edges)."""

    kind: Literal["quantity"] = Field(default="quantity", description="What the field holds.")
    scale: Literal["plain", "logarithmic"] = Field(
        default="plain", description="Value of the one token: x, or sign(x) ln(1 + |x|)."
    )
    bins: tuple[Number, ...] = Field(
        default=(),
        json_schema_extra={"allowed": "a list of ascending numbers"},
        description="Ascending edges that cut the number into tokens of value 1; none: not cut.",
    )

    @field_validator("bins")
    @classmethod
    def _bins_ascend(cls, bins: tuple[float, ...]) -> tuple[float, ...]:
        return checks.edges(bins)

    @model_validator(mode="after")
    def _one_way(self) -> Quantity:
        checks.refuse(checks.quantity_problems(self))
        return self


class ListOf(Named):
    """A list of texts or whole numbers, each a token."""

    kind: Literal["list"] = Field(default="list", description="What the field holds.")
    value: TokenValue = Field(
        default="presence", description="Value of a token seen c times in the field: 1, c or ln(1 + c)."
    )


FieldSettings = Annotated[Words | Category | Quantity | ListOf, Field(discriminator="kind")]


class Cross(Section):
    """Tokens of two or more fields taken together."""

    paths: tuple[str, ...] = Field(
        min_length=2, max_length=8, description="Names of fields whose tokens are taken together."
    )


class Space(Section):
    """The weight space: 2**address_bits addresses, hashed with `seed`."""

    address_bits: Whole = Field(
        default=40,
        ge=20,
        le=63,
        description="The space has 2**address_bits addresses; memory does not depend on it.",
    )
    seed: Whole = Field(default=0, ge=0, le=0xFFFFFFFF, description="Seed of the address hash.")
    unit_length: StrictBool = Field(
        default=False, description="Divide the values of a message by the root of the sum of their squares."
    )


class Learner(Section):
    """How weights are updated."""

    method: Literal["ftrl", "truncated-gradient"] = Field(
        default="ftrl", description="How weights are learned."
    )
    learning_rate: Number = Field(
        default=0.1,
        ge=1e-9,
        le=1e6,
        description="Size of the steps; the constant step of truncated-gradient.",
    )
    damping: Number = Field(
        default=1.0, ge=1e-9, le=1e9, description="Holds back the first steps of a coordinate (ftrl only)."
    )
    l1: Strength = Field(
        default=0.0, description="Pressure towards zero on the sum of losses: a start-up budget (ftrl only)."
    )
    l1_per_example: Strength = Field(
        default=1e-4,
        description="Pressure towards zero on each example: the lambda of a batch fit of the mean loss.",
    )
    l2: Strength = Field(
        default=0.0, description="Shrinkage without zeros, on the sum of losses (ftrl only)."
    )
    horizon: Whole | None = Field(
        default=None,
        ge=1,
        description="Learned messages after which the accumulated strength stops growing (ftrl only).",
    )
    averaging: Whole | None = Field(
        default=None,
        ge=1,
        description="Snapshots get weights averaged over the stream; past so many learned messages the older "
        "ones count half, again and again.",
    )

    @model_validator(mode="after")
    def _penalties_fit_method(self) -> Learner:
        checks.refuse(checks.learner_problems(self))
        return self


class State(Section):
    """What is kept: the folder, how often it is written, and what bounds the memory."""

    folder: str = Field(
        default="state",
        min_length=1,
        description="Folder of checkpoints, snapshots, rejects; relative to this file.",
    )
    checkpoint_every: Whole = Field(default=1_000_000, ge=1, description="Messages between checkpoints.")
    keep_checkpoints: Whole = Field(
        default=5, ge=1, description="Newest checkpoints kept; older ones are removed."
    )
    keep_hourly: Whole = Field(
        default=24,
        ge=0,
        le=100_000,
        description="Hours of which the worker keeps the last checkpoint and snapshot beside the newest.",
    )
    keep_daily: Whole = Field(
        default=7,
        ge=0,
        le=100_000,
        description="Days of which the worker keeps the last checkpoint and snapshot beside the newest.",
    )
    keep_snapshots: Whole = Field(default=10, ge=1, description="Snapshots kept; older ones are removed.")
    admit_after: Whole = Field(
        default=1, ge=1, le=200, description="Sightings before a coordinate gets state; 1: at once."
    )
    admission_bytes: Whole = Field(
        default=16 << 20,
        ge=1 << 10,
        le=1 << 36,
        description="Bytes of the sightings filter, when admit_after > 1.",
    )
    admission_halved_every: Whole = Field(
        default=10_000_000,
        ge=1,
        description="Sightings count half after this many examples, so that old ones fade.",
    )
    idle_after: Whole | None = Field(
        default=None, ge=1, description="Zero-weight coordinates not seen for this many examples are removed."
    )
    max_live: Whole | None = Field(
        default=None,
        ge=1_000,
        description="Most coordinates with state; past it, idle zero-weight ones are removed.",
    )


class Metrics(Section):
    """Progressive metrics."""

    window: Whole = Field(default=100_000, ge=1, description="Messages in a window of the metrics.")
    slice_by: str | None = Field(
        default=None,
        json_schema_extra={"allowed": "the name of a category field"},
        description="Name of a category field: metrics for each of its values too.",
    )


class Worker(Section):
    """How `bedload work` lives: what it does after so many seconds, and how it is watched."""

    checkpoint_every_s: Seconds = Field(
        default=60.0, ge=0.01, le=1e6, description="Seconds between checkpoints, where messages came."
    )
    snapshot_every_s: Seconds = Field(
        default=300.0, ge=0.01, le=1e6, description="Seconds between snapshots, where messages came."
    )
    log_every_s: Seconds = Field(default=10.0, ge=0.01, le=1e6, description="Seconds between log lines.")
    log_format: Literal["text", "json"] = Field(
        default="text", description="Lines of the log: text for people, or a JSON object each."
    )
    metrics_address: str = Field(
        default="127.0.0.1",
        min_length=1,
        description="Address that the HTTP port listens at: this machine only, unless told otherwise.",
    )
    metrics_port: Whole | None = Field(
        default=None, ge=1, le=65_535, description="HTTP port of metrics and health; none: no HTTP."
    )
    stale_after_s: Seconds = Field(
        default=120.0, ge=0.01, le=1e6, description="Seconds without word from the feed: not ready then."
    )
    unavailable_after_s: Seconds | None = Field(
        default=None, ge=1, le=1e7, description="Seconds without word from the feed: exit 69 then."
    )


class Rejects(Section):
    """What becomes of rejected messages; how many may be rejected is said in [message]."""

    action: Literal["keep", "skip", "halt"] = Field(
        default="keep",
        description="Keep a rejected message (in files, or in `topic`), only count it, or stop at the first.",
    )
    topic: Topic | None = Field(
        default=None, description="Topic that rejected messages go to instead of files in the state folder."
    )

    @model_validator(mode="after")
    def _topic_is_used(self) -> Rejects:
        checks.refuse(checks.rejects_problems(self))
        return self


class Scores(Section):
    """Scores out: one for each message, from before its update."""

    topic: Topic | None = Field(default=None, description="Topic that the worker writes scores to.")


class Settings(Section):
    """Everything a run needs, checked."""

    feed: Feed = Feed()
    message: MessagePaths = MessagePaths()
    outcomes: Outcomes = Outcomes()
    fields: tuple[FieldSettings, ...] = ()
    crosses: tuple[Cross, ...] = ()
    space: Space = Space()
    learner: Learner = Learner()
    state: State = State()
    metrics: Metrics = Metrics()
    worker: Worker = Worker()
    rejects: Rejects = Rejects()
    scores: Scores = Scores()
    _folder: Path = PrivateAttr(default=Path())

    @model_validator(mode="after")
    def _parts_fit(self) -> Settings:
        checks.refuse(checks.settings_problems(self))
        return self

    @property
    def folder(self) -> Path:
        """What relative feed paths and `state.folder` are relative to: the settings file's folder."""
        return self._folder

    def placed_in(self, folder: Path) -> Settings:
        """The same settings with another `folder`."""
        copy = self.model_copy()
        copy._folder = folder
        return copy

    def resolve(self, path: str) -> Path:
        """A path of the settings as seen from the working folder."""
        return self._folder / path

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
