"""Names of comparisons in (none: all of them), their tables out: `python -m tests.evidence NAME ...`."""

import argparse

from tests.evidence import references, regret, sparsity

TABLES = {"references": references.compare, "regret": regret.compare, "sparsity": sparsity.compare}


def main():
    parser = argparse.ArgumentParser(prog="python -m tests.evidence")
    parser.add_argument(
        "names", nargs="*", choices=[[], *TABLES], metavar="NAME", help=f"which: {', '.join(TABLES)}"
    )
    for name in parser.parse_args().names or TABLES:
        print(f"\n{name}", flush=True)
        TABLES[name]()


if __name__ == "__main__":
    main()
