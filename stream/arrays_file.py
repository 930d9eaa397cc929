"""Named arrays in, one file in the safetensors format out; and back, checked while it is read.

The format is public: eight bytes (little-endian) give the length of a JSON header, which gives dtype, shape
and byte range of each array; the arrays follow without a gap
(https://github.com/huggingface/safetensors, "Format"). Tests hold the bytes equal to what the safetensors
library writes. The library is not used here for three reasons: its errors hide a full disk; it loads a
flipped bit without a word, so that the file must be read twice; its loader holds every byte twice
(4 million rows of 32 bytes, 122 MiB on disk: peak up by 244 MiB, here by 122).
"""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from io import FileIO
from math import prod
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.durable import Content, Sink, write_folder
from stream.errors import BadData
from stream.manifest import PIECE, FileSum, open_plain, read_manifest, verify_file

__all__ = [
    "ARRAYS",
    "Arrays",
    "Rows",
    "array_content",
    "content_size",
    "read_array_folder",
    "write_array_folder",
]

ARRAYS = "arrays.safetensors"
Arrays = Mapping[str, npt.NDArray[Any]]


@dataclass(frozen=True, slots=True)
class Rows:
    """Columns of `length` numbers each that are made while the file is written, some rows at a time.

    `pieces` gives consecutive rows of all columns of `dtypes`, by name.
    """

    length: int
    dtypes: Mapping[str, np.dtype[Any]]
    pieces: Iterator[Arrays]


# In the order in which the library sorts arrays (widest last here, first in the file).
_TYPES = {
    "BOOL": np.dtype("?"),
    "U8": np.dtype("<u1"),
    "I8": np.dtype("<i1"),
    "I16": np.dtype("<i2"),
    "U16": np.dtype("<u2"),
    "F16": np.dtype("<f2"),
    "I32": np.dtype("<i4"),
    "U32": np.dtype("<u4"),
    "F32": np.dtype("<f4"),
    "F64": np.dtype("<f8"),
    "I64": np.dtype("<i8"),
    "U64": np.dtype("<u8"),
}
_CODES = {dtype: code for code, dtype in _TYPES.items()}
_RANK = {code: rank for rank, code in enumerate(_TYPES)}


def write_array_folder(
    parent: Path,
    name: str,
    arrays: Arrays,
    manifest: Mapping[str, Any],
    make_way: Callable[[], object] | None = None,
    rows: Rows | None = None,
) -> Path:
    """`write_folder` of one file, arrays.safetensors. No copy of a contiguous array is made."""
    return write_folder(parent, name, {ARRAYS: array_content(arrays, rows)}, manifest, make_way)


def read_array_folder(folder: Path) -> tuple[dict[str, Any], dict[str, npt.NDArray[Any]]]:
    """Manifest and arrays of a folder; the arrays are the very bytes that were compared with the sums.

    Raises InputMissing without the folder, BadData naming file, expected and found.
    """
    manifest = read_manifest(folder)
    if list(manifest["files"]) != [ARRAYS]:
        raise BadData(f"{folder}: expected the file {ARRAYS} alone, found {sorted(manifest['files'])}")
    return manifest, _read_arrays(folder / ARRAYS, manifest["files"][ARRAYS])


def array_content(arrays: Arrays, rows: Rows | None = None) -> Content:
    """Content of a safetensors file: widest type first, then by name. TypeError for another dtype."""
    shapes = {name: (array.dtype, array.shape) for name, array in arrays.items()}
    if rows is not None:
        shapes |= {name: (dtype, (rows.length,)) for name, dtype in rows.dtypes.items()}
    text, starts, _ = _laid_out(shapes)

    def write(sink: Sink) -> None:
        sink.write(len(text).to_bytes(8, "little") + text)
        if rows is None:
            for name in starts:
                sink.write(_plain(arrays[name]))
            return
        first = 8 + len(text)
        for name, array in arrays.items():
            sink.place(first + starts[name], _plain(array))
        done = 0
        for piece in rows.pieces:
            for name, array in piece.items():
                sink.place(first + starts[name] + done * array.itemsize, _plain(array))
            done += len(array)
        sink.sum_placed()

    return write


def content_size(shapes: Mapping[str, tuple[np.dtype[Any], tuple[int, ...]]]) -> int:
    """Bytes of the file that `array_content` makes of arrays with these dtypes and shapes."""
    text, _, end = _laid_out(shapes)
    return 8 + len(text) + end


def _laid_out(
    shapes: Mapping[str, tuple[np.dtype[Any], tuple[int, ...]]],
) -> tuple[bytes, dict[str, int], int]:
    """Header, where the bytes of each array begin behind it, in the file's order, and where the last end."""
    coded = []
    for name, (dtype, shape) in shapes.items():
        code = _CODES.get(dtype.newbyteorder("<"))
        if code is None:
            raise TypeError(f"array {name!r}: dtype {dtype} has no place in a safetensors file")
        coded.append((-_RANK[code], name, code, shape))
    header, starts, start = {}, {}, 0
    for _, name, code, shape in sorted(coded):
        end = start + _TYPES[code].itemsize * prod(shape)
        header[name] = {"dtype": code, "shape": list(shape), "data_offsets": [start, end]}
        starts[name], start = start, end
    text = json.dumps(header, separators=(",", ":"), ensure_ascii=False).encode()
    return text + b" " * (-len(text) % 8), starts, start


def _plain(array: npt.NDArray[Any]) -> memoryview:
    """Its bytes as the file holds them."""
    return np.ascontiguousarray(array, dtype=array.dtype.newbyteorder("<")).data


def _read_arrays(path: Path, expected: Mapping[str, Any]) -> dict[str, npt.NDArray[Any]]:
    found = FileSum()
    arrays = {}
    try:
        with open_plain(path) as file:
            for name, dtype, shape in _header(file, found):
                arrays[name] = np.empty(shape, dtype)
                _fill(file, found, arrays[name])
            if file.read(1):
                raise _Torn
    except _Torn as error:
        verify_file(path, expected)
        raise BadData(f"{path}: its sums are right, but it is no safetensors file as known here") from error
    verify_file(path, expected, found)
    return arrays


class _Torn(Exception):
    """The file ends too early or late, or its header cannot be what was written."""


def _header(file: FileIO, found: FileSum) -> list[tuple[str, np.dtype[Any], tuple[int, ...]]]:
    """Name, dtype and shape of each array, in the order of their bytes, which fill the file exactly."""
    size = os.fstat(file.fileno()).st_size
    length_bytes = np.empty(8, np.uint8)
    _fill(file, found, length_bytes)
    length = int.from_bytes(length_bytes.tobytes(), "little")
    if length > size - 8:
        raise _Torn
    text = np.empty(length, np.uint8)
    _fill(file, found, text)
    layout, at = [], 0
    try:
        header = json.loads(text.tobytes())
        for (start, end), name in sorted((item["data_offsets"], name) for name, item in header.items()):
            dtype, shape = _TYPES[header[name]["dtype"]], tuple(header[name]["shape"])
            if start != at or end - start != dtype.itemsize * prod(shape) or min(shape, default=0) < 0:
                raise _Torn
            layout.append((name, dtype, shape))
            at = end
    except (ValueError, KeyError, TypeError, AttributeError, RecursionError) as error:
        raise _Torn from error
    if at != size - 8 - length:
        raise _Torn
    return layout


def _fill(file: FileIO, found: FileSum, array: npt.NDArray[Any]) -> None:
    """Reads the next array.nbytes bytes into `array`, summed on the way."""
    if not array.nbytes:
        return
    view = memoryview(array.data).cast("B")
    at = 0
    while at < len(view):
        got = file.readinto(view[at : at + PIECE])
        if not got:
            raise _Torn
        found.update(view[at : at + got])
        at += got
