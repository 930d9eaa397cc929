"""Rows of a batch with the scores given at arrival in, compressed payloads out; and back to a batch of many.

Little-endian, before compression: f64 weight, f64 margin at arrival, u32 n, u64[n] addresses, f32[n] values,
u32[n] lengths of the token texts, then those. A payload is the crc32 (u32) of a Zstandard frame, then that.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from zlib import crc32

import numpy as np
import numpy.typing as npt
import zstandard

from stream.batch import Batch
from stream.errors import BadData

__all__ = ["ExampleCodec"]

HEAD = struct.Struct("<ddI")
SUM = struct.Struct("<I")
LEVEL = 1
"""Higher levels gain little on some hundred bytes, and every message passes here twice."""


class ExampleCodec:
    """Packs and unpacks examples; the label is not in a payload, the join knows it."""

    def __init__(self) -> None:
        self._compressor = zstandard.ZstdCompressor(LEVEL)
        self._decompressor = zstandard.ZstdDecompressor()

    def pack(self, batch: Batch, margins: npt.NDArray[np.float64]) -> list[bytes]:
        """A payload for each row; `margins`: float64[m], those given at arrival."""
        addresses = batch.addresses.astype("<u8").tobytes()
        values = batch.values.astype("<f4").tobytes()
        lengths = batch.text_lengths.astype("<u4").tobytes()
        texts = _gathered(batch).tobytes()
        ends = np.cumsum(batch.text_lengths, dtype=np.int64)
        text_ptr = np.concatenate(([0], ends))[batch.row_ptr].tolist()
        row_ptr = batch.row_ptr.tolist()
        compress, head = self._compressor.compress, HEAD.pack
        frames = [
            compress(
                b"".join(
                    (
                        head(weight, margin, row_ptr[row + 1] - row_ptr[row]),
                        addresses[8 * row_ptr[row] : 8 * row_ptr[row + 1]],
                        values[4 * row_ptr[row] : 4 * row_ptr[row + 1]],
                        lengths[4 * row_ptr[row] : 4 * row_ptr[row + 1]],
                        texts[text_ptr[row] : text_ptr[row + 1]],
                    )
                )
            )
            for row, (weight, margin) in enumerate(zip(batch.weights.tolist(), margins.tolist(), strict=True))
        ]
        return [SUM.pack(crc32(frame)) + frame for frame in frames]

    def unpack(
        self, payloads: Sequence[bytes], labels: Sequence[int]
    ) -> tuple[Batch, npt.NDArray[np.float64]]:
        """The batch of these rows with these labels (1, 0), and float64[m], the margins given at arrival.

        Raises BadData where a payload is damaged.
        """
        heads: list[tuple[float, float, int]] = []
        parts: tuple[list[bytes], ...] = ([], [], [], [])
        for payload in payloads:
            data = self._frame_of(payload)
            head = HEAD.unpack_from(data)
            heads.append(head)
            at = HEAD.size
            for part, size in zip(parts, (8 * head[2], 4 * head[2], 4 * head[2], len(data)), strict=True):
                part.append(data[at : at + size])
                at += size
        addresses, values, lengths, texts = (b"".join(part) for part in parts)
        text_lengths = np.frombuffer(lengths, "<u4").astype(np.int32)
        batch = Batch(
            np.cumsum([0, *(count for _, _, count in heads)], dtype=np.int64),
            np.frombuffer(addresses, "<u8").astype(np.uint64),
            np.frombuffer(values, "<f4").astype(np.float32),
            np.array(labels, np.int8),
            np.array([weight for weight, _, _ in heads], np.float64),
            np.frombuffer(texts, np.uint8).copy(),
            np.cumsum(text_lengths, dtype=np.int64) - text_lengths,
            text_lengths,
        )
        return batch, np.array([margin for _, margin, _ in heads], np.float64)

    def _frame_of(self, payload: bytes) -> bytes:
        """What was compressed into a payload."""
        frame = payload[SUM.size :]
        if len(payload) < SUM.size or SUM.unpack_from(payload)[0] != crc32(frame):
            raise BadData(
                "a waiting message is damaged: it has not the sum that was stored with it. Take an older "
                "checkpoint, or begin again in another state.folder"
            )
        return self._decompressor.decompress(frame)


def _gathered(batch: Batch) -> npt.NDArray[np.uint8]:
    """The token texts of all entries, one behind the other."""
    lengths = batch.text_lengths.astype(np.int64)
    begins = np.cumsum(lengths) - lengths
    places = np.repeat(batch.text_starts - begins, lengths)
    gathered: npt.NDArray[np.uint8] = batch.texts[places + np.arange(len(places))]
    return gathered
