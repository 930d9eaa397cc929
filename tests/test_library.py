"""Bedload as a library: `import stream` is light, its names are there, README's example runs."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

import stream
from simulator import CourierFeed, write_log
from stream.runs.init import draft

README = Path(__file__).parents[1] / "README.md"


@pytest.mark.parametrize("name", stream.__all__)
def test_every_public_name_is_there(name: str) -> None:
    assert getattr(stream, name).__doc__


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = stream.nothing  # type: ignore[attr-defined]


def test_importing_loads_no_compiler() -> None:
    code = "import stream, sys; sys.exit('numba' in sys.modules or 'numpy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_the_example_in_readme_is_short_and_runs(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (example,) = re.findall(r"```python\n(.*?)```", README.read_text("utf-8"), re.DOTALL)
    assert len([line for line in example.splitlines() if line.strip()]) < 15
    monkeypatch.chdir(tmp_path)
    write_log(CourierFeed(messages=3_000), tmp_path / "handoffs.jsonl")
    Path("bedload.toml").write_text(draft(tmp_path / "handoffs.jsonl", tmp_path), "utf-8")
    found: dict[str, object] = {}
    exec(example, found)
    weights = found["weights"]
    assert isinstance(weights, stream.Weights) and len(weights) > 10
