"""Reading a sample of a log: the path of a JSON Lines file in, its first messages as plain objects out."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import msgspec

from stream.errors import BadData
from stream.settings import Feed
from stream.sources.log import read_head

__all__ = ["Sample", "read_sample"]

MOST_MESSAGES = 5_000


@dataclass(slots=True)
class Sample:
    """The usable messages of a sample, how many others there were, and what was wrong with the first."""

    messages: list[dict[str, Any]] = field(default_factory=list)
    bad_lines: int = 0
    first_bad: str = ""


def read_sample(path: Path) -> Sample:
    """The messages among the first 5,000 lines of a plain, .gz or .zst JSON Lines file ("-": standard input).

    Raises InputMissing without a file, NoPermission or FileTrouble when it cannot be read, BadData when it
    cannot be unpacked or holds no message at all.
    """
    sample = Sample()
    decoder = msgspec.json.Decoder()
    most_bytes = Feed().max_line_bytes
    for number, line in enumerate(read_head(str(path), MOST_MESSAGES, most_bytes), 1):
        wrong = f"over {most_bytes:,} bytes" if len(line) > most_bytes else ""
        if not wrong:
            try:
                message = decoder.decode(line)
            except (msgspec.DecodeError, RecursionError) as error:
                wrong = str(error)
            else:
                wrong = "" if isinstance(message, dict) else "not a JSON object"
        if wrong:
            sample.bad_lines += 1
            sample.first_bad = sample.first_bad or f"message {number} ({wrong})"
        else:
            sample.messages.append(message)
    if not sample.messages:
        found = f"{sample.first_bad}, and no other is better" if sample.bad_lines else "it is empty"
        raise BadData(f"{path}: holds no message: {found}; --sample takes one JSON object a line")
    return sample
