"""The pid of a worker and its metrics page come in, a row of what it takes and has done goes out."""

import re
import urllib.request
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

__all__ = ["Sample", "page_of", "sample", "tree_bytes"]

LINE = re.compile(r"^bedload_(\w+)(?:\{.*\})? (\S+)$", re.MULTILINE)


@dataclass(frozen=True)
class Sample:
    """One look at a worker. `lag`: of all partitions together, as it says itself, None before it knows."""

    seconds: float
    messages: int
    lag: int | None
    live: int
    nonzeros: int
    resident_bytes: int
    open_files: int
    threads: int
    cpu_s: float
    state_bytes: int


def page_of(port: int) -> dict[str, float]:
    """The metrics of the worker at `port`, those of all labels added up. Raises OSError where it is not."""
    with urllib.request.urlopen(f"http://127.0.0.1:{port}/metrics", timeout=120) as answer:
        text = answer.read().decode()
    found: dict[str, float] = {}
    for name, value in LINE.findall(text):
        found[name] = found.get(name, 0.0) + float(value)
    return found


def sample(pid: int, port: int, state: Path, seconds: float) -> Sample:
    """What the worker has done and takes now. Raises OSError where it is not there, or not yet."""
    page = page_of(port)
    status = Path(f"/proc/{pid}/status").read_text()
    ticks = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    lag = page.get("lag_messages")
    return Sample(
        seconds=seconds,
        messages=int(page["learned_messages"]),
        lag=None if lag is None else int(lag),
        live=int(page["live"]),
        nonzeros=int(page.get("nonzeros", 0)),
        resident_bytes=1024 * _number(status, "VmRSS"),
        open_files=len(list(Path(f"/proc/{pid}/fd").iterdir())),
        threads=_number(status, "Threads"),
        cpu_s=(int(ticks[11]) + int(ticks[12])) / 100,
        state_bytes=tree_bytes(state),
    )


def tree_bytes(folder: Path) -> int:
    """Bytes of all files below a folder in which files come and go."""
    found = 0
    for path in folder.rglob("*"):
        with suppress(OSError):
            found += path.stat().st_size
    return found


def _number(status: str, name: str) -> int:
    found = re.search(rf"^{name}:\s+(\d+)", status, re.MULTILINE)
    assert found is not None
    return int(found[1])
