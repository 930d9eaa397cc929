"""A log in, a model out, by general libraries: the peer that learning is measured against."""

from __future__ import annotations

from pathlib import Path

import msgspec
import numpy as np
from sklearn.feature_extraction.text import HashingVectorizer
from sklearn.linear_model import SGDClassifier

__all__ = ["learn_by_peer"]


class _Message(msgspec.Struct):
    note: str
    y: int


def learn_by_peer(log: Path) -> SGDClassifier:
    """msgspec decodes, HashingVectorizer makes rows of 2^22 columns, SGDClassifier passes over all once.

    It does less than replay does: no predictions before updates, no metrics, no names, no rejects.
    """
    decoder = msgspec.json.Decoder(_Message)
    messages = decoder.decode_lines(log.read_bytes())
    vectorizer = HashingVectorizer(n_features=1 << 22, binary=True, norm=None, alternate_sign=False)
    rows = vectorizer.transform(message.note for message in messages)
    labels = np.array([message.y for message in messages])
    model = SGDClassifier(loss="log_loss", penalty="l1", alpha=1e-4)
    return model.partial_fit(rows, labels, classes=np.array([0, 1]))
