"""The address vectors, the plain twin and docs/addresses.md agree with each other and published values."""

from __future__ import annotations

import json
import math
import re
from pathlib import Path
from typing import Any

import mmh3
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.settings.models import Settings
from tests.strategies import settings_and_messages
from tests.twins import address_cases, features_twin

DOC = (Path(__file__).parents[1] / "docs" / "addresses.md").read_text(encoding="utf-8")
VECTORS: dict[str, Any] = json.loads(address_cases.VECTORS.read_text(encoding="ascii"))
CASES: list[dict[str, Any]] = VECTORS["cases"]


def table_below(heading: str) -> list[list[str]]:
    """Cells of the first table below a heading of the page."""
    section = DOC.split(f"## {heading}\n")[1]
    rows = re.findall(r"^\|(.*)\|$", section.split("\n## ")[0], re.MULTILINE)[2:]
    return [[cell.strip().strip("`") for cell in row.split("|")] for row in rows]


@pytest.mark.parametrize("case", CASES, ids=[case["what"] for case in CASES])
def test_the_twin_gives_the_row_of_each_vector(case: dict[str, Any]) -> None:
    settings = Settings.model_validate(case["settings"])
    if "rejected" in case:
        with pytest.raises(features_twin.Rejected, match=case["rejected"]):
            features_twin.row(case["message"], settings)
        return
    wanted = [
        (entry["text"].encode(), int(entry["address"], 16), np.float32(entry["value"]))
        for entry in case["row"]
    ]
    assert features_twin.row(case["message"], settings) == wanted


def test_the_vectors_are_those_worked_out_by_hand() -> None:
    assert address_cases.document() == VECTORS
    assert f"{len(CASES)} messages" in " ".join(DOC.split())


def test_every_address_in_the_docs_is_a_vector() -> None:
    known = set()
    for case in CASES:
        space = Settings.model_validate(case["settings"]).space
        for entry in case.get("row", []):
            known.add((entry["text"], str(space.seed), str(space.address_bits), entry["address"]))
    shown = table_below("Vectors")
    assert len(shown) > 20
    for text, seed, bits, address in shown:
        plain = text.replace(r"\x1f", "\x1f").replace(r"\x1b", "\x1b")
        assert (plain, seed, bits, address) in known, text


def test_the_example_code_in_the_docs_runs() -> None:
    (code,) = re.findall(r"```python\n(.*?)```", DOC, re.DOTALL)
    scope: dict[str, Any] = {}
    exec(code, scope)
    assert scope["address"]("route", "NW", 1, 40) == features_twin.address(b"route\x1fNW", 1, 40)


def test_the_hash_has_its_published_verification_value() -> None:
    # SMHasher's own test for MurmurHash3 x64 128: 0x6384BA69
    keys = [bytes(range(length)) for length in range(256)]
    results = b"".join(mmh3.hash_bytes(key, 256 - len(key), x64arch=True) for key in keys)
    verification = int.from_bytes(mmh3.hash_bytes(results, 0, x64arch=True)[:4], "little")
    assert f"`0x{verification:08X}`" in DOC
    assert verification == 0x6384BA69
    assert f"`{mmh3.hash_bytes(b'Hello world', 0).hex()}`" in DOC


@given(seed=st.integers(0, 2**32 - 1))
def test_texts_that_collide_under_every_seed_exist_as_the_docs_say(seed: int) -> None:
    one, other = (bytes.fromhex(text) for text in re.findall(r"^[0-9a-f]{64}$", DOC, re.MULTILINE))
    assert one != other
    assert mmh3.hash_bytes(one, seed, x64arch=True) == mmh3.hash_bytes(other, seed, x64arch=True)


def test_the_collision_table_in_the_docs_is_the_birthday_estimate() -> None:
    for count, bits, pairs, chance in table_below("What collisions do"):
        tokens, space = float(count.replace(",", "")), 2.0 ** int(bits)
        assert float(pairs.replace(",", "")) == pytest.approx(tokens**2 / (2 * space), rel=0.02)
        exact = -math.expm1((tokens - 1) * math.log1p(-1 / space))
        assert float(chance.removesuffix(" %")) == pytest.approx(100 * exact, rel=0.02)


@given(settings_and_messages())
def test_rows_of_random_messages_keep_the_promises_of_a_row(
    drawn: tuple[Settings, list[dict[str, Any]]],
) -> None:
    settings, messages = drawn
    names = {field.name for field in settings.fields} | {"&".join(cross.paths) for cross in settings.crosses}
    for message in messages:
        try:
            row = features_twin.row(json.loads(json.dumps(message)), settings)
        except features_twin.Rejected as rejected:
            assert rejected.reason in {"wrong_type", "out_of_range", "too_many_tokens"}
            continue
        addresses = [address for _, address, _ in row]
        assert len(set(addresses)) == len(addresses) <= settings.message.max_tokens
        assert all(0 <= address < 1 << settings.space.address_bits for address in addresses)
        assert all(text.split(b"\x1f")[0].decode() in names for text, _, _ in row)
        assert all(math.isfinite(value) for _, _, value in row)
        if settings.space.unit_length and row:
            assert sum(float(value) ** 2 for _, _, value in row) == pytest.approx(1, abs=1e-5)


@given(
    st.lists(st.sampled_from("aeounAÅéỹかハ漢9 ") | st.sampled_from("\u0301\u0308\u3099\u0327"), max_size=12)
)
def test_words_survive_their_own_folding(letters: list[str]) -> None:
    tokens = features_twin.words("".join(letters))
    assert [features_twin.cut(token) for token in tokens] == [[token] for token in tokens]
