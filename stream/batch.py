"""Batch: many examples as compressed sparse rows of hashed tokens, with the token texts beside them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Batch"]


@dataclass(slots=True)
class Batch:
    """m examples; row i holds entries row_ptr[i] to row_ptr[i + 1], addresses distinct within a row.

    `row_ptr`: int64[m + 1]; `addresses`: uint64[nnz]; `values`: float32[nnz], finite;
    `labels`: int8[m], 1, 0, or -1 without a label; `weights`: float64[m], finite, >= 0;
    `texts`: uint8[...], field-name 0x1F token of entry e at
    texts[text_starts[e] : text_starts[e] + text_lengths[e]] (int64[nnz], int32[nnz]).
    """

    row_ptr: npt.NDArray[np.int64]
    addresses: npt.NDArray[np.uint64]
    values: npt.NDArray[np.float32]
    labels: npt.NDArray[np.int8]
    weights: npt.NDArray[np.float64]
    texts: npt.NDArray[np.uint8]
    text_starts: npt.NDArray[np.int64]
    text_lengths: npt.NDArray[np.int32]

    def __len__(self) -> int:
        return len(self.labels)

    def text(self, entry: int) -> bytes:
        """`field-name 0x1F token` (UTF-8) of one entry."""
        start = int(self.text_starts[entry])
        return self.texts[start : start + int(self.text_lengths[entry])].tobytes()
