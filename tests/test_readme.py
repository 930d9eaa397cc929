"""README's session is what the program prints; only the line with times may differ."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

README = Path(__file__).parents[1] / "README.md"
TIMES = re.compile(r"[\d.]+ s, [\d,]+ messages/s, \d+ MB of memory at most")


def test_the_session_is_what_demo_prints(tmp_path: Path) -> None:
    code = "from stream.cli.main import run; run()"
    environment = {**os.environ, "COLUMNS": "100", "LC_ALL": "C.UTF-8"}
    done = subprocess.run(
        [sys.executable, "-c", code, "demo"],
        cwd=tmp_path,
        env=environment,
        capture_output=True,
        text=True,
        check=True,
    )
    printed = set(done.stdout.splitlines())
    (session,) = re.findall(
        r"<!-- session: begin -->\n```\n(.*)\n```\n<!-- session: end", README.read_text("utf-8"), re.S
    )
    lines = session.splitlines()
    assert len(lines) > 40
    assert any(TIMES.fullmatch(line) for line in lines)
    wrong = [line for line in lines if line not in printed and not TIMES.fullmatch(line)]
    assert wrong == []


def test_the_proof_of_a_worker_is_made_in_another_folder_than_its_own() -> None:
    text = README.read_text("utf-8")
    ((worker, proof),) = re.findall(r"^bedload replay --journal (\S+) --state (\S+)", text, re.MULTILINE)
    assert f"bedload work --state {worker} " in text
    assert proof != worker
