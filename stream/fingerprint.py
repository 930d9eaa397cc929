"""Two fingerprints or settings as JSON types in, the lines that say how they differ out."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

__all__ = ["differences", "fingerprint_difference", "unlivable"]

_IN_SPACE = ("address_bits", "seed", "unit_length")


def fingerprint_difference(here: Mapping[str, Any], there: Mapping[str, Any]) -> list[str]:
    """Lines such as `space.seed: 0 here, 7 there`, sorted by key; none when the spaces are the same."""
    return differences(_by_setting(here), _by_setting(there))


def differences(here: Any, there: Any, place: str = "") -> list[str]:
    """A line for each place where two values of JSON types differ.

    Objects in a list that have names are compared by name (fields), and their order on its own line.
    """
    if isinstance(here, Mapping) and isinstance(there, Mapping):
        lines = []
        for key in sorted(here.keys() | there.keys()):
            inner = f"{place}.{key}" if place else str(key)
            if key in here and key in there:
                lines += differences(here[key], there[key], inner)
            else:
                lines.append(f"{inner}: {_one(here, key)} here, {_one(there, key)} there")
        return lines
    mine, others = _by_name(here), _by_name(there)
    if mine is not None and others is not None:
        lines = differences(mine, others, place)
        if not lines and list(mine) != list(others):
            lines.append(f"{place}: order {', '.join(mine)} here, {', '.join(others)} there")
        return lines
    a, b = _text(here), _text(there)
    return [] if a == b else [f"{place}: {a} here, {b} there"]


def unlivable(
    here: Mapping[str, Any], there: Mapping[str, Any], now: Mapping[str, Any], then: Mapping[str, Any]
) -> list[str]:
    """Lines on the changes that no model lives through; added fields and crosses are none.

    `here`, `there`: fingerprints; `now`, `then`: the other settings that a state is made of.
    """
    names = [field["name"] for field in there["fields"]]
    kept = {
        **here,
        "fields": [field for field in here["fields"] if field["name"] in names],
        "crosses": [cross for cross in here["crosses"] if cross in there["crosses"]],
    }
    return (
        fingerprint_difference(kept, there)
        + differences(now["learner"]["method"], then["learner"]["method"], "learner.method")
        + _of_averages(now["learner"], then["learner"])
        + differences(now["metrics"], then["metrics"], "metrics")
    )


def _of_averages(now: Mapping[str, Any], then: Mapping[str, Any]) -> list[str]:
    """Averages are of the whole stream, and of the penalty on its sum: they begin with it."""
    keys = ["averaging"] + (["l1", "l2"] if "averaging" in then else [])
    here, there = ({key: one.get(key) for key in keys} for one in (now, then))
    return differences(here, there, "learner")


def _by_setting(fingerprint: Mapping[str, Any]) -> dict[str, Any]:
    """The fingerprint under the names that its values have in a settings file."""
    return {(f"space.{key}" if key in _IN_SPACE else key): value for key, value in fingerprint.items()}


def _by_name(value: Any) -> dict[str, Any] | None:
    if not isinstance(value, list) or not all(isinstance(item, Mapping) and "name" in item for item in value):
        return None
    named = {str(item["name"]): item for item in value}
    return named if len(named) == len(value) else None


def _one(values: Mapping[str, Any], key: str) -> str:
    return _text(values[key]) if key in values else "missing"


def _text(value: Any) -> str:
    return json.dumps(value, sort_keys=True, ensure_ascii=False)
