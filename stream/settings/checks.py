"""Checks that pydantic's types cannot say: values or models in, refusals with reason and cure out."""

from __future__ import annotations

import re
from collections.abc import Iterable
from datetime import datetime
from itertools import pairwise
from typing import TYPE_CHECKING, Any

from pydantic_core import PydanticCustomError

if TYPE_CHECKING:
    from stream.settings.models import Feed, Learner, Quantity, Rejects, Settings
    from stream.settings.outcome_feed import Outcomes

__all__ = [
    "CONFLICT",
    "START",
    "Problem",
    "dotted_path",
    "duration",
    "duration_ms",
    "edges",
    "feed_problems",
    "field_name",
    "is_path_key",
    "learner_problems",
    "number",
    "outcomes_problems",
    "quantity_problems",
    "refuse",
    "rejects_problems",
    "server",
    "settings_problems",
    "start",
    "topic_name",
]

Problem = tuple[tuple[str | int, ...], str]
"""Where in the model, and why it is refused with the cure."""

REFUSED = "refused"
CONFLICT = "conflict"
START = (
    'a first start on a topic needs to know where to begin; set it to "earliest", "latest" or an RFC 3339 '
    "time"
)
_UNREADABLE = re.compile(r'[\x00-\x1f"\\]')
_CONTROL = re.compile(r"[\x00-\x1f\x7f-\x9f]")


def _refused(text: str) -> PydanticCustomError:
    return PydanticCustomError(REFUSED, "{text}", {"text": text})


def refuse(problems: list[Problem]) -> None:
    """Raises one error that carries all `problems`, if there are any."""
    if problems:
        text = "; ".join(f"{'.'.join(map(str, where))}: {why}" for where, why in problems)
        raise PydanticCustomError(CONFLICT, "{text}", {"text": text, "problems": problems})


def number(value: Any) -> Any:
    """Lets numbers pass; text and true/false are never taken for one."""
    if isinstance(value, str | bool):
        raise PydanticCustomError("not_a_number", "must be a number")
    return value


def server(text: str) -> str:
    """host:port, with an IPv6 address in brackets."""
    host, _, port = text.rpartition(":")
    plain = host and not re.search(r"[\s/@,]", host) and (":" not in host or re.fullmatch(r"\[.+\]", host))
    if not plain or not (port.isascii() and port.isdigit()) or not 0 < int(port) < 1 << 16:
        raise _refused('must be host:port, such as "broker-1.depot.example:9092"')
    return text


def start(value: Any) -> Any:
    """A place to begin: a word, or a time with its offset from UTC; TOML may give it as a time already."""
    if value is None or value in ("earliest", "latest"):
        return value
    try:
        time = value if isinstance(value, datetime) else datetime.fromisoformat(value)
        if time.tzinfo is not None and time.timestamp() >= 0:
            return value.isoformat() if isinstance(value, datetime) else value
    except (TypeError, ValueError, OverflowError):
        pass
    raise _refused(
        'must be "earliest" or "latest" or an RFC 3339 time with its offset from UTC, such as '
        '"2031-03-03T06:00:00Z", not before 1970'
    )


def is_path_key(key: str) -> bool:
    """Whether a dotted path can go through this key of a JSON object: the decoder finds no odd ones."""
    return bool(key) and "." not in key and not _UNREADABLE.search(key)


def dotted_path(path: str) -> str:
    """A path whose keys are all non-empty and can be looked for."""
    if not all(map(is_path_key, path.split("."))):
        raise _refused(
            'must be keys joined by single dots, such as "parcel.weight"; none may be empty or have a '
            "quotation mark, backslash or control character"
        )
    return path


_UNIT_MS = {"s": 1_000, "m": 60_000, "h": 3_600_000, "d": 86_400_000}


def duration(text: str) -> str:
    """A whole number and its unit."""
    found = re.fullmatch(r"([0-9]{1,10})([smhd])", text)
    if found is None or not 1_000 <= int(found[1]) * _UNIT_MS[found[2]] <= 3650 * _UNIT_MS["d"]:
        raise _refused(
            'must be a whole number and s, m, h or d for its unit, such as "90m", "48h" or "30d", '
            'from "1s" to "3650d"'
        )
    return text


def duration_ms(text: str) -> int:
    """Milliseconds of what `duration` let pass."""
    return int(text[:-1]) * _UNIT_MS[text[-1]]


def topic_name(name: str) -> str:
    """A name that a broker takes: at most 249 of the letters, digits and signs that it allows."""
    if not re.fullmatch(r"[A-Za-z0-9._-]{1,249}", name) or name in (".", ".."):
        raise _refused("must be 1 to 249 letters, digits, dots, hyphens and underscores, as brokers want it")
    return name


def field_name(name: str) -> str:
    """A name that stays readable and unmistakable in an address text (`name 0x1F token`, `a&b`)."""
    if "&" in name:
        raise _refused('must not contain "&", which joins names in a cross; give the field another `name`')
    if _CONTROL.search(name):
        raise _refused("must not contain control characters (0x1F ends it); give another `name`")
    return name


def edges(bins: tuple[float, ...]) -> tuple[float, ...]:
    """Edges in strictly ascending order; -0.0 becomes 0.0."""
    for left, right in pairwise(bins):
        if not left < right:
            raise _refused(f"edges must ascend, each above the one before; {right!r} follows {left!r}")
    return tuple(edge + 0.0 for edge in bins)


def feed_problems(feed: Feed) -> list[Problem]:
    """What a topic needs, and keys that say nothing without another one.

    Keys of the kind of feed that is not chosen may stand: one file serves a worker on a topic and, with
    `--set feed.kind=log`, a replay of recorded logs.
    """
    problems: list[Problem] = []
    if feed.kind == "topic":
        if not feed.servers:
            problems.append((("servers",), "is missing: a topic needs at least one host:port"))
        if feed.topic is None:
            problems.append((("topic",), "is missing: name the topic to read"))
        if problems and feed.start is None:  # alone it is not: who goes on from a checkpoint needs none
            problems.append((("start",), f"is missing: {START}"))
    if len(set(feed.partitions)) < len(feed.partitions):
        problems.append((("partitions",), "names a partition twice"))
    for name in ("ca_file", "cert_file", "key_file"):
        if getattr(feed, name) is not None and not feed.tls:
            problems.append(((name,), "is used with tls = true only; set that, or leave this out"))
    if (feed.cert_file is None) != (feed.key_file is None):
        missing = "cert_file" if feed.cert_file is None else "key_file"
        problems.append(((missing,), "is missing: cert_file and key_file go together"))
    return problems + _sasl_problems(feed)


def _sasl_problems(feed: Feed) -> list[Problem]:
    places = [name for name in ("password_file", "password_variable") if getattr(feed, name) is not None]
    if feed.sasl is None:
        alone = [name for name in ("username", *places) if getattr(feed, name) is not None]
        return [((name,), "is used with sasl only; set that, or leave this out") for name in alone]
    problems: list[Problem] = []
    if feed.username is None:
        problems.append((("username",), "is missing: sasl needs a user"))
    if len(places) != 1:
        why = "sasl needs the place of the password: give password_file or password_variable, one of them"
        problems.append((("password_file",), why))
    return problems


def outcomes_problems(outcomes: Outcomes) -> list[Problem]:
    """What a feed of outcomes needs; all may stand, unused, beside kind = "inline"."""
    if outcomes.kind == "inline":
        return []
    needed = {
        "id": "name where an outcome has the id of its message",
        "label": "name where an outcome has its label",
        "time": "name where an outcome has its event time",
        "wait": 'say how long a message waits for its outcome, such as "48h"',
    }
    if outcomes.kind == "topic":
        needed["topic"] = "name the topic of outcomes"
    return [((key,), f"is missing: {why}") for key, why in needed.items() if getattr(outcomes, key) is None]


def quantity_problems(field: Quantity) -> list[Problem]:
    """A number is either cut into bins or scaled."""
    if field.bins and field.scale == "logarithmic":
        return [
            (("scale",), "bins cut the number as it is, a scale would change nothing; leave one of them out")
        ]
    return []


def learner_problems(learner: Learner) -> list[Problem]:
    """Truncated gradient has one penalty and a constant rate; what it does not use is refused."""
    if learner.method != "truncated-gradient":
        return []
    problems: list[Problem] = []
    if learner.l1:
        why = (
            "l1 presses on the sum of losses, but truncated-gradient shrinks at every example and takes "
            "l1_per_example as its gravity; set l1_per_example and leave l1 out"
        )
        problems.append((("l1",), why))
    if learner.l2:
        why = (
            "l2 presses on the sum of losses, which truncated-gradient does not keep; leave l2 out, "
            'or take method = "ftrl"'
        )
        problems.append((("l2",), why))
    if learner.damping != type(learner).model_fields["damping"].default:
        why = (
            "damping holds back the per-coordinate steps of ftrl; truncated-gradient has a constant rate. "
            'Leave damping out, or take method = "ftrl"'
        )
        problems.append((("damping",), why))
    if learner.horizon is not None:
        why = (
            "horizon ends the growth of ftrl's accumulated strength; truncated-gradient presses equally on "
            "every example and shuts no new token out. Leave horizon out"
        )
        problems.append((("horizon",), why))
    return problems


def rejects_problems(rejects: Rejects) -> list[Problem]:
    """A topic for rejects is used where they are kept."""
    if rejects.topic is not None and rejects.action != "keep":
        why = f'action = "{rejects.action}" keeps no message; leave topic out, or take action = "keep"'
        return [(("topic",), why)]
    return []


def settings_problems(settings: Settings) -> list[Problem]:
    """What sections must keep among each other."""
    return [
        *_field_problems(settings),
        *_cross_problems(settings),
        *_slice_problems(settings),
        *_memory_problems(settings),
        *_topic_problems(settings),
        *_outcome_problems(settings),
    ]


def _field_problems(settings: Settings) -> Iterable[Problem]:
    seen: dict[str, int] = {}
    for at, field in enumerate(settings.fields):
        if field.name in seen:
            why = f"[[fields]] number {seen[field.name] + 1} has this name; give one of them another `name`"
            yield ("fields", at, "name"), why
        seen.setdefault(field.name, at)
        if field.path == settings.message.label:
            yield (
                ("fields", at, "path"),
                "message.label reads the same path: an outcome cannot predict itself",
            )


def _cross_problems(settings: Settings) -> Iterable[Problem]:
    fields = {field.name: field for field in settings.fields}
    seen: dict[tuple[str, ...], int] = {}
    for at, cross in enumerate(settings.crosses):
        where = ("crosses", at, "paths")
        for name in dict.fromkeys(cross.paths):
            if name not in fields:
                yield where, f'no field is named "{name}"; fields: {_listed(fields)}'
            elif fields[name].kind == "quantity" and not getattr(fields[name], "bins", ()):
                yield where, f'"{name}" is a quantity; only one that is cut into `bins` can be crossed'
            if cross.paths.count(name) > 1:
                yield where, f'"{name}" stands in it twice'
        together = tuple(sorted(cross.paths))
        if together in seen:
            yield where, f"[[crosses]] number {seen[together] + 1} takes the same fields together"
        seen.setdefault(together, at)


def _slice_problems(settings: Settings) -> Iterable[Problem]:
    name = settings.metrics.slice_by
    categories = [field.name for field in settings.fields if field.kind == "category"]
    if name is not None and name not in categories:
        yield ("metrics", "slice_by"), f"must name a category field; category fields: {_listed(categories)}"


def _memory_problems(settings: Settings) -> Iterable[Problem]:
    live, bits = settings.state.max_live, settings.space.address_bits
    if live is not None and live > 1 << bits:
        why = f"the space has only 2**{bits} = {1 << bits:,} addresses: this limit never acts; leave it out"
        yield ("state", "max_live"), why


def _topic_problems(settings: Settings) -> Iterable[Problem]:
    """A worker reads nothing that it wrote, and who reads scores finds no dead letters among them."""
    feed, rejects, scores = settings.feed, settings.rejects.topic, settings.scores.topic
    for section, topic in (("rejects", rejects), ("scores", scores)):
        if feed.kind == "topic" and topic is not None and topic == feed.topic:
            yield (section, "topic"), "is feed.topic too: the worker would read what it wrote; name another"
    if scores is not None and scores == rejects:
        yield ("scores", "topic"), "is rejects.topic too: scores and dead letters need a topic each"


def _outcome_problems(settings: Settings) -> Iterable[Problem]:
    """What outcomes that come apart ask of the messages, and of their topic."""
    outcomes, message, feed = settings.outcomes, settings.message, settings.feed
    if outcomes.kind == "inline":
        return
    if message.label is not None:
        why = f'outcomes.kind = "{outcomes.kind}" takes the label from the outcomes; leave this out'
        yield ("message", "label"), why
    if message.id is None:
        yield ("message", "id"), "is missing: outcomes find their message by its id"
    if message.time is None:
        yield ("message", "time"), "is missing: messages wait in event time"
    if outcomes.kind == "topic":
        if not feed.servers:
            yield ("feed", "servers"), "is missing: the topic of outcomes is read from the brokers of [feed]"
        if feed.kind == "topic" and outcomes.topic == feed.topic:
            yield ("outcomes", "topic"), "is feed.topic too: outcomes need a topic of their own"
        written = {"rejects": settings.rejects.topic, "scores": settings.scores.topic}
        for section, topic in written.items():
            if topic == outcomes.topic:
                yield (section, "topic"), "is outcomes.topic too: the worker would read what it wrote"


def _listed(names: Iterable[str]) -> str:
    return ", ".join(f'"{name}"' for name in names) or "none"
