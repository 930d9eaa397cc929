"""The tuning document in, its candidates and weight paths out as CSV for other programs."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from stream.durable import write_file

__all__ = ["write_tables"]

_CANDIDATE = (
    "index",
    "learning_rate",
    "l1_per_example",
    "l1",
    "nnz",
    "bytes",
    "log_loss",
    "difference",
    "log_loss_se",
    "log_loss_whole",
    "forward_log_loss",
    "auc",
    "calibration_ratio",
    "normalised_entropy",
)


def write_tables(document: Mapping[str, Any], folder: Path) -> None:
    """Writes candidates.csv (a row a candidate) and paths.csv (a row a token and strength) into `folder`.

    Numbers have all their digits, an undefined one is empty; UTF-8, lines end in LF. Raises what
    `stream.durable.write_file` does.
    """
    choice = document["choice"]["index"]
    candidates = (
        [*(c[name] for name in _CANDIDATE), int(c["index"] == choice)] for c in document["candidates"]
    )
    _write(folder / "candidates.csv", (*_CANDIDATE, "chosen"), candidates)
    drawn = document["paths"]
    paths = (
        (token["field"], token["token"], token["share"], drawn["learning_rate"], strength, weight)
        for token in drawn["tokens"]
        for strength, weight in zip(drawn["strengths"], token["weights"], strict=True)
    )
    _write(folder / "paths.csv", ("field", "token", "share", "learning_rate", "strength", "weight"), paths)


def _write(path: Path, titles: Sequence[str], rows: Iterable[Sequence[Any]]) -> None:
    text = io.StringIO(newline="")
    out = csv.writer(text, lineterminator="\n")
    out.writerow(titles)
    out.writerows(rows)
    write_file(path, text.getvalue().encode("utf-8", "backslashreplace"))
