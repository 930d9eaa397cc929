"""A first settings file from a sample: what is guessed, said and left out; and that it runs as it is."""

import gzip
import json
import random
import re
import tomllib

import pytest
import zstandard
from hypothesis import given
from hypothesis import strategies as st

from stream.decoding import Decoder
from stream.errors import BadData, FileTrouble, InputMissing
from stream.runs.init import draft
from stream.settings import load
from stream.settings.keys import known_keys
from stream.sources.log import LogSource
from tests.twins.features_twin import Rejected, row

WORDS = ["gate", "left", "rear", "dog", "ring", "bell", "shed", "noon", "porch", "wet", "closed", "yard"]


def courier(count=400, seed=1):
    """Messages of the demo world, labels late for the last tenth."""
    draw = random.Random(seed)
    return [
        {
            "id": f"h{number:05}",
            "at": f"2031-03-{1 + number // 24 % 28:02}T{number % 24:02}:00:00Z",
            "note": " ".join(draw.choices(WORDS, k=draw.randint(4, 12))),
            "route": f"R{draw.randint(1, 9)}",
            "hour": draw.randint(6, 21),
            "fragile": draw.random() < 0.3,
            "parcel": {"weight": round(draw.lognormvariate(1, 1), 3), "tags": draw.choices(WORDS, k=2)},
            "redelivered": draw.random() < 0.2 if number < count * 0.9 else None,
        }
        for number in range(count)
    ]


def as_lines(messages):
    return "".join(json.dumps(message) + "\n" for message in messages).encode()


@pytest.fixture
def drafted(tmp_path):
    """Text and settings drafted from messages, once every message of the sample was decoded with them."""

    def _drafted(messages):
        (tmp_path / "log.jsonl").write_bytes(as_lines(messages))
        text = draft(tmp_path / "log.jsonl", tmp_path)
        (tmp_path / "bedload.toml").write_text(text, encoding="utf-8")
        settings = load(tmp_path / "bedload.toml", environ={})
        assert rejects_of(settings) == []
        return text, settings

    return _drafted


def rejects_of(settings, *, ids=True, times=True):
    """What a run over the settings' own feed would reject, where ids and times are read or not."""
    source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
    decoder = Decoder(settings, ids=ids, times=times)
    rejects = []
    while len(block := source.read(10_000)):
        rejects += decoder.decode(block)[1]
    source.close()
    return rejects


def kinds(settings):
    return {field.path: field.kind for field in settings.fields}


def remark_before(text, line):
    """The remarks right above a line of the file, as one text."""
    lines = text.splitlines()
    at = lines.index(line)
    above = []
    while at and lines[at - 1].startswith("#"):
        at -= 1
        above.insert(0, lines[at].removeprefix("# "))
    return " ".join(above)


def left_out(text, path):
    """Why a path is commented out."""
    found = re.search(
        rf'# Left out: ((?:(?!\n\n).)*?)\n# \[\[fields\]\]\n# path = "{re.escape(path)}"', text, re.DOTALL
    )
    found = found or re.search(rf'# Left out: "{re.escape(path)}": (.*?)(?:\n\n|$)', text, re.DOTALL)
    assert found, f"{path} is not left out"
    return found[1].replace("\n# ", " ")


# ---- the whole file ----------------------------------------------------------------------------------------


def test_the_courier_feed_is_understood(drafted):
    _, settings = drafted(courier())
    message = settings.message
    assert (message.id, message.time, message.label, message.weight) == ("id", "at", "redelivered", None)
    assert kinds(settings) == {
        "note": "words",
        "route": "category",
        "hour": "category",
        "fragile": "category",
        "parcel.weight": "quantity",
        "parcel.tags": "list",
    }
    assert len(next(f for f in settings.fields if f.path == "parcel.weight").bins) >= 5


def test_every_key_stands_in_the_file_with_a_remark_and_its_default(drafted):
    text, settings = drafted(courier())
    for key in known_keys():
        if key.section in ("fields", "crosses"):
            assert re.search(rf"^# (- )?{key.name}\b.*:", text, re.MULTILINE), key.dotted
            continue
        (line,) = [line for line in section(text, key.section) if re.match(rf"(# )?{key.name} = ", line)]
        remark = remark_before(section_text(text, key.section), line)
        assert key.meaning in remark and key.allowed in remark, key.dotted
        if key.default is not None and line.startswith("#"):
            told = tomllib.loads(line.removeprefix("# "))[key.name]
            assert told == (list(key.default) if isinstance(key.default, tuple) else key.default)
    assert settings.learner == load(None, environ={}).learner


def section_text(text, name):
    return text.split(f"\n[{name}]\n")[1].split("\n[")[0]


def section(text, name):
    return section_text(text, name).splitlines()


NOT_TOGETHER = {"password_variable", "ca_file", "cert_file", "key_file"}
"""There is one place of the password, and no certificate without tls = true."""


def test_taking_away_every_mark_of_a_commented_key_gives_settings_that_load(drafted, tmp_path):
    text, _ = drafted(courier())
    keys = "|".join({key.name for key in known_keys()} - {"weight", "slice_by"} - NOT_TOGETHER)
    path = tmp_path / "all.toml"
    path.write_text(re.sub(rf"^# (?=({keys}) = |\[\[)", "", text, flags=re.MULTILINE), encoding="utf-8")
    settings = load(path, environ={})
    assert settings.state.max_live and settings.learner.horizon and settings.crosses


def test_lines_fit_a_hundred_columns(drafted):
    text, _ = drafted(courier())
    assert max(map(len, text.splitlines())) <= 100


def test_the_same_sample_gives_the_same_file(drafted):
    assert drafted(courier())[0] == drafted(courier())[0]


def test_no_value_of_a_text_is_written_into_the_file(drafted):
    """Texts may be personal data; a settings file is often shared."""
    messages = [{**message, "who": f"secret{i % 3}"} for i, message in enumerate(courier())]
    assert "secret" not in drafted(messages)[0]


# ---- id, time, label, weight -------------------------------------------------------------------------------


def test_an_id_needs_no_telling_name(drafted):
    messages = [{"ref": f"x{n * 7919 % 1000}", "a": n % 3, "y": bool(n % 2)} for n in range(100)]
    _, settings = drafted(messages)
    assert settings.message.id == "ref"


def test_few_messages_are_no_evidence_for_an_id(drafted):
    _, settings = drafted([{"color": f"c{n}", "y": bool(n % 2)} for n in range(5)])
    assert settings.message.id is None
    assert kinds(settings) == {"color": "category"}


@pytest.mark.parametrize("scale", [1, 1000, 1.0])
def test_epoch_times_are_found_by_range_and_name(drafted, scale):
    messages = [{"sent_at": (1_900_000_000 + n) * scale, "a": n % 3, "y": n % 2} for n in range(50)]
    assert drafted(messages)[1].message.time == "sent_at"


def test_a_text_that_is_no_real_date_is_no_time(drafted):
    _, settings = drafted([{"at": "2031-02-30T00:00:00Z", "b": n % 3, "y": n % 2} for n in range(50)])
    assert settings.message.time is None


def test_the_time_that_rises_is_the_event_time_and_others_are_left_out(drafted):
    draw = random.Random(0)
    messages = [
        {
            "due": f"2031-01-01T{draw.randint(10, 23)}:00:00Z",
            "seen": f"2031-01-01T10:{n:02}:00Z",
            "y": n % 2 == 0,
        }
        for n in range(60)
    ]
    text, settings = drafted(messages)
    assert settings.message.time == "seen"
    assert "a time" in left_out(text, "due")


def test_a_late_outcome_wins_over_a_flag_and_the_flag_is_told(drafted):
    draw = random.Random(0)
    messages = [
        {"gift": draw.random() < 0.5, "again": draw.choice([0, 1, None]), "n": n % 3} for n in range(200)
    ]
    text, settings = drafted(messages)
    assert settings.message.label == "again"
    assert '"gift"' in remark_before(text, 'label = "again"')
    assert kinds(settings)["gift"] == "category"


def test_a_name_breaks_the_tie_between_two_flags(drafted):
    draw = random.Random(0)
    messages = [{"outcome": draw.random() < 0.5, "gift": draw.random() < 0.5} for _ in range(200)]
    assert drafted(messages)[1].message.label == "outcome"


def test_without_a_label_the_file_says_what_follows_and_still_loads(drafted):
    text, settings = drafted([{"a": n % 3, "kept": ["yes", "no"][n % 2]} for n in range(50)])
    assert settings.message.label is None
    remark = remark_before(text, '# label = "path"')
    assert "never learned" in remark and '"kept"' in remark


@pytest.mark.parametrize("bad", ["maybe", 3, 0.5, ["x"], {"a": 1}])
def test_an_outcome_with_a_few_bad_values_is_still_found_and_they_are_told(tmp_path, bad):
    draw = random.Random(3)
    messages = [
        {"weekend": n % 7 < 2, "escalated": draw.choice([0, 1, None]), "a": n % 3} for n in range(1_000)
    ]
    for n in (100, 500, 900):
        messages[n]["escalated"] = bad
    (tmp_path / "log.jsonl").write_bytes(as_lines(messages))
    doubts = []
    text = draft(tmp_path / "log.jsonl", tmp_path, doubts.append)
    remark = remark_before(text, 'label = "escalated"')
    assert '"escalated" is true / false or 1 / 0 but for 3 of' in remark
    assert '"weekend"' in remark
    assert doubts == [doubts[0]] and "would be rejected" in doubts[0]


def test_a_nearly_clean_flag_without_a_telling_name_is_told_and_not_taken(drafted):
    messages = [{"tries": 2 if n == 5 else n % 2, "paid": n % 3 > 0} for n in range(300)]
    text, settings = drafted(messages)
    assert settings.message.label == "paid"
    assert '"tries" is true / false or 1 / 0 but for 1 of 300 values; it was not taken' in remark_before(
        text, 'label = "paid"'
    )


def test_a_property_called_weight_is_not_taken_for_an_example_weight(drafted):
    messages = [{"weight": n / 7, "importance": 1 + n % 2, "a": n % 3, "y": n % 2 > 0} for n in range(80)]
    text, settings = drafted(messages)
    assert settings.message.weight == "importance"
    assert kinds(settings)["weight"] == "quantity"
    text, settings = drafted([{k: v for k, v in m.items() if k != "importance"} for m in messages])
    assert settings.message.weight is None
    assert "not for an example weight" in remark_before(text, '# weight = "path"')


def test_what_comes_with_the_outcome_is_left_out(drafted):
    messages = [
        {"a": n % 3, "y": n % 2 > 0 if n % 4 else None, "how": "door" if n % 4 else None} for n in range(80)
    ]
    text, settings = drafted(messages)
    assert "how" not in kinds(settings)
    assert "outcome" in left_out(text, "how")


# ---- fields ------------------------------------------------------------------------------------------------


def column(values):
    """Messages with one field of these values beside a label."""
    return [{"x": value, "y": n % 2 > 0} for n, value in enumerate(values)]


NAMES = [f"{a}{b}" for a in WORDS for b in WORDS]


@pytest.mark.parametrize(
    ("values", "kind"),
    [
        (["left at the back gate", "rang twice nobody home", "put in shed"] * 5, "words"),
        ([f"置き配玄関前{n}確認済" for n in range(60)], "words"),
        (["back gate", "front door"] * 50, "category"),
        ([f"S{n % 40}" for n in range(200)], "category"),
        ([n % 24 for n in range(200)], "category"),
        ([None, "a", 1, True] * 20, "category"),
        ([True, None] * 20, "category"),
        ([n * n for n in range(200)], "quantity"),
        ([n / 3 for n in range(200)], "quantity"),
        ([1, 2.5, -3] * 20, "quantity"),
        ([["a", "b"], [], ["c", 7]] * 20, "list"),
    ],
)
def test_each_kind_is_recognised(drafted, values, kind):
    messages = column(values)
    if values[:2] == [True, None]:
        messages = [{**m, "label": n % 3 > 1} for n, m in enumerate(messages)]
    assert kinds(drafted(messages)[1])["x"] == kind


@pytest.mark.parametrize(
    ("values", "why"),
    [
        ([f"u{n}" for n in range(300)] * 1 + ["u0"], "301 messages"),
        (["same"] * 50, "the same in every message"),
        ([None] * 50, "null in every message"),
        ([["a"], "a"] * 20, "a list in some messages"),
        ([1.5, "a"] * 20, "no numbers in others"),
        ([{"k": 1}, "a"] * 20, "an object in some messages"),
        ([[1.5], ["a"]] * 20, "not all texts or whole numbers"),
        ([[]] * 20, "an empty list in every message"),
        ([10**40, 1] * 20, "more than 64 bits"),
        ([1e39, 1.5] * 20, "beyond 3.4e38"),
    ],
)
def test_what_cannot_be_learned_from_is_commented_out_with_the_reason(drafted, values, why):
    text, settings = drafted(column(values))
    assert "x" not in kinds(settings)
    assert why in left_out(text, "x")


def test_keys_below_a_value_that_is_not_always_an_object_are_left_out(drafted):
    text, settings = drafted(column([{"k": 1}, 3] * 20))
    assert kinds(settings) == {}
    assert "an object in some messages" in left_out(text, "x.k")


def test_keys_that_no_path_can_name_are_left_out(drafted):
    messages = [
        {"a.b": n % 3, "": n % 3, "o": {"c.d": n % 3}, 'q"': 1, "n\n": n, "y": n % 2 > 0} for n in range(50)
    ]
    text, settings = drafted(messages)
    assert kinds(settings) == {}
    assert "a key is empty, or has a dot" in left_out(text, "a.b")
    assert "Nothing in the sample looks like a field" in text


def test_paths_that_may_not_be_names_get_one(drafted):
    messages = [{"a&b": n % 3, "a_b": n % 4, "a b\x7f\x85": n % 5, "y": n % 2 > 0} for n in range(50)]
    _, settings = drafted(messages)
    assert {field.path: field.name for field in settings.fields} == {
        "a&b": "a_b",
        "a_b": "a_b_2",
        "a b\x7f\x85": "a b__",
    }


def test_an_object_used_as_a_map_is_left_out_as_one(drafted):
    messages = [{"seen": {f"k{n}": 1}, "a": n % 3, "y": n % 2 > 0} for n in range(300)]
    text, settings = drafted(messages)
    assert kinds(settings) == {"a": "category"}
    assert '"seen": an object with 300 different keys' in text
    assert "seen.k1" not in text


# ---- a few values unlike all others ------------------------------------------------------------------------


@pytest.fixture
def drafted_with_odd(tmp_path):
    """Settings drafted from messages, what was said at once, and the rejects of a run over them."""

    def _drafted(messages):
        (tmp_path / "log.jsonl").write_bytes(as_lines(messages))
        doubts = []
        text = draft(tmp_path / "log.jsonl", tmp_path, doubts.append)
        (tmp_path / "bedload.toml").write_text(text, encoding="utf-8")
        settings = load(tmp_path / "bedload.toml", environ={})
        return text, settings, doubts, rejects_of(settings)

    return _drafted


@pytest.mark.parametrize(
    ("key", "bad", "told"),
    [
        ("note", 7, '"note": 1 of 1,000 values is a whole number; it will be rejected.'),
        ("note", ["gate"], '"note": 1 of 1,000 values is a list; it will be rejected.'),
        ("note", {"text": "gate"}, '"note": 1 of 1,000 values is an object; it will be rejected.'),
        ("route", 1.5, '"route": 1 of 1,000 values is a number with a decimal point'),
        ("hour", [], '"hour": 1 of 1,000 values is a list; it will be rejected.'),
        ("parcel", "small", '"parcel": 1 of 1,000 values is text; it will be rejected.'),
        ("parcel", {"weight": "2 kg"}, '"parcel.weight": 1 of 1,000 values is text; it will be rejected.'),
        ("parcel", {"tags": "wet"}, '"parcel.tags": 1 of 1,000 values is text; it will be rejected.'),
        ("parcel", {"tags": [1.5]}, '"parcel.tags": 1 of 1,000 values is a list whose items are not all'),
        ("id", [1], '"id": 1 of 1,000 values is a list; it will be learned, and rejected by `bedload score`'),
        ("at", "soon", '"at": 1 of 1,000 values is a text that is no RFC 3339 time; it will be learned, but'),
        (
            "at",
            True,
            '"at": 1 of 1,000 values is true or false; it will be learned, but `bedload tune`',
        ),
    ],
)
def test_one_value_of_a_wrong_type_changes_no_guess_and_is_told(drafted_with_odd, key, bad, told):
    clean = drafted_with_odd(courier(1_000))[1]
    messages = courier(1_000)
    messages[500][key] = bad
    text, settings, doubts, rejects = drafted_with_odd(messages)
    assert kinds(settings) == kinds(clean)
    assert settings.message == clean.message
    (doubt,) = doubts
    assert doubt.startswith(told)
    assert doubt in text.replace("\n# ", " ")
    assert [reject.row for reject in rejects] == [500]
    learned = rejects_of(settings, ids=False, times=False) == []
    assert learned == ("will be learned" in doubt)


def test_what_the_field_takes_as_well_is_not_called_a_reject(drafted_with_odd):
    messages = courier(1_000)
    messages[500]["route"] = 7
    messages[501]["id"] = 8
    messages[502]["at"] = 1_930_000_000
    messages[503]["id"] = messages[504]["at"] = None
    messages[505]["id"] = messages[506]["id"]
    text, settings, doubts, rejects = drafted_with_odd(messages)
    assert (doubts, rejects) == ([], [])
    assert (settings.message.id, settings.message.time) == ("id", "at")
    remark = remark_before(text, 'id = "id"')
    assert "different in every message but 1 of 1,000 that have none and 1 that repeats another's" in remark
    assert "a time in every message but 1 of 1,000 that have none" in remark_before(text, 'time = "at"')


def test_as_many_as_stop_a_run_are_told_so(drafted_with_odd):
    messages = courier(1_000)
    for place in range(6):
        messages[100 * place]["note"] = place
        messages[100 * place + 1]["route"] = 1.5
        messages[100 * place + 2]["at"] = "soon"  # which is learned
    text, _, (first, *others), rejects = drafted_with_odd(messages)
    assert first.startswith("With 12 of 1,000 lines rejected, more than message.max_reject_share = 0.01")
    assert len(others) == 3 and len(rejects) == 18
    assert first in text.split("\n\n")[0].replace("\n# ", " ")


def test_a_path_that_only_rejected_messages_have_is_left_out(drafted_with_odd):
    clean = drafted_with_odd(courier(1_000))[1]
    messages = courier(1_000)
    for place in range(8):
        odd = messages[100 * place]
        odd["text"], odd["note"] = odd["note"], 7
        messages[100 * place + 1]["extra"] = f"floor {place % 2}"
    text, settings, doubts, _ = drafted_with_odd(messages)
    assert "only in messages that will be rejected" in left_out(text, "text")
    assert kinds(settings) == {**kinds(clean), "extra": "category"}
    assert len(doubts) == 1 and doubts[0].startswith('"note": 8 of 1,000 values are each a whole number')


def test_many_values_of_another_type_are_no_errors_of_the_feed(drafted_with_odd):
    messages = courier(1_000)
    for place in range(30):
        messages[10 * place]["parcel"]["weight"] = "heavy"
    text, settings, doubts, rejects = drafted_with_odd(messages)
    assert "parcel.weight" not in kinds(settings)
    assert "no numbers in others" in left_out(text, "parcel.weight")
    assert (doubts, rejects) == ([], [])


# ---- samples -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ending", "pack"), [("", bytes), (".gz", gzip.compress), (".zst", zstandard.compress)]
)
def test_packed_samples_are_read(tmp_path, ending, pack):
    path = tmp_path / f"log.jsonl{ending}"
    path.write_bytes(pack(as_lines(courier(50))))
    assert f'paths = ["log.jsonl{ending}"]' in draft(path, tmp_path)


def test_only_the_first_thousands_of_messages_are_read(tmp_path):
    path = tmp_path / "log.jsonl"
    path.write_bytes(b'{"a":1,"y":true}\n{"a":2,"y":false}\n' * 2_500 + b"broken\n")
    assert "the first 5,000 messages" in draft(path, tmp_path)


def test_lines_that_are_no_message_are_told(tmp_path):
    path = tmp_path / "log.jsonl"
    path.write_bytes(
        as_lines(courier(30)) + b"[1]\n" + b'{"a":"\xff"}\n' + b'{"a":"' + b"x" * (1 << 20) + b'"}\n'
    )
    head = draft(path, tmp_path).split("\n\n")[0].replace("\n# ", " ")
    told = (
        "3 of the sample's 33 lines are malformed and will be rejected; the first is message 31 (not a JSON"
    )
    assert told in head
    assert "With 3 of 33 lines rejected, more than message.max_reject_share = 0.01 allows" in head
    path.write_bytes(as_lines(courier(400)) + b"[1]\n")
    doubts = []
    assert "max_reject_share" not in draft(path, tmp_path, doubts.append).split("\n\n")[0]
    (doubt,) = doubts
    assert "1 of the sample's 401 lines is malformed and will be rejected" in doubt


def test_the_feed_is_found_from_wherever_the_file_is_put(tmp_path):
    log = tmp_path / "in [1]" / "log*.jsonl"
    log.parent.mkdir()
    log.write_bytes(as_lines(courier(30)))
    for folder in (tmp_path, log.parent, tmp_path / "else"):
        folder.mkdir(exist_ok=True)
        (folder / "bedload.toml").write_text(draft(log, folder), encoding="utf-8")
        assert rejects_of(load(folder / "bedload.toml", environ={})) == []


def test_examples_of_crosses_name_fields_of_the_feed_or_say_that_they_do_not(drafted):
    crossed = r"^# \[\[crosses\]\]\n# paths = (.*)$"
    messages = [{"place": n % 3, "text": " ".join(WORDS[n % 5 :]), "y": n % 2 > 0} for n in range(50)]
    text, _ = drafted(messages)
    assert re.search(crossed, text, re.MULTILINE)[1] == '["place", "text"]'
    text, _ = drafted([{"place": n % 3, "y": n % 2 > 0} for n in range(50)])
    assert re.search(crossed, text, re.MULTILINE)[1] == '["one field", "another"]'


@pytest.mark.parametrize("content", [b"", b"\n\n", b"not json\n", b"[1]\n[2]\n", b"\x00" * 100])
def test_a_sample_without_messages_exits_65(tmp_path, content):
    path = tmp_path / "log.jsonl"
    path.write_bytes(content)
    with pytest.raises(BadData, match="holds no message") as raised:
        draft(path, tmp_path)
    assert raised.value.exit_code == 65


@pytest.mark.parametrize("ending", [".gz", ".zst"])
def test_a_sample_that_cannot_be_unpacked_exits_65(tmp_path, ending):
    path = tmp_path / f"log.jsonl{ending}"
    path.write_bytes(as_lines(courier(30)))
    with pytest.raises(BadData, match=r"log\.jsonl"):
        draft(path, tmp_path)


def test_a_missing_sample_exits_66(tmp_path):
    with pytest.raises(InputMissing, match=r"none\.jsonl") as raised:
        draft(tmp_path / "none.jsonl", tmp_path)
    assert raised.value.exit_code == 66


def test_a_folder_is_no_sample(tmp_path):
    with pytest.raises(FileTrouble):
        draft(tmp_path, tmp_path)


# ---- any messages at all -----------------------------------------------------------------------------------

KEYS = st.sampled_from(
    ["id", "at", "label", "a", "b", "a.b", "", "a&b", "é\n", "\x7f\x85", "\u2028 x", "weight", "importance"]
)
TEXTS = st.text(st.characters(exclude_categories=["Cs"]), max_size=12) | st.just("2031-01-01T00:00:00Z")
NUMBERS = st.integers() | st.integers(0, 1) | st.floats(allow_nan=False, allow_infinity=False)
VALUES = st.recursive(
    st.none() | st.booleans() | NUMBERS | TEXTS | st.just(1_900_000_000),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(KEYS, inner, max_size=3),
    max_leaves=4,
)


@given(st.lists(st.dictionaries(KEYS, VALUES, max_size=5), min_size=1, max_size=8), st.sampled_from([1, 30]))
def test_whatever_the_messages_the_file_loads_and_rejects_none(tmp_path_factory, messages, times):
    folder = tmp_path_factory.mktemp("any")
    (folder / "log.jsonl").write_bytes(as_lines(messages * times))
    (folder / "bedload.toml").write_text(draft(folder / "log.jsonl", folder), encoding="utf-8")
    settings = load(folder / "bedload.toml", environ={})
    assert rejects_of(settings) == []
    for message in messages:
        try:
            row(message, settings)
        except Rejected as rejected:
            pytest.fail(f"{message} would be rejected: {rejected}")
