"""Weights in, one snapshot folder out; and back, verified: the format of docs/snapshot-format.md."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import asdict, dataclass, field, fields
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.arrays_file import ARRAYS, content_size, read_array_folder, write_array_folder
from stream.errors import BadData
from stream.manifest import manifest_bytes
from stream.weights import Weights

__all__ = ["About", "Snapshot", "check_format", "read_snapshot", "snapshot_size", "write_snapshot"]

FORMAT = "bedload snapshot"
FORMAT_VERSION = 1

_DTYPES: dict[str, np.dtype[Any]] = {
    "addresses": np.dtype("u8"),
    "weights": np.dtype("f4"),
    "messages": np.dtype("f8"),
    "name_offsets": np.dtype("i8"),
    "names": np.dtype("u1"),
}


@dataclass(frozen=True, slots=True)
class About:
    """What a snapshot says about its weights: JSON types, without clock, host or pid.

    `settings`: the whole settings of the run; `metrics`: progressive metrics of its window;
    `calibration`: calibration figures of that window; `program`: the version that wrote it.
    """

    settings: dict[str, Any] = field(default_factory=dict)
    metrics: dict[str, Any] = field(default_factory=dict)
    calibration: dict[str, Any] = field(default_factory=dict)
    program: str = ""


@dataclass(frozen=True, slots=True)
class Snapshot:
    """A snapshot that was read whole. `messages`: messages through at its moment, rejected ones too.

    `passed_over`: a line for each newer one that is broken, where the newest whole one was asked for.
    """

    path: Path
    messages: int
    weights: Weights
    about: About
    passed_over: tuple[str, ...] = ()


def snapshot_size(nnz: int, name_bytes: int, fingerprint: dict[str, Any], about: About) -> int:
    """Bytes of a snapshot of `nnz` weights whose names have `name_bytes` in all.

    Off only by some digits of the manifest: counts and the intercept have nine and seventeen here.
    """
    lengths = dict.fromkeys(_DTYPES, nnz) | {"name_offsets": nnz + 1, "names": name_bytes}
    arrays = content_size({name: (dtype, (lengths[name],)) for name, dtype in _DTYPES.items()})
    sums = {ARRAYS: {"size": arrays, "crc32c": "0" * 8, "sha256": "0" * 64}}
    manifest = _manifest(10**8, 10**8, -1 / 3, nnz, fingerprint, about)
    return arrays + len(manifest_bytes(manifest, sums))


def write_snapshot(
    path: Path, messages: int, weights: Weights, about: About, make_way: Callable[[], object] | None = None
) -> Path:
    """Writes the folder `path`; equal content gives equal bytes. For `make_way` see `write_folder`.

    Raises CannotCreate, NoPermission, FileTrouble; ValueError for weights that break their own rules.
    """
    lengths = np.fromiter(map(len, weights.names), np.int64, len(weights.names))
    arrays = {
        "addresses": weights.addresses.astype("u8", copy=False),
        "weights": weights.values.astype("f4", copy=False),
        "messages": weights.messages.astype("f8", copy=False),
        "name_offsets": np.concatenate([np.zeros(1, np.int64), np.cumsum(lengths)]),
        "names": np.frombuffer(b"".join(weights.names), np.uint8),
    }
    manifest = _manifest(
        messages, weights.learned, weights.intercept, len(weights), weights.fingerprint, about
    )
    wrong = _wrong_in(manifest, arrays)
    if wrong:
        raise ValueError(f"these weights make no snapshot: {wrong}")
    return write_array_folder(path.parent, path.name, arrays, manifest, make_way)


def _manifest(
    messages: int, learned: int, intercept: float, nnz: int, fingerprint: dict[str, Any], about: About
) -> dict[str, Any]:
    return {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "fingerprint": fingerprint,
        "messages": messages,
        "learned": learned,
        "intercept": intercept,
        "nnz": nnz,
        **asdict(about),
    }


def read_snapshot(path: Path) -> Snapshot:
    """Verifies and reads a snapshot folder.

    Raises InputMissing without the folder; BadData where it is damaged (naming file, expected, found) or in
    a format that is not known here.
    """
    manifest, arrays = read_array_folder(path)
    check_format(path, manifest)
    wrong = _wrong_in(manifest, arrays)
    if wrong:
        raise BadData(f"{path}: {wrong}")
    offsets, blob = arrays["name_offsets"].tolist(), arrays["names"].tobytes()
    weights = Weights(
        addresses=arrays["addresses"],
        values=arrays["weights"],
        names=tuple(blob[start:end] for start, end in pairwise(offsets)),
        messages=arrays["messages"],
        intercept=float(manifest["intercept"]),
        learned=manifest["learned"],
        fingerprint=manifest["fingerprint"],
    )
    about = About(**{item.name: manifest[item.name] for item in fields(About)})
    return Snapshot(path, manifest["messages"], weights, about)


def check_format(path: Path, manifest: dict[str, Any]) -> None:
    """Raises BadData for a manifest of another format, or of a version that is not known here."""
    if manifest.get("format") != FORMAT:
        raise BadData(f"{path}: expected format {FORMAT!r}, found {manifest.get('format')!r}")
    if manifest["format_version"] != FORMAT_VERSION:
        raise BadData(
            f"{path}: format_version {manifest['format_version']}, and this program knows "
            f"{FORMAT_VERSION}: read it with the program version that wrote it, or take an older snapshot"
        )


def _wrong_in(manifest: dict[str, Any], arrays: dict[str, npt.NDArray[Any]]) -> str | None:
    """What the sums of a file cannot tell: the first rule of the format that is broken, or None."""
    for name, dtype in _DTYPES.items():
        if name not in arrays or arrays[name].dtype != dtype or arrays[name].ndim != 1:
            return f"expected a {dtype} array {name!r} of one dimension"
    k, offsets = manifest["nnz"], arrays["name_offsets"]
    expected = {"addresses": k, "weights": k, "messages": k, "name_offsets": k + 1}
    for name, length in expected.items():
        if len(arrays[name]) != length:
            return f"expected {length} {name} for {k} weights, found {len(arrays[name])}"
    if not np.all(arrays["addresses"][1:] > arrays["addresses"][:-1]):
        return "addresses do not ascend"
    if not np.all(np.isfinite(arrays["weights"]) & (arrays["weights"] != 0)):
        return "a weight is zero or not finite"
    if not math.isfinite(manifest["intercept"]):
        return f"the intercept {manifest['intercept']} is not finite"
    if offsets[0] != 0 or offsets[-1] != len(arrays["names"]) or np.any(offsets[1:] < offsets[:-1]):
        return f"name_offsets do not ascend from 0 to {len(arrays['names'])}"
    return None
