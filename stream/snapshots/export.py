"""Weights in, one CSV, JSON or Parquet file out: address, name, weight, sorted by address."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Literal, get_args

from stream.durable import Content, Sink, write_file
from stream.errors import UsageError
from stream.token_names import readable
from stream.weights import Weights

__all__ = ["ExportFormat", "export"]

ExportFormat = Literal["csv", "parquet", "json"]
_ROWS = 10_000


def export(weights: Weights, path: Path, format: str) -> None:
    """Writes `path` (0600) whole or not at all, in place of what is there.

    Address: whole number; name: as `readable` gives it, empty where not known; weight: float32, in CSV
    and JSON with the digits that read back to the same number in float32 and float64. Raises
    UsageError for another format or without pyarrow, CannotCreate, InputMissing, NoPermission, FileTrouble.
    """
    contents = {"csv": _csv, "json": _json, "parquet": _parquet}
    if format not in contents:
        raise UsageError(f"format {format!r} is not known: use one of {', '.join(get_args(ExportFormat))}")
    write_file(path, contents[format](weights))


def _rows(weights: Weights) -> Iterator[list[tuple[int, str, float]]]:
    """The rows, some thousands at a time."""
    for start in range(0, len(weights), _ROWS):
        part = slice(start, start + _ROWS)
        names = map(readable, weights.names[part])
        yield list(zip(weights.addresses[part].tolist(), names, weights.values[part].tolist(), strict=True))


def _csv(weights: Weights) -> Content:
    def write(sink: Sink) -> None:
        sink.write(b"address,name,weight\n")
        for rows in _rows(weights):
            text = io.StringIO()
            csv.writer(text, lineterminator="\n").writerows(rows)
            sink.write(text.getvalue().encode())

    return write


def _json(weights: Weights) -> Content:
    def write(sink: Sink) -> None:
        opening = "[\n"
        for rows in _rows(weights):
            lines = (
                json.dumps({"address": address, "name": name, "weight": weight}, ensure_ascii=False)
                for address, name, weight in rows
            )
            sink.write((opening + ",\n".join(lines)).encode())
            opening = ",\n"
        sink.write(b"[]\n" if opening == "[\n" else b"\n]\n")

    return write


def _parquet(weights: Weights) -> Content:
    try:
        import pyarrow as arrow
        from pyarrow import parquet
    except ImportError:
        raise UsageError(
            "parquet needs pyarrow, which is not installed: install bedload[parquet], or choose csv or json"
        ) from None
    columns: dict[str, Any] = {
        "address": weights.addresses,
        "name": arrow.array(map(readable, weights.names), arrow.string()),
        "weight": weights.values,
    }
    file = arrow.BufferOutputStream()
    parquet.write_table(arrow.table(columns), file)

    def write(sink: Sink) -> None:
        sink.write(memoryview(file.getvalue()))

    return write
