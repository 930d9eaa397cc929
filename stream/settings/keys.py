"""Every key of the settings, read back from the models: nothing in, key, default, limits and meaning out."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from difflib import SequenceMatcher
from functools import cache
from typing import Any

from pydantic import BaseModel

from stream.settings.models import Category, Cross, ListOf, Quantity, Settings, Words

__all__ = ["FIELD_KINDS", "Key", "known_keys", "nearest"]

FIELD_KINDS: Mapping[str, type[BaseModel]] = {
    "words": Words,
    "category": Category,
    "quantity": Quantity,
    "list": ListOf,
}


ALIKE = 0.6
"""Last parts of keys that are less alike than this (difflib's ratio) are not one misspelt for the other."""


@dataclass(frozen=True, slots=True)
class Key:
    """One key: its section, the field kinds that take it (none outside `fields`), default and limits.

    `default` is None where the key may stay out and has no value then; `required` says that it may not.
    """

    section: str
    name: str
    kinds: tuple[str, ...]
    default: Any
    required: bool
    allowed: str
    meaning: str

    @property
    def dotted(self) -> str:
        """`section.name`, as `--set` and errors spell it."""
        return f"{self.section}.{self.name}"


@cache
def known_keys() -> tuple[Key, ...]:
    """All keys in the order of the models; keys that several field kinds share come once."""
    found: list[Key] = []
    for section, info in Settings.model_fields.items():
        if section == "fields":
            found += _field_keys()
        elif section == "crosses":
            found += _keys(section, Cross)
        else:
            assert isinstance(info.annotation, type)
            found += _keys(section, info.annotation)
    return tuple(found)


def nearest(name: str, known: Iterable[str]) -> str | None:
    """The one of `known` that `name` most likely meant: the same last part first, then likeness; or none."""
    last = name.rpartition(".")[2]

    def likeness(candidate: str) -> tuple[bool, float]:
        return candidate.rpartition(".")[2] == last, SequenceMatcher(None, name, candidate).ratio()

    best = max(known, key=likeness)
    alike = SequenceMatcher(None, last, best.rpartition(".")[2]).ratio()
    return best if alike >= ALIKE else None


def _field_keys() -> Iterable[Key]:
    by_name: dict[str, Key] = {}
    for kind, model in FIELD_KINDS.items():
        for key in _keys("fields", model):
            kinds = (*by_name[key.name].kinds, kind) if key.name in by_name else (kind,)
            by_name[key.name] = Key("fields", key.name, kinds, *_facts(key))
    by_name["kind"] = Key(
        "fields", "kind", tuple(FIELD_KINDS), None, True, _one_of(list(FIELD_KINDS)), by_name["kind"].meaning
    )
    return by_name.values()


def _facts(key: Key) -> tuple[Any, bool, str, str]:
    return key.default, key.required, key.allowed, key.meaning


def _keys(section: str, model: type[BaseModel]) -> Iterable[Key]:
    schemas = model.model_json_schema()["properties"]
    for name, info in model.model_fields.items():
        default = None if info.is_required() else info.default
        yield Key(
            section, name, (), default, info.is_required(), _allowed(schemas[name]), info.description or ""
        )


def _allowed(schema: Mapping[str, Any]) -> str:
    """What a JSON schema of one key lets in, in words; the model's own words under "allowed" come first."""
    schema = {**schema, **next((s for s in schema.get("anyOf", ()) if s.get("type") != "null"), {})}
    if "allowed" in schema:
        return str(schema["allowed"])
    if "const" in schema or "enum" in schema:
        return _one_of(schema.get("enum") or [schema["const"]])
    if schema["type"] == "boolean":
        return "true or false"
    if schema["type"] == "string":
        return "a text"
    if schema["type"] == "array":
        items = "numbers" if schema["items"]["type"] == "number" else "texts"
        if "minItems" in schema:
            return f"a list of {schema['minItems']} to {schema['maxItems']} {items}"
        return f"a list of {items}"
    return _range("a whole number" if schema["type"] == "integer" else "a number", schema)


def _range(noun: str, schema: Mapping[str, Any]) -> str:
    # pydantic spells a limit of a validated number "ge", of a bare one "minimum"
    above = schema.get("exclusiveMinimum", schema.get("gt"))
    low = schema.get("minimum", schema.get("ge"))
    high = schema.get("maximum", schema.get("le"))
    if above is not None:
        return f"{noun} above {above:g}, at most {_plain(high)}"
    if low is not None:
        return f"{noun} from {_plain(low)} to {_plain(high)}"
    return noun


def _plain(limit: float) -> str:
    rounded = f"{limit:.0e}"
    if not 1e-3 < limit < 1e9 and rounded.startswith("1e") and limit == float(rounded):
        return f"10^{int(rounded[2:])}"
    return f"{int(limit):,}" if limit == int(limit) else f"{limit:g}"


def _one_of(values: list[str]) -> str:
    return " or ".join(json.dumps(value) for value in values)
