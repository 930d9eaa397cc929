"""A count of messages in; a table of what a worker took while it learned them, and a verdict, out."""

import argparse
import sys
import tempfile
from collections.abc import Sequence
from pathlib import Path

from tests.broker.running import Broker
from tests.soak.judging import Outcome, complaints, growth_bytes, most_bytes
from tests.soak.running import soak
from tests.soak.sampling import Sample

ROWS = 20
HEADING = (
    "    minutes     messages       lag     live  non-zeros  memory, MB  files  threads  state, MB   CPU, s"
)


def main(arguments: Sequence[str]) -> int:
    """Exit code 1 where something is not as it should be."""
    parser = argparse.ArgumentParser(prog="python -m tests.soak")
    parser.add_argument("--messages", type=int, default=20_000_000)
    parser.add_argument("--scores", action="store_true", help="have the worker send a score of each message")
    parser.add_argument("--every", type=float, default=2.0, metavar="SECONDS", help="between two looks")
    parser.add_argument("--folder", type=Path, help="of broker and state; removed only where none is given")
    options = parser.parse_args(arguments)
    with tempfile.TemporaryDirectory() as temporary:
        folder = options.folder or Path(temporary)
        with Broker.start(folder / "broker") as broker:
            show = _Show()
            found = soak(
                broker,
                "soak",
                folder / "worker",
                options.messages,
                every_s=options.every,
                scores=options.scores,
                seen=show,
            )
    print("\nin short")
    _show_rows(found.samples)
    return _verdict(found)


class _Show:
    """Prints a sample now and then, so that who waits sees it move."""

    def __init__(self) -> None:
        self._last_s = float("-inf")

    def __call__(self, sample: Sample) -> None:
        if self._last_s < 0:
            print(HEADING)
        if sample.seconds - self._last_s >= 30:
            self._last_s = sample.seconds
            print(_row(sample), flush=True)


def _show_rows(samples: Sequence[Sample]) -> None:
    """About ROWS samples, at even steps of messages, and the last."""
    print(HEADING)
    due, step = 0, samples[-1].messages / ROWS
    for sample in samples[:-1]:
        if sample.messages >= due * step:
            print(_row(sample))
            due = int(sample.messages / step) + 1
    print(_row(samples[-1]))


def _row(s: Sample) -> str:
    lag = "-" if s.lag is None else f"{s.lag:,}"
    return (
        f"{s.seconds / 60:11.1f}{s.messages:13,}{lag:>10}{s.live:9,}{s.nonzeros:11,}"
        f"{s.resident_bytes / 1e6:12,.0f}{s.open_files:7}{s.threads:9}"
        f"{s.state_bytes / 1e6:11,.0f}{s.cpu_s:9,.0f}"
    )


def _verdict(found: Outcome) -> int:
    last, growth = found.samples[-1], growth_bytes(found.samples)
    before, after = (most_bytes(found.samples, *quarters) / 1e6 for quarters in ((2, 2), (3, 4)))
    told = (
        f"{found.learned:,} of {found.sent:,} messages learned; of {found.bad:,} bad ones {found.rejected:,} "
        f"rejected, {found.dead_letters:,} dead letters"
        + ("" if found.scores is None else f"; {found.scores:,} scores"),
        f"{found.checkpoints} checkpoints, {found.refused_coordinates:,} coordinates refused; "
        f"the broker held {found.broker_bytes / 1e9:.1f} GB at most",
        f"{last.messages / last.seconds:,.0f} messages/s from the start, "
        f"{last.cpu_s:,.0f} s of processor time",
        f"memory at most {before:,.0f} MB in the second quarter of the messages, {after:,.0f} MB later",
        f"a straight line through all but the first quarter: {growth:+.2f} MB a million messages",
        f"SIGTERM to the end {found.stop_s:.1f} s, exit code {found.exit_code}",
    )
    print("", *told, sep="\n")
    wrong = complaints(found)
    print("\n".join(f"NOT MET: {text}" for text in wrong) or "all counts right, nothing grew")
    return int(bool(wrong))


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
