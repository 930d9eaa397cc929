"""Logs and settings for tests of replay, and what of a state folder must be equal."""

import gzip
import json
import os
import random

import zstandard

from simulator import CourierFeed, write_log
from stream.arrays_file import ARRAYS, read_array_folder
from stream.manifest import MANIFEST
from stream.settings import Settings

MESSAGES = 20_000
EVERY = 2_000
LONG = os.environ.get("LONG_TESTS") == "1"
"""52 kills instead of 12, 1,000 damaged logs instead of 60."""

BAD = (
    b'{"note": "left wi',
    b"[1, 2]",
    b'{"note": 7, "redelivered": true}',
    b'{"note": "x\xff", "redelivered": true}',
    b'{"weight_kg": NaN, "redelivered": true}',
    b'{"note": "gate code", "redelivered": "yes"}',
    b'{"note": "' + b" ".join(b"w%d" % i for i in range(80)) + b'", "redelivered": true}',
    b'{"note": "' + b"long " * 2_000 + b'", "redelivered": false}',
)
UNLABELLED = b'{"note": "parcel not known yet, unheardof", "route": "R99"}'

BASIC = {
    "feed": {"max_line_bytes": 4_096},
    "message": {
        "id": "id",
        "label": "redelivered",
        "max_tokens": 64,
        "max_reject_share": 1.0,
    },
    "fields": [
        {"path": "note", "kind": "words"},
        {"path": "route", "kind": "category"},
        {"path": "stop", "kind": "category"},
        {"path": "hour", "kind": "category"},
        {"path": "sender", "kind": "category"},
        {"path": "weight_kg", "kind": "quantity", "bins": [1, 5, 10]},
    ],
    "crosses": [{"paths": ["route", "hour"]}],
    "learner": {"learning_rate": 0.2, "l1_per_example": 5e-4},
    "metrics": {"window": 1_500},
    "state": {"checkpoint_every": EVERY},
}
BOUNDED = {
    "learner": {"learning_rate": 0.2, "l1_per_example": 5e-5, "l1": 0.1, "l2": 0.5, "horizon": 9_000},
    "metrics": {"window": 1_500, "slice_by": "stop"},
    "state": {
        "checkpoint_every": EVERY,
        "admit_after": 2,
        "admission_bytes": 1 << 12,
        "admission_halved_every": 2_500,
        "idle_after": 3_000,
        "max_live": 1_000,
    },
}
GRAVITY = {"learner": {"method": "truncated-gradient", "learning_rate": 0.05, "l1_per_example": 5e-4}}
VARIANTS = {"plain": ({}, 1), "bounded": (BOUNDED, 1), "gravity": (GRAVITY, 1), "two epochs": (BOUNDED, 2)}


def settings_for(paths, variant=None, **sections):
    data = {**BASIC, **(variant or {})}
    for section, changes in sections.items():
        data[section] = {**data.get(section, {}), **changes}
    data["feed"] = {**data["feed"], "paths": [str(path) for path in paths]}
    return Settings.model_validate(data)


def courier_lines(path):
    """A courier feed with lines among it that are bad or unlabelled; `path` is written on the way."""
    write_log(CourierFeed(seed=11, messages=MESSAGES), path)
    found = path.read_bytes().splitlines()
    draw = random.Random(5)
    for _ in range(60):
        found.insert(draw.randrange(len(found)), draw.choice(BAD))
        found.insert(draw.randrange(len(found)), UNLABELLED)
    return found


def write(path, lines):
    data = b"".join(line + b"\n" for line in lines)
    packed = {".gz": gzip.compress, ".zst": zstandard.compress}.get(path.suffix, bytes)
    path.write_bytes(packed(data))
    return path


def tree(folder):
    """Every file of a state folder but the lock, by name."""
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and path.name != "LOCK"
    }


def newest(folder):
    return max((folder / "checkpoints").glob("[0-9]*"))


def last_checkpoint(folder):
    """Name and bytes of the newest checkpoint."""
    path = newest(folder)
    return path.name, (path / MANIFEST).read_bytes(), (path / ARRAYS).read_bytes()


def model_of(folder):
    """The arrays that predictions are made from, as bytes; not the metrics, which count rejects too."""
    _, arrays = read_array_folder(newest(folder))
    return {name: array.tobytes() for name, array in arrays.items() if not name.startswith("metrics.")}


def rejects(folder):
    return (folder / "rejects" / "rejects.jsonl").read_bytes()


def config_for(settings, folder):
    """A settings file in `folder` with its state beside it."""
    config = folder / "bedload.toml"
    config.write_text(toml(settings.model_dump(mode="json", exclude_none=True)))
    return str(config)


def toml(settings):
    """Sections as inline tables: JSON but for the sign between key and value."""

    def text(value):
        if isinstance(value, dict):
            return "{" + ", ".join(f"{key} = {text(inner)}" for key, inner in value.items()) + "}"
        if isinstance(value, list):
            return "[" + ", ".join(map(text, value)) + "]"
        return json.dumps(value)

    return "".join(f"{section} = {text(value)}\n" for section, value in settings.items())
