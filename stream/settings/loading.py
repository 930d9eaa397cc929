"""Loading settings: a TOML file, environment and `--set` texts in, checked Settings out.

Later beats earlier: default < file < environment `BEDLOAD_SECTION__KEY` < `--set section.key=value`. Values
of the last two are TOML values (`3e-5`, `true`, `["a", "b"]`); what does not read as one is a text.
"""

from __future__ import annotations

import os
import tomllib
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from stream.errors import BadSettings, FileTrouble, InputMissing, NoPermission
from stream.settings.models import Settings
from stream.settings.wording import Origin, wording

__all__ = ["ENVIRONMENT_PREFIX", "load"]

ENVIRONMENT_PREFIX = "BEDLOAD_"
LISTS = ("fields", "crosses")
NOT_SETTINGS = frozenset(
    f"{ENVIRONMENT_PREFIX}{name}"
    for name in ("TRACEBACK", "LONG", "REQUIRE_BROKER", "REQUIRE_BROWSER", "REQUIRE_R", "REQUIRE_SPAMBASE")
)
"""Switches of the command line and of the tests."""


def load(
    path: Path | None, overrides: Sequence[str] = (), environ: Mapping[str, str] = os.environ
) -> Settings:
    """Settings from the file at `path` (None: defaults alone), `environ` and `--set` texts `overrides`.

    `Settings.folder` is the file's folder, or the working folder without a file. Raises InputMissing,
    NoPermission or FileTrouble when the file cannot be read, and BadSettings that lists every wrong key, one
    a line: where it was given, key, value and what is allowed.
    """
    data = {} if path is None else _read(path)
    origins: list[Origin] = []
    for origin, text in (*_from_environment(environ), *_from_overrides(overrides)):
        _put(data, origin.keys, _value(text), origin)
        origins.append(origin)
    try:
        settings = Settings.model_validate(data)
    except ValidationError as error:
        place = "settings" if path is None else str(path)
        raise BadSettings("\n".join(wording(error, data, place, origins))) from None
    return settings.placed_in(Path() if path is None else path.parent)


def _read(path: Path) -> dict[str, Any]:
    try:
        content = path.read_bytes()
    except (FileNotFoundError, NotADirectoryError):
        raise InputMissing(f"{path}: no such settings file; `bedload init` writes one") from None
    except PermissionError:
        raise NoPermission(f"{path}: the settings file may not be read by this user") from None
    except OSError as error:
        raise FileTrouble(f"{path}: the settings file cannot be read: {error.strerror}") from None
    try:
        return tomllib.loads(content.decode("utf-8-sig"))
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise BadSettings(f"{path}: line {line}: byte 0x{content[error.start]:02x} is not UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        raise BadSettings(f"{path}: not TOML: {_with_line(str(error), content)}") from None


def _with_line(message: str, content: bytes) -> str:
    """tomllib says "(at end of document)" without a line."""
    if "(at end of document)" not in message:
        return message
    line = content.rstrip().count(b"\n") + 1
    return message.replace("(at end of document)", f"(at line {line}, the end of the file)")


def _from_environment(environ: Mapping[str, str]) -> list[tuple[Origin, str]]:
    found = []
    for name in sorted(environ):
        if name.startswith(ENVIRONMENT_PREFIX) and name not in NOT_SETTINGS:
            keys = tuple(name.removeprefix(ENVIRONMENT_PREFIX).lower().split("__"))
            found.append((Origin(f"environment variable {name}", keys, in_environment=True), environ[name]))
    return found


def _from_overrides(overrides: Sequence[str]) -> list[tuple[Origin, str]]:
    found = []
    for text in overrides:
        name, equals, value = text.partition("=")
        keys = tuple(part.strip() for part in name.split("."))
        if not equals or not all(keys):
            raise BadSettings(f"--set {text}: write section.key=value, such as learner.l1_per_example=3e-5")
        found.append((Origin(f"--set {name.strip()}", keys), value))
    return found


def _value(text: str) -> Any:
    try:
        parsed = tomllib.loads(f"value = {text.strip()}")
    except tomllib.TOMLDecodeError:
        return text
    return parsed["value"] if len(parsed) == 1 else text


def _put(data: dict[str, Any], keys: tuple[str, ...], value: Any, origin: Origin) -> None:
    if keys[0] in LISTS and len(keys) > 1:
        raise BadSettings(
            f"{origin.label}: {keys[0]} is a list; set it whole, as a TOML list of tables, or change the file"
        )
    if isinstance(value, dict):  # a section given at once joins what the file says, key by key
        for key, inner in value.items():
            _put(data, (*keys, key), inner, origin)
        return
    *sections, last = keys
    for section in sections:
        if not isinstance(data.get(section), dict):
            data[section] = {}
        data = data[section]
    data[last] = value
