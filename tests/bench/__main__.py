"""Names of benches in, one table of figures and targets out: `python -m tests.bench --help` says how."""

from __future__ import annotations

import argparse
import json
import sys

from tests.bench.benches import BENCHES, measure
from tests.bench.figures import Figure


def _show(name: str, figures: list[Figure]) -> None:
    for figure in figures:
        met = {True: "met", False: "NOT MET", None: ""}[figure.met]
        value = f"{figure.value:.3g} {figure.unit}"
        print(f"{name:8}{figure.what:52}{value:>16}  {figure.target:8}{met}".rstrip(), flush=True)
        for detail, number in figure.details.items():
            print(f"{'':10}{detail:50}{number:>10,.4g}")


def main(arguments: list[str]) -> int:
    """Exit code 1 when a target was missed."""
    parser = argparse.ArgumentParser(prog="python -m tests.bench")
    parser.add_argument("names", nargs="*", metavar="NAME", help=f"which (all): {', '.join(BENCHES)}")
    parser.add_argument("--quick", action="store_true", help="smaller sizes: a first look, not the figures")
    parser.add_argument("--json", action="store_true", help="one JSON document instead of the table")
    options = parser.parse_args(arguments)
    if unknown := set(options.names) - set(BENCHES):
        parser.error(f"no bench is called {', '.join(sorted(unknown))}; there are {', '.join(BENCHES)}")
    found: dict[str, list[Figure]] = {}
    for name in options.names or BENCHES:
        found[name] = measure(name, options.quick)
        if not options.json:
            _show(name, found[name])
    if options.json:
        print(json.dumps({name: [f.to_json() for f in figures] for name, figures in found.items()}, indent=1))
    return int(any(figure.met is False for figures in found.values() for figure in figures))


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
