"""A number of kills and a seed in, the table of what became of them out: `python -m tests.chaos --help`."""

import argparse
import sys
import tempfile
import time
from pathlib import Path

from tests.broker import Broker
from tests.chaos.places import PLACES
from tests.chaos.series import ANY_TIME, TOGETHER, drawn_kills
from tests.chaos.trial import killed_again_and_again
from tests.chaos.worker import DoomedWorkers

TITLES = {"topics": "dead letters and scores to topics", "files": "rejects to files"}


def show(outward, found):
    kills = sum(found.kills.values())
    print(f"\n{TITLES[outward]}: {kills} kills, {kills + 1} lives")
    for place in (ANY_TIME, TOGETHER, *PLACES[outward]):
        missed = f"  ({found.missed[place]} more not reached in time)" if found.missed[place] else ""
        print(f"  {place:42}{found.kills[place]:>8,}{missed}")
    for what, figure in (
        ("lives that left a newer checkpoint", found.advances),
        ("messages", found.messages),
        ("of them bad", found.bad),
        ("learned once more", found.again),
        ("dead letters sent once more", found.letters_repeated),
        ("scores sent once more", found.scores_repeated),
        ("seconds", round(found.seconds)),
    ):
        print(f"  {what:42}{figure:>8,}")


def main(arguments):
    parser = argparse.ArgumentParser(prog="python -m tests.chaos")
    parser.add_argument("--kills", type=int, default=200, help="in both series together (200)")
    parser.add_argument("--seed", type=int, default=7)
    options = parser.parse_args(arguments)
    began = time.monotonic()
    shares = {"topics": options.kills - options.kills // 4, "files": options.kills // 4}
    with tempfile.TemporaryDirectory(prefix="bedload-chaos-") as name:
        folder = Path(name)
        workers = DoomedWorkers()
        try:
            with Broker.start(folder / "broker") as broker:
                for outward, count in shares.items():
                    kills = drawn_kills(outward, count, options.seed)
                    show(
                        outward,
                        killed_again_and_again(
                            broker, workers, folder / outward, outward, kills, options.seed
                        ),
                    )
        finally:
            workers.close()
    print(
        f"\nnothing lost, nothing doubled, nothing broken: {options.kills} kills, seed {options.seed}, "
        f"{time.monotonic() - began:,.0f} s in all"
    )


if __name__ == "__main__":
    main(sys.argv[1:])
