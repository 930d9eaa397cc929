"""Texts and numbers of many messages in, sparse rows of hashed tokens out: the batcher's kernel.

Arrays that describe the features, made once by `stream.features.plan`:

    fields   int64[F, 10]   see the columns below; ranges are into `prefixes`, `dropped` and `edges`
    crosses  int64[C, 11]   CROSS_PREFIX, its length, number of fields, then up to 8 fields
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from stream.exact import log1p
from stream.features.hashing import murmur3
from stream.features.merging import PRESENCE, begin_row, merge, to_unit_length, unite
from stream.features.words import Unicode, cut_words, put_bytes
from stream.kernel import kernel, small

__all__ = ["fill_rows"]

Bytes = npt.NDArray[np.uint8]
Int64s = npt.NDArray[np.int64]
Int32s = npt.NDArray[np.int32]
UInt64s = npt.NDArray[np.uint64]
Float32s = npt.NDArray[np.float32]

# columns of `fields`
KIND, VALUE, PAIRS, PREFIX, PREFIX_LENGTH, DROP, DROP_END, EDGES, EDGES_END, BINS = range(10)
FIELD_COLUMNS = 10
WORDS, TEXT, LIST, PLAIN, LOGARITHMIC, BINNED = 0, 1, 2, 3, 4, 5
# columns of `crosses`
CROSS_PREFIX, CROSS_PREFIX_LENGTH, CROSS_SIZE, CROSS_FIELDS, CROSS_COLUMNS = 0, 1, 2, 3, 11
# places in `progress`
ROW, ENTRIES, PLACE, KEPT, PROGRESS = 0, 1, 2, 3, 4
SEPARATOR = 0x1F
SPACE = 0x20
SLACK = 64
"""Bytes of room beyond the text itself: words of eight are written and read whole."""


@small
def _hash(out: Bytes, starts: Int64s, lengths: Int32s, count: int, seed: np.uint64, hashes: UInt64s) -> None:
    for t in range(count):
        hashes[t] = murmur3(out, starts[t], lengths[t], seed)


@small
def _text_room(fields: Int64s, text_starts: Int64s, text_ends: Int64s, row: int) -> int:
    """Most bytes that the tokens of the fields of one row can take (crosses make sure themselves).

    A word token costs at least two bytes of text with what parts it from the next; folding makes at
    most three bytes of one; a wide character stands in two tokens, and each token in up to two pairs.
    """
    room = 0
    for f in range(len(fields)):
        length = max(text_ends[f, row] - text_starts[f, row], 0)
        tokens = length // 2 + 2
        room += 2 * tokens * (fields[f, PREFIX_LENGTH] + 1) + 18 * length + SLACK
    return room


@small
def _drop(
    fields: Int64s, f: int, dropped: UInt64s, hashes: UInt64s, starts: Int64s, lengths: Int32s, count: int
) -> int:
    """Takes out tokens whose hash is among the field's dropped words; returns how many are left."""
    kept = 0
    for t in range(count):
        found = False
        for d in range(fields[f, DROP], fields[f, DROP_END]):
            found = found or dropped[d] == hashes[t]
        if not found:
            hashes[kept] = hashes[t]
            starts[kept] = starts[t]
            lengths[kept] = lengths[t]
            kept += 1
    return kept


@small
def _pair(
    out: Bytes,
    place: int,
    prefix_length: int,
    starts: Int64s,
    lengths: Int32s,
    hashes: UInt64s,
    count: int,
    seed: np.uint64,
) -> tuple[int, int]:
    """Puts "a b" right behind b for neighbours a, b; returns (place, count). Works from the end, in place."""
    if count < 2:
        return place, count
    for t in range(count - 1, 0, -1):
        first = place
        place = put_bytes(out, starts[t - 1], lengths[t - 1], out, place)
        out[place] = SPACE
        place = put_bytes(out, starts[t] + prefix_length, lengths[t] - prefix_length, out, place + 1)
        starts[2 * t] = first
        lengths[2 * t] = place - first
        hashes[2 * t] = murmur3(out, first, place - first, seed)
        starts[2 * t - 1] = starts[t]
        lengths[2 * t - 1] = lengths[t]
        hashes[2 * t - 1] = hashes[t]
    return place, 2 * count - 1


@small
def _split(
    text: Bytes,
    start: int,
    end: int,
    prefixes: Bytes,
    prefix: int,
    prefix_length: int,
    out: Bytes,
    place: int,
    starts: Int64s,
    lengths: Int32s,
) -> tuple[int, int]:
    """Tokens of a list: its items stand in the text with SEPARATOR between them. Returns (place, count)."""
    count = 0
    at = start
    while at < end:
        stop = at
        while stop < end and text[stop] != SEPARATOR:
            stop += 1
        if stop > at:
            starts[count] = place
            place = put_bytes(prefixes, prefix, prefix_length, out, place)
            place = put_bytes(text, at, stop - at, out, place)
            lengths[count] = place - starts[count]
            count += 1
        at = stop + 1
    return place, count


@kernel
def _cross(
    cross: Int64s,
    fields: Int64s,
    field_begin: Int64s,
    field_end: Int64s,
    prefixes: Bytes,
    entry_starts: Int64s,
    entry_lengths: Int32s,
    out: Bytes,
    place: int,
    starts: Int64s,
    lengths: Int32s,
) -> tuple[int, int]:
    """Tokens of one cross, first field slowest. Returns (place, count); place -1 when `out` is too small."""
    size = cross[CROSS_SIZE]
    chosen = np.empty(8, np.int64)
    for i in range(size):
        chosen[i] = field_begin[cross[CROSS_FIELDS + i]]
    count = 0
    while True:
        length = cross[CROSS_PREFIX_LENGTH] + size
        for i in range(size):
            length += entry_lengths[chosen[i]]
        if place + length + SLACK > len(out):
            return -1, count
        starts[count] = place
        place = put_bytes(prefixes, cross[CROSS_PREFIX], cross[CROSS_PREFIX_LENGTH], out, place)
        for i in range(size):
            prefix_length = fields[cross[CROSS_FIELDS + i], PREFIX_LENGTH]
            if i > 0:
                out[place] = SEPARATOR
                place += 1
            e = chosen[i]
            place = put_bytes(
                out, entry_starts[e] + prefix_length, entry_lengths[e] - prefix_length, out, place
            )
        lengths[count] = place - starts[count]
        count += 1
        i = size - 1
        while i >= 0:
            chosen[i] += 1
            if chosen[i] < field_end[cross[CROSS_FIELDS + i]]:
                break
            chosen[i] = field_begin[cross[CROSS_FIELDS + i]]
            i -= 1
        if i < 0:
            return place, count


@kernel
def _number_token(
    x: float,
    fields: Int64s,
    f: int,
    prefixes: Bytes,
    edges: npt.NDArray[np.float64],
    bin_starts: Int64s,
    bin_ends: Int64s,
    out: Bytes,
    place: int,
    starts: Int64s,
    lengths: Int32s,
) -> tuple[int, np.float32]:
    """Writes the token of a quantity; returns (place, value), value 0 where there is no token."""
    value = np.float32(1.0)
    if fields[f, KIND] == PLAIN:
        value = np.float32(x)
    elif fields[f, KIND] == LOGARITHMIC:
        value = np.float32(math.copysign(log1p(abs(x)), x))
    starts[0] = place
    place = put_bytes(prefixes, fields[f, PREFIX], fields[f, PREFIX_LENGTH], out, place)
    if fields[f, KIND] == BINNED:
        found = 0
        for edge in range(fields[f, EDGES], fields[f, EDGES_END]):
            if x >= edges[edge]:
                found += 1
        b = fields[f, BINS] + found
        place = put_bytes(prefixes, bin_starts[b], bin_ends[b] - bin_starts[b], out, place)
    lengths[0] = place - starts[0]
    return place, value


@kernel
def fill_rows(
    text: Bytes,
    text_begins: Int64s,
    text_ends: Int64s,
    numbers: npt.NDArray[np.float64],
    fields: Int64s,
    crosses: Int64s,
    prefixes: Bytes,
    dropped: UInt64s,
    edges: npt.NDArray[np.float64],
    bin_starts: Int64s,
    bin_ends: Int64s,
    unicode: Unicode,
    seed: np.uint64,
    shift: np.uint64,
    max_tokens: int,
    unit_length: bool,
    out: Bytes,
    row_ptr: Int64s,
    kept: Int64s,
    addresses: UInt64s,
    values: Float32s,
    text_starts: Int64s,
    text_lengths: Int32s,
    starts: Int64s,
    lengths: Int32s,
    hashes: UInt64s,
    run: npt.NDArray[np.int32],
    chars: Int64s,
    index: UInt64s,
    index_state: Int64s,
    progress: Int64s,
) -> bool:
    """Fills rows from progress[ROW] on; False when `out` or the entry arrays are too small: grow, call again.

    `text_begins`, `text_ends` int64[F, m]: bytes of field f of message i in `text` (-1, -1: missing);
    `numbers` float64[F, m], NaN: missing. A message over `max_tokens` gets no row; `kept` int64[m] are those
    that do. progress int64[4]: next message, entries, bytes of `out`, rows. The rest as in Batch, or scratch.
    """
    count_of_fields = len(fields)
    field_begin = np.empty(count_of_fields + 1, np.int64)
    field_end = np.empty(count_of_fields + 1, np.int64)
    for row in range(progress[ROW], numbers.shape[1]):
        row_begin = progress[ENTRIES]
        entries = row_begin
        place = progress[PLACE]
        if place + _text_room(fields, text_begins, text_ends, row) > len(out):
            return False
        begin_row(index, index_state)
        occurrences = 0
        collided = False
        for step in range(count_of_fields + len(crosses)):
            f = min(step, count_of_fields)
            tokens = 0
            value_kind = PRESENCE
            value = np.float32(0.0)
            if step >= count_of_fields:
                cross = crosses[step - count_of_fields]
                combinations = 1
                for i in range(cross[CROSS_SIZE]):
                    g = cross[CROSS_FIELDS + i]
                    combinations *= min(field_end[g] - field_begin[g], max_tokens + 1)
                    combinations = min(combinations, max_tokens + 1)
                tokens = combinations
                if tokens > 0 and occurrences + tokens <= max_tokens:
                    place, tokens = _cross(
                        cross,
                        fields,
                        field_begin,
                        field_end,
                        prefixes,
                        text_starts,
                        text_lengths,
                        out,
                        place,
                        starts,
                        lengths,
                    )
                    if place < 0:
                        return False
                    _hash(out, starts, lengths, tokens, seed, hashes)
            elif fields[f, KIND] >= PLAIN:
                if not math.isnan(numbers[f, row]):
                    place, value = _number_token(
                        numbers[f, row],
                        fields,
                        f,
                        prefixes,
                        edges,
                        bin_starts,
                        bin_ends,
                        out,
                        place,
                        starts,
                        lengths,
                    )
                    if value != np.float32(0.0):
                        tokens = 1
                        _hash(out, starts, lengths, tokens, seed, hashes)
            elif text_begins[f, row] < text_ends[f, row]:
                begin = text_begins[f, row]
                end = text_ends[f, row]
                prefix = fields[f, PREFIX]
                prefix_length = fields[f, PREFIX_LENGTH]
                value_kind = fields[f, VALUE]
                if fields[f, KIND] == WORDS:
                    place, tokens = cut_words(
                        text,
                        begin,
                        end,
                        prefixes,
                        prefix,
                        prefix_length,
                        out,
                        place,
                        starts,
                        lengths,
                        unicode,
                        run,
                        chars,
                    )
                    _hash(out, starts, lengths, tokens, seed, hashes)
                    if fields[f, DROP] < fields[f, DROP_END]:
                        tokens = _drop(fields, f, dropped, hashes, starts, lengths, tokens)
                    if fields[f, PAIRS]:
                        place, tokens = _pair(
                            out, place, prefix_length, starts, lengths, hashes, tokens, seed
                        )
                elif fields[f, KIND] == TEXT:
                    starts[0] = place
                    place = put_bytes(prefixes, prefix, prefix_length, out, place)
                    place = put_bytes(text, begin, end - begin, out, place)
                    lengths[0] = place - starts[0]
                    tokens = 1
                    _hash(out, starts, lengths, tokens, seed, hashes)
                else:
                    place, tokens = _split(
                        text, begin, end, prefixes, prefix, prefix_length, out, place, starts, lengths
                    )
                    _hash(out, starts, lengths, tokens, seed, hashes)
            occurrences += tokens
            if occurrences > max_tokens:
                break
            if entries + tokens > len(addresses):
                return False
            field_begin[f] = entries
            if tokens > 0:
                entries, met = merge(
                    tokens,
                    starts,
                    lengths,
                    hashes,
                    shift,
                    value_kind,
                    row_begin,
                    entries,
                    index,
                    index_state,
                    addresses,
                    values,
                    text_starts,
                    text_lengths,
                )
                collided = collided or met
                if value != np.float32(0.0):
                    values[entries - 1] = value
            field_end[f] = entries
        if occurrences <= max_tokens:
            if collided:
                entries = unite(row_begin, entries, addresses, values, text_starts, text_lengths)
            if unit_length:
                to_unit_length(values, row_begin, entries)
            kept[progress[KEPT]] = row
            progress[KEPT] += 1
            row_ptr[progress[KEPT]] = entries
            progress[ENTRIES] = entries
            progress[PLACE] = place
        progress[ROW] = row + 1
    return True
