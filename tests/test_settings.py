"""Settings as users meet them: file, environment, --set, refusals in words, and docs/settings.md."""

import itertools
import json
import re
import subprocess
import sys
import tomllib
from datetime import datetime
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.errors import BadSettings, FileTrouble, InputMissing
from stream.runs.converging.converge import converge
from stream.runs.replay import replay
from stream.runs.tuning.tune import tune
from stream.runs.work import work
from stream.settings import Settings, load
from stream.settings.keys import FIELD_KINDS, known_keys
from stream.token_names import readable
from tests.twins.features_twin import row

DOC = (Path(__file__).parent.parent / "docs" / "settings.md").read_text(encoding="utf-8")
KEYS = {key.dotted: key for key in known_keys()}


@pytest.fixture
def write(tmp_path):
    def _write(text):
        path = tmp_path / "bedload.toml"
        path.write_text(text, encoding="utf-8")
        return path

    return _write


def refusal(path, overrides=(), environ=None):
    """The lines of the error that loading gives, the file's folder taken out."""
    with pytest.raises(BadSettings) as raised:
        load(path, overrides, environ or {})
    assert raised.value.exit_code == 78
    text = str(raised.value)
    return text.replace(f"{path.parent}/", "").splitlines() if path else text.splitlines()


# ---- layers ------------------------------------------------------------------------------------------------


def test_defaults_alone_are_settings():
    settings = load(None, environ={})
    assert settings == Settings()
    assert settings.folder == Path()


def test_environment_beats_file_and_set_beats_environment(write):
    path = write("[learner]\nl1_per_example = 1e-3\nl1 = 1.0\nl2 = 1.0\n")
    environ = {
        "BEDLOAD_LEARNER__L1": "2.0",
        "BEDLOAD_LEARNER__L2": "2",
        "HOME": "/",
        "XBEDLOAD_LEARNER__L1": "9",
    }
    learner = load(path, ["learner.l2=3e0"], environ).learner
    assert (learner.l1_per_example, learner.l1, learner.l2) == (1e-3, 2.0, 3.0)


def test_the_last_set_of_a_key_counts():
    assert load(None, ["space.seed=1", "space.seed=2"], {}).space.seed == 2


def test_values_outside_the_file_are_toml_else_text():
    settings = load(
        None,
        [
            "feed.paths=logs/*.jsonl",
            "message.label=redelivered",
            'message.id="a id"',
            "space.unit_length=true",
        ],
        {"BEDLOAD_FIELDS": "[{path = 'note', kind = 'words', drop = ['the']}]"},
    )
    assert settings.feed.paths == ("logs/*.jsonl",)
    assert (settings.message.label, settings.message.id) == ("redelivered", "a id")
    assert settings.space.unit_length is True
    assert settings.fields[0].drop == ("the",)


def test_a_value_cannot_smuggle_in_another_key():
    assert load(None, ["state.folder=1\nb=2"], {}).state.folder == "1\nb=2"


def test_a_section_set_at_once_joins_the_file(write):
    learner = load(write("[learner]\nl1 = 1.0\n"), ["learner={l2 = 2.0}"], {}).learner
    assert (learner.l1, learner.l2) == (1.0, 2.0)


def test_paths_are_relative_to_the_settings_file(write):
    path = write('[state]\nfolder = "kept"\n')
    settings = load(path, environ={})
    assert settings.folder == path.parent
    assert settings.resolve(settings.state.folder) == path.parent / "kept"
    assert settings.resolve("/elsewhere") == Path("/elsewhere")


def test_settings_survive_their_own_json(write):
    text = (
        '[learner]\nmethod = "truncated-gradient"\n'
        '[[fields]]\npath = "kg"\nkind = "quantity"\n'
        '[[fields]]\npath = "kg"\nname = "cut"\nkind = "quantity"\nbins = [-0.0, 1]\n'
        '[[fields]]\npath = "route"\nkind = "category"\n'
        '[[crosses]]\npaths = ["route", "cut"]\n'
    )
    settings = load(write(text), environ={})
    again = Settings.model_validate(json.loads(json.dumps(settings.model_dump(mode="json"))))
    assert again.placed_in(settings.folder) == settings
    assert again.fingerprint() == settings.fingerprint()
    assert str(again.fields[1].bins) == "(0.0, 1.0)", "-0.0 would give another edge text"


def test_whole_numbers_may_have_an_exponent(write):
    assert load(write("[state]\ncheckpoint_every = 1e6\n"), environ={}).state.checkpoint_every == 1_000_000


def test_a_file_with_a_byte_order_mark_is_read(tmp_path):
    path = tmp_path / "s.toml"
    path.write_bytes(b"\xef\xbb\xbf[space]\r\nseed = 3\r\n")
    assert load(path, environ={}).space.seed == 3


# ---- files that cannot be read -----------------------------------------------------------------------------


def test_a_missing_file_exits_66_and_names_the_cure(tmp_path):
    with pytest.raises(InputMissing, match="bedload init") as raised:
        load(tmp_path / "none.toml", environ={})
    assert raised.value.exit_code == 66


def test_a_folder_is_no_settings_file(tmp_path):
    with pytest.raises(FileTrouble, match="cannot be read"):
        load(tmp_path, environ={})


@pytest.mark.parametrize(
    ("content", "line"),
    [
        (b"[feed]\nkind = log\n", "line 2"),
        (b"[feed]\n\npaths = [1,\n", "line 3"),
        (b'[feed]\nkind = "log"\nkind = "log"\n', "line 3"),
        (b'[feed]\n\n\nkind = "\xff"\n', "line 4"),
    ],
)
def test_broken_toml_is_told_with_its_line(tmp_path, content, line):
    path = tmp_path / "s.toml"
    path.write_bytes(content)
    (text,) = refusal(path)
    assert text.startswith("s.toml: ") and line in text


# ---- topics ------------------------------------------------------------------------------------------------


def test_all_that_a_topic_needs_is_told_at_once(write):
    told = [line.split(": ")[1] for line in refusal(write(TOPIC))]
    assert told == ["feed.servers", "feed.topic", "feed.start"]


def test_one_file_serves_a_topic_and_its_recorded_logs(write):
    path = write(TOPIC + 'servers = "h:1"\ntopic = "t"\npaths = "t/*.jsonl"\nstart = "latest"\n')
    assert load(path, environ={}).feed.kind == "topic"
    assert load(path, ["feed.kind=log"], {}).feed.paths == ("t/*.jsonl",)


@pytest.mark.parametrize("start", ["earliest", "latest", "2031-03-03T06:00:00Z", "2031-03-03 06:00:00+01:00"])
def test_a_start_may_be_given_on_the_command_line(start):
    told = load(None, [f"feed.start={start}"], {}).feed.start
    assert told == start or datetime.fromisoformat(told) == datetime.fromisoformat(start)


def test_servers_may_be_ipv6_addresses(write):
    path = write(TOPIC + 'servers = ["[::1]:9092", "10.0.0.7:65535", "a-b.example:1"]\ntopic = "t"\n')
    assert len(load(path, environ={}).feed.servers) == 3


# ---- refusals ----------------------------------------------------------------------------------------------


LATE = """
message.id = "id"
message.time = "at"
[outcomes]
kind = "log"
paths = "outcomes.jsonl"
id = "id"
label = "redelivered"
time = "at"
wait = "48h"
"""


def test_outcomes_of_their_own_are_settings(write):
    settings = load(write(LATE), environ={})
    assert settings.outcomes.paths == ("outcomes.jsonl",)
    assert settings.outcomes.wait_ms == 48 * 3_600_000


@pytest.mark.parametrize(
    ("wait", "ms"), [("1s", 1_000), ("90m", 5_400_000), ("2d", 172_800_000), ("3650d", 3650 * 86_400_000)]
)
def test_a_wait_is_a_number_and_its_unit(write, wait, ms):
    assert load(write(LATE), [f"outcomes.wait={wait}"], {}).outcomes.wait_ms == ms


@pytest.mark.parametrize("wait", ["0s", "48", "1.5h", "-1h", "2 d", "4w", "3651d", "9999999999d", "", "٣h"])
def test_another_wait_is_refused_with_what_one_may_be(write, wait):
    (line,) = refusal(write(LATE), [f"outcomes.wait={wait}"])
    assert line.startswith("--set outcomes.wait: outcomes.wait") and '"48h"' in line


def test_all_that_outcomes_of_their_own_need_is_told_at_once(write):
    lines = refusal(write('[outcomes]\nkind = "topic"\n'))
    assert [line.split(": ")[1] for line in lines] == [
        "outcomes.id",
        "outcomes.label",
        "outcomes.time",
        "outcomes.wait",
        "outcomes.topic",
    ]


@pytest.mark.parametrize(
    ("given", "key"),
    [
        ("message.label=redelivered", "message.label"),
        ("outcomes.kind=topic", "feed.servers"),
    ],
)
def test_what_does_not_go_with_outcomes_of_their_own_is_refused(write, given, key):
    (line,) = refusal(write(LATE + 'topic = "late"'), [given])
    assert f": {key}" in line


def test_messages_need_id_and_time_to_meet_their_outcomes(write):
    lines = refusal(write(LATE.partition("[outcomes]")[1] + LATE.partition("[outcomes]")[2]))
    assert [line.split(": ")[1] for line in lines] == ["message.id", "message.time"]


def test_outcomes_come_in_a_topic_of_their_own(write):
    topics = 'topic = "late"\n[feed]\nkind = "topic"\nservers = "h:1"\nstart = "earliest"\ntopic = "late"\n'
    path = write(LATE.replace('"log"', '"topic"') + topics)
    (line,) = refusal(path)
    assert "outcomes.topic" in line and "feed.topic too" in line
    for section in ("scores", "rejects"):
        (line,) = refusal(path, ["feed.topic=handoffs", f"{section}.topic=late"])
        assert f"{section}.topic" in line and "outcomes.topic too" in line


def test_keys_of_late_outcomes_may_stand_beside_outcomes_in_the_messages(write):
    settings = load(write(LATE), ["outcomes.kind=inline", "message.label=redelivered"], {})
    assert settings.message.label == "redelivered"


def test_every_error_is_shown_one_a_line_with_place_key_value_and_limits(write):
    path = write(
        '[learner]\nlearning_rate = -1\nmethod = "newton"\n[space]\nseed = true\nunit_length = "yes"\n'
    )
    lines = refusal(path, ["state.admit_after=0"], {"BEDLOAD_METRICS__WINDOW": "many"})
    assert lines == [
        "bedload.toml: space.seed = true: must be a whole number from 0 to 4,294,967,295",
        'bedload.toml: space.unit_length = "yes": must be true or false',
        'bedload.toml: learner.method = "newton": must be "ftrl" or "truncated-gradient"',
        "bedload.toml: learner.learning_rate = -1: must be a number from 10^-9 to 1,000,000",
        "--set state.admit_after: state.admit_after = 0: must be a whole number from 1 to 200",
        'environment variable BEDLOAD_METRICS__WINDOW: metrics.window = "many": '
        "must be a whole number from 1 to 10^15",
    ]


@pytest.mark.parametrize(
    ("text", "key", "near"),
    [
        ("[learner]\nl1_per_exmaple = 1", "learner.l1_per_exmaple", "learner.l1_per_example"),
        ("[learner]\ncheckpoint_every = 1", "learner.checkpoint_every", "state.checkpoint_every"),
        ("learning_rate = 1", "learning_rate", "learner.learning_rate"),
        ("[lerner]\nl1 = 1", "lerner", "learner"),
        (
            '[[fields]]\npath = "a"\nkind = "words"\npair = true',
            "pair of [[fields]] number 1",
            "fields.pairs",
        ),
        (
            '[[crosses]]\npath = ["a", "b"]\npaths = ["a", "b"]',
            "path of [[crosses]] number 1",
            "crosses.paths",
        ),
    ],
)
def test_an_unknown_key_is_refused_with_the_nearest_known_one(write, text, key, near):
    (line,) = refusal(write(text))
    assert line == f"bedload.toml: {key}: unknown key; the nearest known one is {near}"


def test_an_unknown_key_from_outside_is_answered_in_its_own_spelling():
    assert refusal(None, ["state.max_life=5"])[0].endswith("the nearest known one is state.max_live")
    assert refusal(None, (), {"BEDLOAD_STATE__MAX_LIFE": "5"}) == [
        "environment variable BEDLOAD_STATE__MAX_LIFE: state.max_life: unknown key; the nearest known one is "
        "BEDLOAD_STATE__MAX_LIVE"
    ]


def test_keys_and_values_cannot_break_a_line_or_drive_the_terminal(write):
    lines = refusal(write('"a\\nb" = 1\n[message]\nid = "\\u001b[2J\\u0085."\n'))
    assert len(lines) == 2 and all(line.isprintable() for line in lines)
    assert "\\u0085" in lines[0] and "a\\u000ab: unknown key" in lines[1]


@pytest.mark.parametrize("bad", ["learner.l1", "=3", ".l1=3", "learner.=3", ""])
def test_a_set_without_key_or_value_says_how_to_write_it(bad):
    (line,) = refusal(None, [bad])
    assert "section.key=value" in line


def test_lists_cannot_be_set_in_parts():
    assert "set it whole" in refusal(None, ["fields.0.path=a"])[0]
    assert "set it whole" in refusal(None, (), {"BEDLOAD_CROSSES__0__PATHS": "['a', 'b']"})[0]


FIELD = '[[fields]]\npath = "{}"\nkind = "{}"\n'
ROUTE = FIELD.format("route", "category")
NOTE = FIELD.format("note", "words")
KG = FIELD.format("kg", "quantity")
CROSSES = "[[crosses]]\n"
CROSS_1 = "paths of [[crosses]] number 1"
SPACE_20 = "[space]\naddress_bits = 20\n"
TOPIC = '[feed]\nkind = "topic"\n'
BEGUN = TOPIC + 'start = "earliest"\n'
TWO_PLACES = 'password_file = "a"\npassword_variable = "A"'
SASL = '[feed]\nsasl = "PLAIN"\n'
TRUNCATED = '[learner]\nmethod = "truncated-gradient"\n'


@pytest.mark.parametrize(
    ("text", "key", "why"),
    [
        (BEGUN + 'topic = "a"', "feed.servers", "at least one host:port"),
        (BEGUN + 'servers = "h:1"', "feed.topic", "name the topic"),
        ('[feed]\nkind = "queue"', 'feed.kind = "queue"', '"log" or "topic"'),
        ('[feed]\nservers = "h"', 'feed.servers (item 1) = "h"', "must be host:port"),
        ('[feed]\nservers = "h:0"', 'feed.servers (item 1) = "h:0"', "must be host:port"),
        ('[feed]\nservers = "::1:9092"', 'feed.servers (item 1) = "::1:9092"', "must be host:port"),
        ('[feed]\nservers = "u@h:1"', 'feed.servers (item 1) = "u@h:1"', "must be host:port"),
        ('[feed]\ntopic = "a b"', 'feed.topic = "a b"', "letters, digits"),
        ("[feed]\npartitions = [1, 1]", "feed.partitions = [1, 1]", "twice"),
        ("[feed]\npartitions = [-1]", "feed.partitions (item 1) = -1", "whole numbers"),
        ('[feed]\nstart = "now"', 'feed.start = "now"', "RFC 3339"),
        ('[feed]\nstart = "2031-03-03T06:00:00"', "feed.start", "offset from UTC"),
        ("[feed]\nstart = 2031-03-03", "feed.start", "offset from UTC"),
        ("[feed]\nstart = 7", "feed.start = 7", "RFC 3339"),
        ('[feed]\nca_file = "a"', 'feed.ca_file = "a"', "tls = true"),
        ('[feed]\ntls = true\nkey_file = "a"', "feed.cert_file", "go together"),
        ('[feed]\nusername = "a"', 'feed.username = "a"', "with sasl only"),
        ('[feed]\npassword_variable = "A"', "feed.password_variable", "with sasl only"),
        ('[feed]\nsasl = "GSSAPI"', 'feed.sasl = "GSSAPI"', '"PLAIN" or'),
        (SASL + 'password_file = "a"', "feed.username", "needs a user"),
        (SASL + 'username = "a"', "feed.password_file", "place of the password"),
        (SASL + 'username = "a"\n' + TWO_PLACES, "feed.password_file", "one of them"),
        (TRUNCATED + "l1 = 1.0", "learner.l1 = 1.0", "l1_per_example as its gravity"),
        (TRUNCATED + "l2 = 1.0", "learner.l2 = 1.0", "sum of losses"),
        (TRUNCATED + "horizon = 5", "learner.horizon = 5", "shuts no new token out"),
        (TRUNCATED + "damping = 2.0", "learner.damping = 2.0", "constant rate"),
        ("[learner]\nl1 = inf", "learner.l1 = Infinity", "from 0 to 10^9"),
        ("[learner]\nlearning_rate = nan", "learner.learning_rate = NaN", "from 10^-9"),
        ("[learner]\nhorizon = 0", "learner.horizon = 0", "from 1"),
        ("learner = 3", "learner = 3", "headed by [learner]"),
        ('[fields]\npath = "a"', "fields = ", "double brackets"),
        ('[[fields]]\nkind = "words"', "path of [[fields]] number 1", "is missing; must be a dotted path"),
        ('[[fields]]\npath = "a"', "kind of [[fields]] number 1", 'is missing; must be "words" or'),
        (FIELD.format("a", "text"), 'kind of [[fields]] number 1 = "text"', 'must be "words" or'),
        (FIELD.format("a..b", "words"), 'path of [[fields]] number 1 = "a..b"', "single dots"),
        ('[message]\nid = ".id"', 'message.id = ".id"', "single dots"),
        (FIELD.format('a\\"b', "words"), "path of [[fields]] number 1", "quotation mark"),
        (FIELD.format("a&b", "words"), 'name of [[fields]] number 1 = "a&b"', "another `name`"),
        (NOTE + 'name = "a\\u001fb"', "name of [[fields]] number 1", "control characters"),
        (NOTE + 'name = "a\\u0085b"', "name of [[fields]] number 1", "control characters"),
        (ROUTE + ROUTE, 'name of [[fields]] number 2', "number 1 has this name"),
        (NOTE + "bins = [1]", "bins of [[fields]] number 1", 'kind "words" does not take it, only quantity'),
        (KG + "bins = [2, 1]", "bins of [[fields]] number 1 = [2, 1]", "must ascend"),
        (KG + "bins = [1, 1.0]", "bins of [[fields]] number 1 = [1, 1.0]", "must ascend"),
        (KG + "bins = [0.0, -0.0]", "bins of [[fields]] number 1", "must ascend"),
        (KG + "bins = [0, inf]", "bins (item 2) of [[fields]] number 1 = Infinity", "numbers"),
        (KG + 'bins = ["1"]', 'bins (item 1) of [[fields]] number 1 = "1"', "numbers"),
        (KG + 'bins = [1]\nscale = "logarithmic"', "scale of [[fields]] number 1", "leave one"),
        (NOTE + '[message]\nlabel = "note"', "path of [[fields]] number 1", "cannot predict itself"),
        (ROUTE + CROSSES + 'paths = ["route"]', CROSS_1, "2 to 8 texts"),
        (ROUTE + CROSSES + 'paths = ["route", "rote"]', CROSS_1, 'no field is named "rote"'),
        (ROUTE + CROSSES + 'paths = ["route", "route"]', CROSS_1, "twice"),
        (ROUTE + KG + CROSSES + 'paths = ["route", "kg"]', CROSS_1, "`bins`"),
        (NOTE + '[metrics]\nslice_by = "note"', 'metrics.slice_by = "note"', "category fields: none"),
        (SPACE_20 + "[state]\nmax_live = 2_000_000", "state.max_live = 2000000", "1,048,576 addr"),
        ('[state]\nfolder = ""', 'state.folder = ""', "a text"),
        ('[rejects]\naction = "halt"\ntopic = "bad"', 'rejects.topic = "bad"', "keeps no message"),
        ('[scores]\ntopic = "to whom?"', 'scores.topic = "to whom?"', "letters, digits"),
        (TOPIC + 'servers = "h:1"\ntopic = "t"\n[scores]\ntopic = "t"', "scores.topic", "feed.topic too"),
        (TOPIC + 'servers = "h:1"\ntopic = "t"\n[rejects]\ntopic = "t"', "rejects.topic", "feed.topic too"),
        ('[rejects]\ntopic = "t"\n[scores]\ntopic = "t"', "scores.topic", "is rejects.topic too"),
    ],
)  # fmt: skip
def test_what_cannot_work_is_refused_with_reason(write, text, key, why):
    (line,) = refusal(write(text))
    place, told, reason = line.partition(key)
    assert place == "bedload.toml: " and told, line
    assert why in reason


def test_the_same_cross_twice_is_refused(write):
    crosses = CROSSES + 'paths = ["route", "note"]\n[[crosses]]\npaths = ["note", "route"]\n'
    (line,) = refusal(write(ROUTE + NOTE + crosses))
    assert "[[crosses]] number 1 takes the same fields" in line


def test_one_path_may_serve_two_fields_of_different_names(write):
    cut = '[[fields]]\npath = "kg"\nname = "kg cut"\nkind = "quantity"\nbins = [1]\n'
    cross = '[[crosses]]\npaths = ["kg cut", "route"]\n'
    assert len(load(write(KG + cut + ROUTE + cross), environ={}).fields) == 3


def test_a_conflict_shows_where_the_value_at_fault_came_from(write):
    (line,) = refusal(write(TRUNCATED), ["learner.l1=2"])
    assert line.startswith("--set learner.l1: learner.l1 = 2: ")


def test_what_truncated_gradient_ignores_may_stand_at_its_default(write):
    assert (
        load(write(TRUNCATED + "l1 = 0.0\nl2 = 0.0\ndamping = 1.0"), environ={}).learner.l1_per_example
        == 1e-4
    )


JSON_VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5), inner, max_size=3),
    max_leaves=5,
)


@given(st.sampled_from([*KEYS, "fields", "crosses", "learner", "x.y", "learner.l1.x"]), JSON_VALUES)
def test_any_value_anywhere_loads_or_is_refused_in_words(key, value):
    section, _, name = key.partition(".")
    data = {section: {name: value}} if name else {section: value}
    if section in ("fields", "crosses") and name:
        data = {section: [{"path": "p", "kind": "quantity", name: value}]}
    environ = {f"BEDLOAD_{part.upper()}": _inline(inner) for part, inner in data.items()}
    try:
        load(None, (), environ)
    except BadSettings as error:
        assert re.search(r"(must|unknown key|does not take|is missing|set it whole|edges)", str(error))


def _inline(value):
    """A value as TOML would write it, or as near as can be."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(k)} = {_inline(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(_inline, value)) + "]"
    return repr(value) if isinstance(value, float) else json.dumps(value)


def test_settings_import_nothing_heavy():
    heavy = ["numpy", "numba", "msgspec", "zstandard", "typer", "rich"]
    code = f"import sys, stream.settings; print([m for m in {heavy} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


# ---- docs/settings.md --------------------------------------------------------------------------------------


def documented():
    """Cells of the tables of keys, by key: [kinds,] allowed, default, [unit,] example."""
    rows = {}
    for line in DOC.splitlines():
        if found := re.match(r"\| `([a-z]+\.[a-z0-9_]+)` \|(.*)\|$", line):
            assert found[1] not in rows, f"{found[1]} stands in two tables"
            rows[found[1]] = [cell.strip() for cell in found[2].split("|")]
    return rows


def test_every_key_is_documented_and_no_other():
    assert list(documented()) == list(KEYS)


@pytest.mark.parametrize("key", KEYS.values(), ids=KEYS)
def test_the_documented_limits_and_default_are_the_real_ones(key):
    cells = documented()[key.dotted]
    if key.section == "fields":
        assert cells.pop(0) == ", ".join(key.kinds)
    allowed, default = cells[:2]
    assert allowed == key.allowed
    if key.required:
        assert default == "required"
    elif key.dotted == "fields.name":
        assert default == "the path"
    elif key.default is None:
        assert default == "none"
    else:
        expected = list(key.default) if isinstance(key.default, tuple) else key.default
        real = tomllib.loads(f"x = {default.strip('`')}")["x"]
        assert (type(real), real) == (type(expected), expected)


CERTIFICATE = {"tls": True, "cert_file": "c", "key_file": "k"}
PASSWORD_FILE = {"sasl": "PLAIN", "username": "u", "password_file": "p"}
COMPANIONS = {
    "feed.kind": {"servers": "h:1", "topic": "t"},
    **dict.fromkeys(("feed.ca_file", "feed.cert_file", "feed.key_file"), CERTIFICATE),
    **dict.fromkeys(("feed.sasl", "feed.username", "feed.password_file"), PASSWORD_FILE),
    "feed.password_variable": {"sasl": "PLAIN", "username": "u"},
    "outcomes.kind": {"id": "id", "label": "late", "time": "at", "wait": "48h"},
}
"""What a key does not go without, in its section."""
BESIDE = {"outcomes.kind": {"message": {"id": "id", "time": "at"}}}
"""And in others."""


@pytest.mark.parametrize("key", KEYS.values(), ids=KEYS)
def test_the_documented_example_loads_and_is_not_the_default(key):
    example = tomllib.loads(f"x = {documented()[key.dotted][-1].strip('`')}")["x"]
    fields = [{"path": "route", "kind": "category"}, {"path": "hour", "kind": "category"}]
    data = {"fields": fields}
    if key.section == "fields":
        kind = example if key.name == "kind" else key.kinds[-1]
        data["fields"] = [{"path": "p", "kind": kind, key.name: example}]
    elif key.section == "crosses":
        data["crosses"] = [{key.name: example}]
    else:
        data[key.section] = {**COMPANIONS.get(key.dotted, {}), key.name: example}
        data |= BESIDE.get(key.dotted, {})
    Settings.model_validate(data)
    assert example != key.default or key.dotted in ("feed.kind", "learner.method")


def test_every_key_says_what_it_means():
    assert [key.dotted for key in KEYS.values() if len(key.meaning) < 10] == []


def toml_blocks():
    return re.findall(r"```toml\n(.*?)```", DOC, re.DOTALL)


def test_every_toml_example_of_the_docs_loads():
    blocks = toml_blocks()
    assert len(blocks) >= 6
    for block in blocks:
        Settings.model_validate(tomllib.loads(block))


def examples():
    """Settings, message and table of tokens, for each kind and for crosses."""
    pattern = (
        r"```toml\n([^`]*)```\n\n```json\n([^`]*)```\n\n\| token \| value \|\n\|---\|---\|\n((?:\|.*\n)+)"
    )
    return re.findall(pattern, DOC)


def test_each_kind_and_a_cross_have_an_example():
    kinds = [field["kind"] for toml, *_ in examples() for field in tomllib.loads(toml)["fields"]]
    assert set(kinds) == set(FIELD_KINDS)
    assert any("crosses" in tomllib.loads(toml) for toml, *_ in examples())


@pytest.mark.parametrize(("toml", "message", "table"), examples())
def test_the_tokens_of_the_documented_messages_are_right(toml, message, table):
    entries = row(json.loads(message), Settings.model_validate(tomllib.loads(toml)))
    told = re.findall(r"^\| `(.*?)` \| (.*?) \|$", table, re.MULTILINE)
    assert told == [(readable(text), f"{value:g}") for text, _, value in entries]


def test_the_documented_error_lines_are_what_loading_says(write):
    path = write("[learner]\nlearning_rate = -1\n" + NOTE + FIELD.format("a", "text"))
    lines = refusal(path, ["learner.l1_per_exmaple=1"])
    (block,) = re.findall(r"```text\n(.*?)```", DOC, re.DOTALL)
    assert sorted(lines) == sorted(block.splitlines())


def test_the_documented_entry_delays_follow_from_the_formula():
    """messages = S / (q D - g) with q = 0.1 %, D = 2 in log-odds up from 20 %."""
    odds = 0.25 * 2.718281828459045**2
    lift = odds / (1 + odds) - 0.2
    assert "64.9 %" in DOC and round(odds / (1 + odds), 3) == 0.649
    for strength, growth, told in [(1e4, 1e-4, "28.7"), (1e3, 0, "2.2"), (1e2, 0, "0.22")]:
        messages = strength / (0.001 * lift - growth)
        assert round(messages / 1e6, len(told.partition(".")[2])) == float(told)
        assert f"| {told} million |" in DOC


def test_known_keys_of_kinds_are_those_of_the_models():
    for kind, model in FIELD_KINDS.items():
        named = [key.name for key in KEYS.values() if kind in key.kinds]
        assert sorted(named) == sorted(model.model_fields)
    assert len(list(itertools.chain(KEYS))) == len(set(KEYS))


@pytest.mark.parametrize(
    "name",
    [
        "BEDLOAD_TRACEBACK",
        "BEDLOAD_LONG",
        "BEDLOAD_REQUIRE_BROKER",
        "BEDLOAD_REQUIRE_BROWSER",
        "BEDLOAD_REQUIRE_R",
        "BEDLOAD_REQUIRE_SPAMBASE",
    ],
)
def test_switches_in_the_environment_are_no_settings(name):
    assert load(None, environ={name: "1"}) == Settings().placed_in(Path())


# ---- what commands do not do yet ---------------------------------------------------------------------------


@pytest.mark.parametrize("command", ["replay", "work", "tune", "converge"])
def test_no_command_takes_outcomes_that_it_would_not_join(write, tmp_path, command):
    """It would learn nothing, or every message as without an outcome."""
    fields = '[[fields]]\npath = "note"\nkind = "words"\n[feed]\npaths = "handoffs.jsonl"\n'
    settings = load(write(LATE + fields), environ={})
    (tmp_path / "handoffs.jsonl").write_text('{"id": "h1", "at": 0, "note": "dog"}\n', encoding="utf-8")
    started = {
        "replay": lambda: replay(settings, tmp_path / "state"),
        "work": lambda: work(settings, tmp_path / "state"),
        "tune": lambda: tune(settings, tmp_path / "trials", None),
        "converge": lambda: converge(settings, None, about={}),
    }
    with pytest.raises(BadSettings, match=r'outcomes.kind = "log": this version does not join'):
        started[command]()
    assert not (tmp_path / "state").exists()
