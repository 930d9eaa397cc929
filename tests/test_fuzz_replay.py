"""Logs damaged at random: learned, or refused with a reason; rejected lines leave no trace in the model."""

import json
import random

import pytest

from stream.errors import BadData
from stream.runs.replay import replay
from tests.replays import BOUNDED, GRAVITY, LONG, courier_lines, model_of, rejects, settings_for


@pytest.fixture(scope="module")
def lines(tmp_path_factory):
    return courier_lines(tmp_path_factory.mktemp("feed") / "log.jsonl")


def mutated(lines, draw):
    """A log of up to 120 lines: some cut, joined, doubled, dropped or with other bytes in them."""
    log = [bytearray(draw.choice(lines)) for _ in range(draw.randrange(120))]
    for line in log:
        for _ in range(draw.choice((0, 0, 0, 1, 1, 2, 9))):
            place = draw.randrange(len(line) + 1)
            match draw.randrange(7):
                case 0:
                    line[place:] = b""
                case 1:
                    line[place:place] = draw.choice(SPICE)
                case 2:
                    line[place:place] = draw.randbytes(draw.choice((1, 2, 30)))
                case 3:
                    line[place : place + draw.randrange(20)] = b""
                case 4:
                    line[place:place] = line[: draw.randrange(60)]
                case 5 if line:
                    line[min(place, len(line) - 1)] ^= 1 << draw.randrange(8)
                case _:
                    line[:] = draw.choice(SPICE)
    return b"\n".join(bytes(line) for line in log) + draw.choice((b"", b"\n", b"\r\n", b"\n\n  \n"))


BYTE_ORDER_MARK = b"\xef\xbb\xbf"
SPICE = (
    b"", b"{}", b"null", b"\r", b"\n", BYTE_ORDER_MARK, b"\x00", b"\xff\xfe", b'"', b"}{", b"[[[[",
    b"\\ud800", b'"note": "\\u001f"', b'"hour": 1e999', b'"weight_kg": -1e308,', b'"redelivered": 2,',
    b"\xf0\x9f\x93\xa6" * 30, b"\xe6\xbc\xa2" * 70, b"{" * 200, b"9" * 5_000, b'"note": null,',
    b'"redelivered": null,',
)  # fmt: skip


@pytest.mark.parametrize("seed", range(1_000 if LONG else 60))
def test_any_log_is_learned_or_refused_and_the_counts_add_up(seed, lines, tmp_path):
    draw = random.Random(seed)
    content = mutated(lines, draw)
    log = tmp_path / "log.jsonl"
    log.write_bytes(content)
    share = draw.choice((1.0, 1.0, 0.3))
    settings = settings_for(
        [log],
        draw.choice((None, BOUNDED, GRAVITY)),
        message={"max_reject_share": share, "rejects_allowed_before": 20},
    )
    try:
        found = replay(settings, tmp_path / "state")
    except BadData:
        assert share < 1
        return
    written = rejects(tmp_path / "state") if found.summary.rejected else b""
    records = [json.loads(line) for line in written.splitlines()]
    summary = found.summary
    text = content.removeprefix(BYTE_ORDER_MARK)
    raw = text.split(b"\n")
    assert summary.messages == sum(1 for line in raw if line.strip(b" \t\r"))
    assert summary.rejected == len(records) == sum(found.rejects_by_reason.values())
    assert summary.labelled <= summary.messages - summary.rejected
    assert found.learned + found.refused_updates >= summary.labelled
    gone = {record["offset"] - len(content) + len(text) for record in records}
    starts = [0, *(at + 1 for at, byte in enumerate(text) if byte == ord("\n"))]
    kept = [line for start, line in zip(starts, raw, strict=True) if start not in gone]
    log.write_bytes(b"\n" + b"\n".join(kept))
    without = replay(settings, tmp_path / "without")
    assert without.summary.rejected == 0
    assert without.summary.labelled == summary.labelled
    assert model_of(tmp_path / "without") == model_of(tmp_path / "state")
