"""Settings in, the arrays that tell the batcher's kernel what to do with each field out."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from stream.features import merging, rows, unicode_tables
from stream.features.hashing import PADDING, hash_ranges
from stream.features.words import Unicode, cut_words
from stream.settings.models import Category, FieldSettings, ListOf, Quantity, Settings, Words

__all__ = ["Plan", "edge_text", "make_plan"]

SEPARATOR = b"\x1f"
VALUES = {"presence": merging.PRESENCE, "count": merging.COUNT, "log_count": merging.LOG_COUNT}


@dataclass(frozen=True, slots=True)
class Plan:
    """Arguments of `fill_rows` that do not change from batch to batch, under its names."""

    fields: npt.NDArray[np.int64]
    crosses: npt.NDArray[np.int64]
    prefixes: npt.NDArray[np.uint8]
    dropped: npt.NDArray[np.uint64]
    edges: npt.NDArray[np.float64]
    bin_starts: npt.NDArray[np.int64]
    bin_ends: npt.NDArray[np.int64]
    unicode: Unicode
    seed: np.uint64
    shift: np.uint64


class _Texts:
    """Byte strings laid end to end, addressed by (start, length)."""

    def __init__(self) -> None:
        self.bytes = bytearray()

    def put(self, text: bytes) -> tuple[int, int]:
        start = len(self.bytes)
        self.bytes += text
        return start, len(text)

    def array(self) -> npt.NDArray[np.uint8]:
        return np.frombuffer(bytes(self.bytes) + bytes(PADDING), np.uint8).copy()


def edge_text(edge: float) -> str:
    """A bin edge as it stands in a token: 5.0 is "5"."""
    return repr(float(edge)).removesuffix(".0")


def _bin_texts(edges: tuple[float, ...]) -> list[bytes]:
    texts = [edge_text(edge) for edge in edges]
    inner = [f"{low}..{high}" for low, high in pairwise(texts)]
    return [text.encode() for text in [f"..{texts[0]}", *inner, f"{texts[-1]}.."]]


def _kind(field: FieldSettings) -> int:
    match field:
        case Words():
            return rows.WORDS
        case Category():
            return rows.TEXT
        case ListOf():
            return rows.LIST
        case Quantity(bins=bins) if bins:
            return rows.BINNED
        case Quantity(scale="logarithmic"):
            return rows.LOGARITHMIC
    return rows.PLAIN


def _dropped_hashes(field: Words, unicode: Unicode, seed: np.uint64) -> list[int]:
    """Hashes of the tokens that the words to drop are cut into themselves."""
    text = " ".join(field.drop).encode()
    prefix = np.frombuffer(field.name.encode() + SEPARATOR + bytes(PADDING), np.uint8).copy()
    length = len(prefix) - PADDING
    data = np.frombuffer(text + bytes(PADDING), np.uint8).copy()
    room = len(text) + 2
    out = np.zeros(room * (length + 8) * 2 + PADDING, np.uint8)
    starts, lengths = np.zeros(room, np.int64), np.zeros(room, np.int32)
    run, chars = np.zeros(4 * room, np.int32), np.zeros(room, np.int64)
    _, count = cut_words(data, 0, len(text), prefix, 0, length, out, 0, starts, lengths, unicode, run, chars)
    hashes = np.empty(count, np.uint64)
    hash_ranges(out, starts, lengths, count, seed, hashes)
    return [int(h) for h in hashes]


def make_plan(settings: Settings) -> Plan:
    """The plan of the settings' fields, crosses and space."""
    tables = unicode_tables.load()
    unicode = (
        tables.page,
        tables.kind,
        tables.fold,
        tables.long_fold,
        tables.compose_key,
        tables.compose_value,
    )
    seed = np.uint64(settings.space.seed)
    texts = _Texts()
    fields = np.zeros((len(settings.fields), rows.FIELD_COLUMNS), np.int64)
    dropped: list[int] = []
    edges: list[float] = []
    bins: list[tuple[int, int]] = []
    for line, field in zip(fields, settings.fields, strict=True):
        line[rows.KIND] = _kind(field)
        line[rows.PREFIX], line[rows.PREFIX_LENGTH] = texts.put(field.name.encode() + SEPARATOR)
        line[rows.DROP], line[rows.EDGES], line[rows.BINS] = len(dropped), len(edges), len(bins)
        if isinstance(field, Words | ListOf):
            line[rows.VALUE] = VALUES[field.value]
        if isinstance(field, Words):
            line[rows.PAIRS] = field.pairs
            dropped += _dropped_hashes(field, unicode, seed)
        if isinstance(field, Quantity) and field.bins:
            edges += field.bins
            bins += [texts.put(text) for text in _bin_texts(field.bins)]
        line[rows.DROP_END], line[rows.EDGES_END] = len(dropped), len(edges)
    places = {field.name: place for place, field in enumerate(settings.fields)}
    crosses = np.zeros((len(settings.crosses), rows.CROSS_COLUMNS), np.int64)
    for line, cross in zip(crosses, settings.crosses, strict=True):
        line[rows.CROSS_PREFIX], line[rows.CROSS_PREFIX_LENGTH] = texts.put(
            "&".join(cross.paths).encode() + SEPARATOR
        )
        line[rows.CROSS_SIZE] = len(cross.paths)
        for place, name in enumerate(cross.paths):
            line[rows.CROSS_FIELDS + place] = places[name]
    return Plan(
        fields,
        crosses,
        texts.array(),
        np.array(dropped, np.uint64),
        np.array(edges, np.float64),
        np.array([start for start, _ in bins], np.int64),
        np.array([start + length for start, length in bins], np.int64),
        unicode,
        seed,
        np.uint64(64 - settings.space.address_bits),
    )
