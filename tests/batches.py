"""Examples as plain Python in, a Batch out, for the tests of what works on batches."""

from typing import NamedTuple

import numpy as np

from stream.batch import Batch


class Example(NamedTuple):
    """`row`: address to value; `label`: 0, 1 or None; `variant` makes another name for the same addresses."""

    row: dict[int, float]
    label: int | None = 1
    weight: float = 1.0
    variant: int = 0


def name_of(address, variant=0):
    return f"note\x1ftoken {address} {variant}".encode()


def batch_of(examples):
    names = [name_of(address, example.variant) for example in examples for address in example.row]
    lengths = np.array([len(name) for name in names], np.int32)
    return Batch(
        row_ptr=np.cumsum([0] + [len(example.row) for example in examples]).astype(np.int64),
        addresses=np.array([a for example in examples for a in example.row], np.uint64),
        values=np.array([x for example in examples for x in example.row.values()], np.float32),
        labels=np.array([-1 if example.label is None else example.label for example in examples], np.int8),
        weights=np.array([example.weight for example in examples], np.float64),
        texts=np.frombuffer(bytearray().join(names), np.uint8),
        text_starts=(np.cumsum(lengths) - lengths).astype(np.int64),
        text_lengths=lengths,
    )
