"""The table of faults in the operators' page in; the tests that it names, all there and all named, out."""

import re
from pathlib import Path

TESTS = Path(__file__).parent
PAGE = (TESTS.parent / "docs/operating.md").read_text()
TABLE = PAGE.partition("## Faults, and the test that injects each")[2].partition("\n## ")[0]
ROWS = [line for line in TABLE.splitlines() if line.startswith("| ")][1:]


def names_in(file):
    return re.findall(r"^def (test_\w+)", (TESTS / file).read_text(), re.MULTILINE)


def test_every_test_that_the_table_names_is_there():
    assert len(ROWS) > 15
    for row in ROWS:
        files = re.findall(r"`(test_\w+\.py)`", row)
        for name in re.findall(r"`(test_\w+?)(?:_\.\.\.)?`", row):
            assert any(found.startswith(name) for file in files for found in names_in(file)), name
        assert files or "not tried" in row, row


def test_every_fault_that_is_injected_stands_in_the_table():
    said = re.findall(r"`(test_\w+?)(?:_\.\.\.)?`", TABLE)
    for path in TESTS.glob("test_faults_*.py"):
        for name in names_in(path.name):
            assert any(name.startswith(start) for start in said), name
