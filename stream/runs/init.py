"""`bedload init`: a sample of messages in, a commented settings file that fits them out."""

from __future__ import annotations

import glob
import json
import re
import textwrap
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Any

from stream.runs.columns import Column, columns_of
from stream.runs.guesses import FieldGuess, guess_field, only_in_rejects
from stream.runs.roles import Role, guess_roles
from stream.runs.sample import Sample, read_sample
from stream.settings import MessagePaths
from stream.settings.keys import FIELD_KINDS, Key, known_keys
from stream.sources.files import STANDARD_INPUT

__all__ = ["draft"]

MOST_PATHS = 300
WIDTH = 100

SECTIONS = {
    "feed": "Where messages come from.",
    "message": "Where the parts of a message stand: dotted paths into its JSON object.",
    "outcomes": "Outcomes that come late, in a feed of their own. No command joins them yet; leave it so.",
    "space": "The weight space. A change here, or of a field, wants a new model; fields and crosses may be "
    "added to a live one (--accept-settings).",
    "learner": "How weights are learned.",
    "state": "What is kept on disk, and what bounds the memory.",
    "metrics": "Metrics of predictions made before each update.",
    "worker": "How `bedload work` lives: what it does after so many seconds, and how it is watched.",
    "rejects": "What becomes of rejected messages.",
    "scores": "Scores out, of `bedload work`: one for each message, from before its update.",
}
ACTIVE = {
    "feed.kind",
    "space.address_bits",
    "space.seed",
    "learner.method",
    "learner.learning_rate",
    "learner.l1_per_example",
    "state.folder",
    "state.checkpoint_every",
}
EXAMPLES = {
    "feed.start": "earliest",
    "feed.topic": "messages",
    "feed.sasl": "SCRAM-SHA-512",
    "learner.horizon": 10_000_000,
    "learner.averaging": 10_000_000,
    "outcomes.topic": "outcomes",
    "outcomes.id": "id",
    "outcomes.label": "outcome",
    "outcomes.time": "at",
    "outcomes.wait": "48h",
    "state.idle_after": 10_000_000,
    "state.max_live": 20_000_000,
    "worker.metrics_port": 9_464,
    "worker.unavailable_after_s": 600,
    "rejects.topic": "rejected",
    "scores.topic": "scored",
}
"""Shown, commented out, for keys without a default."""


def draft(sample: Path, folder: Path | None = None, doubt: Callable[[str], None] = lambda text: None) -> str:
    """The text of a settings file that fits the messages of `sample`, ready to run.

    `folder`: where the file will be put (the working folder by default); the feed's path is written relative
    to it. `doubt` is told what a person should look at before learning. Raises InputMissing, NoPermission
    or FileTrouble when the sample cannot be read, BadData when it holds no message.
    """
    read = read_sample(sample)
    columns, maps = columns_of(read.messages)
    roles = guess_roles(columns)
    taken = {role.path for role in roles.values()}
    label = next((column for column in columns if column.path == roles["label"].path), None)
    guesses = [
        guess
        for column in columns[:MOST_PATHS]
        if column.path not in taken and (guess := guess_field(column, label)) is not None
    ]
    guesses = only_in_rejects(guesses, columns, _rejected(_used(roles, guesses)))
    used = _used(roles, guesses)
    malformed = [*_malformed(read), *_too_many(read, _rejected(used))]
    for text in [*malformed, *(one.doubt for one in used if one.doubt)]:
        doubt(text)
    parts = [
        _head(sample, read, malformed),
        _section("feed", {"feed.paths": ([_feed_path(sample, folder or Path())], "")}),
        _section("message", {f"message.{name}": (role.path, role.remark) for name, role in roles.items()}),
        _section("outcomes"),
        _fields(guesses, maps, len(columns) - MOST_PATHS),
        _crosses(guesses),
        _section("space"),
        _section("learner"),
        _section("state"),
        _section("metrics", {"metrics.slice_by": (None, _slice_remark(guesses, columns))}),
        _section("worker"),
        _section("rejects"),
        _section("scores"),
    ]
    return "\n\n".join(parts) + "\n"


def _feed_path(sample: Path, folder: Path) -> str:
    if str(sample) == STANDARD_INPUT:
        return STANDARD_INPUT
    absolute = sample.absolute()
    home = folder.absolute()
    path = absolute.relative_to(home) if absolute.is_relative_to(home) else absolute
    return glob.escape(str(path))


def _used(roles: dict[str, Role], guesses: Sequence[FieldGuess]) -> list[Role | FieldGuess]:
    """What the settings will read."""
    taken = {role.path for role in roles.values()}
    read = [guess for guess in guesses if guess.active or _leads_on(guess, guesses, taken)]
    return [*roles.values(), *read]


def _rejected(used: Iterable[Role | FieldGuess]) -> frozenset[int]:
    """The messages of the sample that a run with these settings would reject."""
    return frozenset().union(*(one.rejected for one in used))


def _leads_on(guess: FieldGuess, guesses: Sequence[FieldGuess], taken: set[str | None]) -> bool:
    """Whether a path below that of `guess` is read, so that what is no object there is rejected."""
    read = {one.path for one in guesses if one.active} | taken
    return any(path is not None and path.startswith(f"{guess.path}.") for path in read)


def _head(sample: Path, read: Sample, malformed: Sequence[str]) -> str:
    return _remark(
        f"Settings for Bedload, from the first {len(read.messages):,} messages of {_quoted(sample.name)}.",
        "A line that begins with # is a remark, or a key at its default; take the # away to change it.",
        "What was guessed says so: read it once. docs/settings.md has every key.",
        *malformed,
    )


def _malformed(read: Sample) -> list[str]:
    """What to say of lines that are no message at all."""
    if not read.bad_lines:
        return []
    lines = read.bad_lines + len(read.messages)
    are = "is" if read.bad_lines == 1 else "are"
    return [
        f"{read.bad_lines:,} of the sample's {lines:,} lines {are} malformed and will be rejected; the first "
        f"is {read.first_bad}."
    ]


def _too_many(read: Sample, rejected: frozenset[int]) -> list[str]:
    """What to say where a run over such lines would stop; `rejected`: messages that do not fit the guess."""
    allowed = MessagePaths().max_reject_share
    lines, count = read.bad_lines + len(read.messages), read.bad_lines + len(rejected)
    if count <= allowed * lines:
        return []
    return [
        f"With {count:,} of {lines:,} lines rejected, more than message.max_reject_share = {allowed:g} "
        "allows, a run would stop: mend the feed, or raise that share."
    ]


def _section(name: str, guessed: dict[str, tuple[Any, str]] | None = None) -> str:
    keys = [
        _key(key, *(guessed or {}).get(key.dotted, (None, ""))) for key in known_keys() if key.section == name
    ]
    return "\n\n".join([f"{_remark(SECTIONS[name])}\n[{name}]", *keys])


def _key(key: Key, value: Any, remark: str) -> str:
    """One key with its meaning, commented out where it stays at its default."""
    default = "none" if key.default is None else _toml(key.default)
    lines = [_remark(key.meaning, f"Allowed: {key.allowed}. Default: {default}.", *filter(None, [remark]))]
    if value is not None:
        lines.append(f"{key.name} = {_toml(value)}")
    elif key.default is None:
        stand_in = "path" if key.section == "message" else "name"
        lines.append(f"# {key.name} = {_toml(EXAMPLES.get(key.dotted, stand_in))}")
    else:
        lines.append(f"{'' if key.dotted in ACTIVE else '# '}{key.name} = {_toml(key.default)}")
    return "\n".join(lines)


def _fields(guesses: Sequence[FieldGuess], maps: dict[str, int], unlisted: int) -> str:
    keys = [key for key in known_keys() if key.section == "fields"]
    lines = [
        _remark(
            "Fields: what of a message makes tokens, one table each.",
            *(
                f"- {key.name} ({_takers(key)}): {key.meaning} Allowed: {key.allowed}.{_default(key)}"
                for key in keys
            ),
        )
    ]
    names: set[str] = set()
    lines += [_field(guess, names) for guess in guesses]
    lines += [
        _remark(f"Left out: {_quoted(path)}: an object with {count:,} different keys; make it a list")
        for path, count in maps.items()
    ]
    if unlisted > 0:
        lines.append(_remark(f"Left out: {unlisted:,} further paths"))
    if not any(guess.active for guess in guesses):
        lines.append(_remark("Nothing in the sample looks like a field to learn from: add one."))
    return "\n\n".join(lines)


def _default(key: Key) -> str:
    if key.required:
        return " Required."
    return f" Default: {_toml(key.default)}." if key.name != "name" else ""


def _takers(key: Key) -> str:
    return "every kind" if len(key.kinds) == len(FIELD_KINDS) else " and ".join(key.kinds)


def _field(guess: FieldGuess, names: set[str]) -> str:
    if guess.kind is None:
        return _remark(f"Left out: {_quoted(guess.path)}: {guess.reason}")
    block = ["[[fields]]", f"path = {_toml(guess.path)}"]
    name = _name(guess.path, names)
    if name != guess.path:
        block.append(f"name = {_toml(name)}")
    block.append(f"kind = {_toml(guess.kind)}")
    block += [f"{option} = {_toml(value)}" for option, value in guess.options.items()]
    if guess.active:
        return "\n".join([_remark(f"Guess: {guess.reason}."), *block])
    return "\n".join([_remark(f"Left out: {guess.reason}."), *(f"# {line}" for line in block)])


def _name(path: str, names: set[str]) -> str:
    """The path, or like it, where it may not be a name; unlike all `names`, to which it is added."""
    name = plain = re.sub(r"[&\x00-\x1f\x7f-\x9f]", "_", path)
    number = 2
    while name in names:
        name = f"{plain}_{number}"
        number += 1
    names.add(name)
    return name


def _crosses(guesses: Sequence[FieldGuess]) -> str:
    key = next(key for key in known_keys() if key.dotted == "crosses.paths")
    categories = _own_names(guesses, "category")
    names = [*categories, *_own_names(guesses, "quantity", "list"), *_own_names(guesses, "words")]
    example = names[:2] if len(names) > 1 else ["one field", "another"]
    return "\n".join(
        [
            _remark(
                "Crosses: tokens of two or more fields taken together, where they say more than each alone.",
                f"{key.name}: {key.meaning} Allowed: {key.allowed}. Default: no crosses.",
            ),
            "# [[crosses]]",
            f"# paths = {_toml(example)}",
        ]
    )


def _own_names(guesses: Iterable[FieldGuess], *kinds: str) -> list[str]:
    """Fields of these kinds whose name is their path."""
    return [g.path for g in guesses if g.active and g.kind in kinds and _name(g.path, set()) == g.path]


def _slice_remark(guesses: Sequence[FieldGuess], columns: Sequence[Column]) -> str:
    categories = _own_names(guesses, "category")
    sizes = {column.path: column.usual.distinct for column in columns if column.path in categories}
    few = [path for path, size in sizes.items() if size <= 20]
    return f"Candidates: {', '.join(_quoted(path) for path in few[:5])}." if few else ""


def _toml(value: Any) -> str:
    """A value as TOML writes it; whole numbers from 10,000 on in groups of three digits."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        return f"{value:_}" if abs(value) >= 10_000 else str(value)
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, str):
        return _quoted(value)
    return f"[{', '.join(_toml(item) for item in value)}]"


def _quoted(text: str) -> str:
    """A TOML basic string; JSON escapes the same, but for DEL."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007F")


def _remark(*paragraphs: str) -> str:
    lines = [
        line
        for text in paragraphs
        for line in textwrap.wrap(text, WIDTH - 2, break_long_words=False, break_on_hyphens=False)
    ]
    return "\n".join(f"# {line}" for line in lines).replace("\x7f", "?")  # TOML allows no DEL in a remark
