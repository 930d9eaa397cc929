"""Errors of settings in words: pydantic's findings in, a line each with place, key, value, limits out."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

from pydantic import ValidationError

from stream.settings import checks
from stream.settings.keys import known_keys, nearest

__all__ = ["Origin", "wording"]

Loc = tuple[str | int, ...]


@dataclass(frozen=True, slots=True)
class Origin:
    """A value given outside the file: how to call the place, and the keys that it set."""

    label: str
    keys: tuple[str, ...]
    in_environment: bool = False


def wording(error: ValidationError, data: Any, place: str, origins: Sequence[Origin]) -> list[str]:
    """One line for each thing wrong; `place` names the file, later `origins` beat earlier ones."""
    lines = []
    for loc, why, value in _findings(error, data):
        origin = next((o for o in reversed(origins) if _meets(o.keys, loc)), None)
        if why is None:
            why = _unknown(loc, data, origin is not None and origin.in_environment)
        shown = "" if value is _ABSENT else f" = {_shown(value)}"
        lines.append(_printable(f"{origin.label if origin else place}: {_spelled(loc)}{shown}: {why}"))
    return list(dict.fromkeys(lines))


_ABSENT = object()


def _findings(error: ValidationError, data: Any) -> Iterable[tuple[Loc, str | None, Any]]:
    """Where, why (None: the key is unknown), and the value at fault."""
    for found in error.errors(include_url=False):
        loc = _without_kind(found["loc"])
        context = found.get("ctx", {})
        match found["type"]:
            case checks.CONFLICT:
                for where, why in context["problems"]:
                    yield (*loc, *where), why, _at(data, (*loc, *where))
            case checks.REFUSED:
                yield loc, found["msg"], found["input"]
            case "extra_forbidden":
                yield loc, None, _ABSENT
            case "missing":
                yield loc, f"is missing; {_must_be(loc)}", _ABSENT
            case "union_tag_not_found":
                yield (*loc, "kind"), f"is missing; {_must_be((*loc, 'kind'))}", _ABSENT
            case "union_tag_invalid":
                yield (*loc, "kind"), _must_be((*loc, "kind")), _at(found["input"], ("kind",))
            case _:
                yield loc, _must_be(loc), found["input"]


def _must_be(loc: Loc) -> str:
    if loc[0] in ("fields", "crosses"):
        if len(loc) == 1:
            return f"must be a list of tables; head each one with [[{loc[0]}]], in double brackets"
        if len(loc) == 2:
            return f"must be a table, headed by [[{loc[0]}]]"
        dotted = f"{loc[0]}.{loc[2]}"
    elif len(loc) == 1:
        return f"must be a table, headed by [{loc[0]}]"
    else:
        dotted = f"{loc[0]}.{loc[1]}"
    return "must be " + next(key.allowed for key in known_keys() if key.dotted == dotted)


def _unknown(loc: Loc, data: Any, in_environment: bool) -> str:
    keys = known_keys()
    known = [key.dotted for key in keys]
    if len(loc) == 1:
        known += dict.fromkeys(key.section for key in keys)
    elif loc[0] == "fields":
        kind = str(_at(data, (*loc[:2], "kind")))
        takers = next((key.kinds for key in keys if key.dotted == f"fields.{loc[2]}"), ())
        if takers:
            return f'a field of kind "{kind}" does not take it, only {" or ".join(takers)}'
        known = [key.dotted for key in keys if kind in key.kinds]
    elif loc[0] == "crosses":
        known = [key.dotted for key in keys if key.section == "crosses"]
    close = nearest(".".join(part for part in loc if isinstance(part, str)), known)
    if close is None:
        return f"unknown key; there {_known_there(loc, known)}"
    if in_environment:
        close = f"BEDLOAD_{close.upper().replace('.', '__')}"
    return f"unknown key; the nearest known one is {close}"


def _known_there(loc: Loc, known: Sequence[str]) -> str:
    """What stands where an unknown key was put, in words: "are ..."."""
    here = [name.partition(".")[2] for name in known if name.startswith(f"{loc[0]}.")] if len(loc) > 1 else []
    if here:
        return f"are {', '.join(here)}"
    return f"are the sections {', '.join(dict.fromkeys(key.section for key in known_keys()))}"


def _without_kind(loc: Loc) -> Loc:
    """pydantic puts the kind into the place of an error inside a field."""
    return (*loc[:2], *loc[3:]) if loc[:1] == ("fields",) else loc


def _meets(keys: tuple[str, ...], loc: Loc) -> bool:
    shared = min(len(keys), len(loc))
    return keys[:shared] == loc[:shared]


def _at(data: Any, loc: Loc) -> Any:
    for part in loc:
        try:
            data = data[part]
        except (KeyError, IndexError, TypeError):
            return _ABSENT
    return data


def _spelled(loc: Loc) -> str:
    """`learner.l1`, or `scale of [[fields]] number 2`."""
    if loc[0] in ("fields", "crosses") and len(loc) > 1:
        number = f"[[{loc[0]}]] number {int(loc[1]) + 1}"
        return f"{_keys_and_item(loc[2:])} of {number}" if len(loc) > 2 else number
    return _keys_and_item(loc)


def _keys_and_item(loc: Loc) -> str:
    text = ".".join(part for part in loc if isinstance(part, str))
    items = [part + 1 for part in loc if isinstance(part, int)]
    return f"{text} (item {items[0]})" if items else text


def _shown(value: Any) -> str:
    text = json.dumps(value, ensure_ascii=False, default=str)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _printable(line: str) -> str:
    """Line ends and terminal commands inside names and values are shown, not sent."""
    return "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in line)
