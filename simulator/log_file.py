"""A courier feed in, a message log and the truth behind it out, as files."""

from __future__ import annotations

import gzip
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import IO, Any

from simulator.courier import Courier, FeedBlock
from simulator.feed import CourierFeed
from simulator.truth import Tally, Truth

__all__ = ["Progress", "open_log", "write_log"]

Progress = Callable[[int, int], None]
"""Called with messages written so far and messages in all."""


def write_log(
    feed: CourierFeed,
    path: str | Path,
    *,
    truth_path: str | Path | None = None,
    probability_path: str | Path | None = None,
    progress: Progress | None = None,
) -> Truth:
    """Writes the feed as JSON Lines and returns the truth behind it.

    A `path` that ends in .gz or .zst is compressed; "-" is standard output. The truth goes to `truth_path`,
    by default `<path>.truth.json` (nowhere for "-"); id and p_true of each message go to `probability_path`,
    if there is one. Files get their names when they are whole, and replace older ones. Raises OSError, and
    ImportError for .zst without zstandard.
    """
    courier = Courier(feed)
    tally = Tally(courier)
    with open_log(path) as log, _maybe(probability_path) as probabilities:
        for number in range(feed.block_count):
            block = courier.block(number)
            log.write(block.lines)
            if probabilities is not None:
                probabilities.write(_probability_lines(block))
            tally.add(block)
            if progress is not None:
                progress(tally.messages, feed.messages)
        truth = tally.truth()
        if truth_path is None and str(path) != "-":
            truth_path = f"{path}.truth.json"
        if truth_path is not None:
            with open_log(truth_path) as out:
                out.write(truth.to_json().encode())
    return truth


def _probability_lines(block: FeedBlock) -> bytes:
    """id and p_true (nine decimals) of each message of the block."""
    numbers = range(block.first, block.first + len(block))
    pairs: Iterator[tuple[int, float]] = zip(numbers, block.probability.tolist(), strict=True)
    return "".join(f'{{"id":"h{i:09d}","p_true":{p:.9f}}}\n' for i, p in pairs).encode()


@contextmanager
def _maybe(path: str | Path | None) -> Iterator[IO[bytes] | None]:
    if path is None:
        yield None
    else:
        with open_log(path) as out:
            yield out


@contextmanager
def open_log(path: str | Path) -> Iterator[IO[bytes]]:
    """A binary file to write, compressed by its ending; gets its name at the end, or goes away on an error.

    "-" is standard output, and what exists and is no regular file (a pipe, a device) is written in place.
    """
    if str(path) == "-":
        yield sys.stdout.buffer
        sys.stdout.buffer.flush()
        return
    path = Path(path)
    if path.exists() and not path.is_file():
        with path.open("wb") as place:
            yield place
        return
    part = path.with_name(path.name + ".part")
    try:
        with part.open("wb") as raw, _compressor(raw, path.suffix) as out:
            yield out
        part.replace(path)
    except BaseException:
        part.unlink(missing_ok=True)
        raise


def _compressor(raw: IO[bytes], suffix: str) -> Any:
    """Context manager giving a writer over `raw`; nothing of the clock or the file name gets into it."""
    if suffix == ".gz":
        return gzip.GzipFile(filename="", mode="wb", compresslevel=6, fileobj=raw, mtime=0)
    if suffix == ".zst":
        import zstandard

        return zstandard.ZstdCompressor(level=3).stream_writer(raw, closefd=False)
    return raw
