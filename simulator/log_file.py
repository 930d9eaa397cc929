"""A courier feed in, a message log and the truth behind it out, as files."""

from __future__ import annotations

import gzip
import sys
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import IO, Any

from simulator.courier import FeedBlock
from simulator.faults import Faults, Records
from simulator.feed import CourierFeed
from simulator.pacing import Pace
from simulator.truth import Truth
from simulator.writing import Progress, write_feed

__all__ = ["FileSink", "open_log", "write_log"]


def write_log(
    feed: CourierFeed,
    path: str | Path,
    *,
    truth_path: str | Path | None = None,
    probability_path: str | Path | None = None,
    outcome_path: str | Path | None = None,
    faults: Faults | None = None,
    pace: Pace | None = None,
    progress: Progress | None = None,
) -> Truth:
    """Writes the feed as JSON Lines and returns the truth behind it.

    A `path` that ends in .gz or .zst is compressed; "-" is standard output. The truth goes to `truth_path`,
    by default `<path>.truth.json` (nowhere for "-"); id and p_true of each message go to `probability_path`,
    if there is one. With `outcome_path` outcomes go there when they are known, and messages have none. Files
    get their names when they are whole, and replace older ones; with a rate in `pace` they grow where they
    are. Raises OSError, ImportError for .zst without zstandard, and ValueError as `write_feed` does.
    """
    pace = pace or Pace()
    growing = pace.rate is not None
    with ExitStack() as files:

        def opened(place: str | Path | None) -> IO[bytes] | None:
            return None if place is None else files.enter_context(open_log(place, growing=growing))

        sink = FileSink(opened(path), opened(outcome_path), opened(probability_path), growing)
        truth = write_feed(feed, sink, faults or Faults(), pace, progress)
        if truth_path is None and str(path) != "-":
            truth_path = f"{path}.truth.json"
        if truth_path is not None:
            with open_log(truth_path) as out:
                out.write(truth.to_json().encode())
    return truth


class FileSink:
    """Lines in files: messages, late outcomes, true probabilities; None keeps nothing of a kind. What is
    written to `growing` files is there when a call returns."""

    def __init__(
        self,
        log: IO[bytes] | None,
        outcomes: IO[bytes] | None = None,
        probabilities: IO[bytes] | None = None,
        growing: bool = False,
    ) -> None:
        self._log, self._outcomes, self._probabilities = log, outcomes, probabilities
        self._growing = growing
        self.late_outcomes = outcomes is not None

    def messages(self, records: Records) -> None:
        """Takes the next messages."""
        self._write(self._log, b"".join([value + b"\n" for value in records.values]))

    def outcomes(self, records: Records) -> None:
        """Takes the next late outcomes."""
        self._write(self._outcomes, b"".join([value + b"\n" for value in records.values]))

    def probabilities(self, block: FeedBlock, rows: slice) -> None:
        """Writes id and p_true (nine decimals) of each message."""
        if self._probabilities is not None:
            pairs = enumerate(block.probability[rows].tolist(), block.first + rows.start)
            lines = [f'{{"id":"h{i:09d}","p_true":{p:.9f}}}\n' for i, p in pairs]
            self._write(self._probabilities, "".join(lines).encode())

    def _write(self, out: IO[bytes] | None, lines: bytes) -> None:
        if out is not None and lines:
            out.write(lines)
            if self._growing:
                out.flush()


@contextmanager
def open_log(path: str | Path, *, growing: bool = False) -> Iterator[IO[bytes]]:
    """A binary file to write, compressed by its ending; gets its name at the end, or goes away on an error.

    "-" is standard output, and what exists and is no regular file (a pipe, a device) is written in place. So
    is a plain file that is read while it is `growing`.
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
    if growing and path.suffix not in (".gz", ".zst"):
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
