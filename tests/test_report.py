"""The tuning report as a file: what stands in it, and that no feed can break it. No browser here."""

import copy
import csv
import hashlib
import json
import re
import stat
import subprocess
import sys
from html.parser import HTMLParser
from pathlib import Path

import pytest

from stream.errors import InputMissing
from stream.reports import page, write_report, write_tables
from stream.reports.drawing import LogPlaces
from stream.reports.texts import difference, named, odds, percent, plain, shortened, size, visible
from tests import report_documents
from tests.report_documents import NASTY

ROOT = Path(__file__).parent.parent
DOCUMENTS = {name: getattr(report_documents, name)() for name in ("tuned", "bare", "empty", "nasty")}
PAGES = {name: page(document) for name, document in DOCUMENTS.items()}
STYLE = (ROOT / "stream/reports/page.css").read_text()
SECTIONS = ["choice", "sizes", "paths", "tokens", "course", "calibration", "thresholds", "slices"]


class Elements(HTMLParser):
    """Every element of a page with its attributes, the texts of its sections, and its scripts."""

    def __init__(self, text):
        super().__init__()
        self.elements, self.scripts, self.texts = [], [], {"": ""}
        self._section, self._inside = "", ""
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))
        self._inside = tag
        if tag == "section":
            self._section = dict(attrs)["id"]
            self.texts[self._section] = ""
        elif tag == "script":
            self.scripts.append("")

    def handle_endtag(self, tag):
        self._inside = ""
        if tag == "section":
            self._section = ""

    def handle_data(self, data):
        if self._inside == "script":
            self.scripts[-1] += data
        elif self._inside != "style":
            self.texts[self._section] += data


READ = {name: Elements(text) for name, text in PAGES.items()}


def carried(name):
    """The JSON that the page's script draws from."""
    return json.loads(READ[name].scripts[0])


def text_of(name, section):
    return re.sub(r"\s+", " ", READ[name].texts[section])


@pytest.mark.parametrize("name", DOCUMENTS)
def test_a_page_refers_to_nothing_outside_itself(name):
    for tag, attributes in READ[name].elements:
        assert tag not in ("img", "iframe", "object", "embed", "base", "form")
        assert "src" not in attributes
        assert attributes.get("href", "#").startswith(("#", "data:,"))
    assert "@import" not in STYLE and "url(" not in STYLE
    (policy,) = [a["content"] for t, a in READ[name].elements if t == "meta" and "http-equiv" in a]
    assert policy.startswith("default-src 'none'; script-src 'sha256-")
    assert "http" not in policy and "unsafe-eval" not in policy


@pytest.mark.parametrize("name", DOCUMENTS)
def test_a_page_has_every_part_and_ways_to_them(name):
    ids = [a["id"] for _, a in READ[name].elements if "id" in a]
    assert len(ids) == len(set(ids))
    truth = ["planted"] if DOCUMENTS[name]["truth"] else []
    parts = [*SECTIONS, *truth, "making"]
    assert [i for i in READ[name].texts if i] == parts
    assert [a["href"] for t, a in READ[name].elements if t == "a"] == [f"#{part}" for part in parts]


@pytest.mark.parametrize("name", DOCUMENTS)
def test_the_same_document_gives_the_same_bytes(name, tmp_path):
    again = json.loads(json.dumps(DOCUMENTS[name], sort_keys=False))
    assert page(again) == PAGES[name]


def test_another_process_gives_the_same_bytes(tmp_path):
    (tmp_path / "tuning.json").write_text(json.dumps(DOCUMENTS["tuned"]))
    lines = (
        "import json, sys; from pathlib import Path; from stream.reports import write_report\n"
        "write_report(json.loads(Path(sys.argv[1]).read_text()), Path(sys.argv[2]))"
    )
    told = [sys.executable, "-c", lines, "tuning.json", "report.html"]
    environment = {"PYTHONHASHSEED": "7", "PYTHONPATH": str(ROOT), "LANG": "C"}
    subprocess.run(told, cwd=tmp_path, check=True, env=environment)
    written = (tmp_path / "report.html").read_bytes()
    assert hashlib.sha256(written).digest() == hashlib.sha256(PAGES["tuned"].encode()).digest()


def test_writing_leaves_one_file_for_its_owner_alone(tmp_path):
    write_report(DOCUMENTS["nasty"], tmp_path / "report.html")
    assert [p.name for p in tmp_path.iterdir()] == ["report.html"]
    assert stat.S_IMODE((tmp_path / "report.html").stat().st_mode) == 0o600
    with pytest.raises(InputMissing):
        write_report(DOCUMENTS["bare"], tmp_path / "nowhere" / "report.html")


def test_markup_in_a_feed_stays_text():
    found = READ["nasty"]
    assert len(found.scripts) == 3 == PAGES["nasty"].count("</script>")
    assert not any(name.startswith("on") for _, attributes in found.elements for name in attributes)
    for text in NASTY[:3]:
        assert text in found.texts["choice"]
        assert text in found.texts["tokens"]
        assert text in found.texts["making"]
    assert '["</script>' in found.texts["making"]


@pytest.mark.parametrize("name", DOCUMENTS)
def test_a_page_holds_no_character_that_hides_or_reorders_text(name):
    own = PAGES[name].replace(READ[name].scripts[1], "").replace("\n", "")
    assert {c for c in own if not c.isprintable()} == set()
    assert "\ufffd" not in own


def test_texts_in_pictures_are_no_markup_references_or_formulas_to_the_plotting_library():
    texts = json.dumps(carried("nasty")["figures"])
    assert "<img" not in texts and "<script" not in texts and "<a " not in texts
    assert "&lt;img" in texts and "&amp;lt;" in texts
    assert "$" not in texts and "&#36;" in texts
    assert "&quot;" not in texts, "the plotting library would show it as it stands"


def test_long_tokens_are_shortened_on_the_page_and_whole_when_pointed_at():
    long = "x" * 300
    assert long not in READ["nasty"].texts["tokens"]
    assert any(a.get("title") == long for _, a in READ["nasty"].elements)


def test_figures_are_valid_by_the_plotting_librarys_own_account():
    from plotly.graph_objects import Figure

    for name in DOCUMENTS:
        for figure in carried(name)["figures"].values():
            black = json.loads(re.sub(r'"--[a-z0-9-]+"', '"#000000"', json.dumps(figure)))
            black["layout"]["width"] = 700
            Figure(data=black["data"], layout=black["layout"])


def test_every_colour_of_a_figure_is_one_of_the_page():
    wanted = set(re.findall(r'"color":\s*"(--[a-z0-9-]+)"', json.dumps(carried("tuned")["figures"])))
    light, dark = palettes()
    assert wanted and wanted <= set(light)
    assert set(light) == set(dark)


def palettes():
    root = re.compile(r":root(?::not\(\.paper\))? \{(.*?)\}", re.DOTALL)
    found = [dict(re.findall(r"(--[a-z0-9-]+): (#[0-9a-f]{6});", block)) for block in root.findall(STYLE)]
    assert len(found) == 2
    return found


def contrast(one, other):
    def luminance(colour):
        parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
        linear = [p / 12.92 if p <= 0.03928 else ((p + 0.055) / 1.055) ** 2.4 for p in parts]
        return sum(w * p for w, p in zip((0.2126, 0.7152, 0.0722), linear, strict=True))

    high, low = sorted((luminance(one), luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("palette", palettes(), ids=["light", "dark"])
def test_texts_and_lines_stand_out_as_wcag_wants(palette):
    """Contrast by WCAG 2.2: 4.5 for text (1.4.3), 3 for what a picture is read by (1.4.11)."""
    for text in ("--ink", "--muted", "--accent", "--yes", "--no"):
        for ground in ("--page", "--panel", "--raised"):
            assert contrast(palette[text], palette[ground]) >= 4.5, (text, ground)
    assert contrast(palette["--ink"], palette["--warn"]) >= 4.5
    for line in (*(f"--series-{i}" for i in range(1, 7)), "--axis"):
        assert contrast(palette[line], palette["--page"]) >= 3, line


def test_the_choice_says_its_figures_reason_price_and_settings():
    said = text_of("tuned", "choice")
    document = DOCUMENTS["tuned"]
    chosen = document["candidates"][document["choice"]["index"]]
    assert "fewest weights within one standard error of the lowest log loss" in said
    assert f"l1_per_example = {plain(chosen['l1_per_example'])}" in said
    assert f"l1_per_example = {chosen['l1_per_example']!r}" in said
    for line in document["choice"]["said"]:
        assert line in said
    assert f"Half the weights ({document['choice']['halved']['nnz']:,} instead of {chosen['nnz']:,})" in said


def test_warnings_come_before_the_choice():
    text = PAGES["tuned"]
    warned = text.index("The weakest strength still improves")
    assert text.index('class="warnings"') < warned < text.index('id="choice"')
    assert 'class="warnings"' not in PAGES["bare"]


def test_loss_against_size_has_a_trace_for_each_rate_with_paired_errors_and_names_the_choice():
    document, figure = DOCUMENTS["tuned"], carried("tuned")["figures"]["sizes"]
    lines = [trace for trace in figure["data"] if "error_y" in trace]
    assert len(lines) == 3 and all(len(trace["x"]) == 32 for trace in lines)
    drawn = sorted(e for trace in lines for e in trace["error_y"]["array"])
    assert drawn == sorted(c["log_loss_se"] for c in document["candidates"])
    chosen = document["candidates"][document["choice"]["index"]]
    (label,) = figure["layout"]["annotations"]
    assert label["text"] == f"<b>choice</b><br>{chosen['nnz']:,} weights"
    assert 10 ** label["x"] == pytest.approx(chosen["nnz"]) and label["y"] == chosen["log_loss"]
    rings = {(trace["x"][0], trace["y"][0]) for trace in figure["data"] if trace["mode"] == "markers"}
    marked = [document["choice"][name] for name in ("index", "best", "runner_up")]
    assert rings >= {
        (document["candidates"][i]["nnz"], document["candidates"][i]["log_loss"]) for i in marked
    }


def test_a_runner_up_that_has_half_the_weights_is_drawn_over_time_as_that():
    document = copy.deepcopy(DOCUMENTS["tuned"])
    document["choice"]["runner_up"] = document["choice"]["halved"]["index"]
    carries = json.loads(re.search(r'id="report">(.*?)</script>', page(document), re.S)[1])
    names = [trace["name"] for trace in carries["figures"]["course"]["data"]]
    assert "half the weights" in names and not any("runner-up" in name for name in names)


def test_a_model_without_weights_stands_apart_on_the_log_axis():
    places = LogPlaces([0, 10, 1000])
    ticks = dict(zip(places.axis("")["ticktext"], places.axis("")["tickvals"], strict=True))
    assert 0 < places.of(0) < 10
    assert ticks["0"] == places.of(0)
    assert ticks["100"] == 100
    assert not LogPlaces([10, 1000]).has_zero


@pytest.mark.parametrize("values", [[], [0], [0, 0], [5], [0.02, 0.03], [1e-9, 1e9], [3e-7, 0]])
def test_a_log_axis_has_ticks_within_its_range_whatever_the_values(values):
    axis = LogPlaces(values).axis("")
    low, high = axis["range"]
    assert low < high
    assert len(axis["tickvals"]) == len(set(axis["ticktext"])) <= 14
    assert all(10**low <= tick <= 10**high for tick in axis["tickvals"])


def test_weight_paths_name_the_strongest_and_leave_out_where_they_rest_on_zero():
    figure = carried("tuned")["figures"]["paths"]
    assert len(figure["data"]) == 40
    first = figure["data"][0]
    token = DOCUMENTS["tuned"]["paths"]["tokens"][0]
    assert first["meta"][0] == f"{token['field']}={token['token']}"
    entered = next(i for i, w in enumerate(token["weights"]) if w)
    assert first["y"][entered:] == token["weights"][entered:]
    assert first["y"][: entered - 1] == [None] * (entered - 1)
    assert first["y"][entered - 1] == 0.0
    places = [label["y"] for label in figure["layout"]["annotations"]]
    assert len(places) == 14 and places == sorted(places, reverse=True)


def test_every_strength_has_its_list_of_tokens_and_the_slider_starts_at_the_choice():
    models = carried("tuned")["models"]
    assert len(models["steps"]) == len(models["tables"]) == 32
    at = models["chosen"]
    assert DOCUMENTS["tuned"]["models"][at]["index"] == DOCUMENTS["tuned"]["choice"]["index"]
    assert "(the choice)" in models["steps"][at]["said"]
    assert sum("(the choice)" in step["said"] for step in models["steps"]) == 1
    (slider,) = [a for t, a in READ["tuned"].elements if t == "input" and a["id"] == "strength"]
    assert slider["value"] == str(at) and slider["max"] == "31"
    assert models["tables"][at] in PAGES["tuned"]


def test_the_course_draws_each_candidate_once_and_what_it_loses_more_than_the_choice():
    document, figure = DOCUMENTS["bare"], carried("bare")["figures"]["course"]
    above = [trace for trace in figure["data"] if trace["yaxis"] == "y"]
    below = [trace for trace in figure["data"] if trace["yaxis"] == "y2"]
    assert [trace["name"] for trace in above] == ["choice, lowest loss", "strongest", "weakest"]
    assert [trace["name"] for trace in below] == ["strongest", "weakest"]
    chosen = document["candidates"][document["choice"]["index"]]["block_log_loss"]
    strongest = document["candidates"][0]["block_log_loss"]
    gaps = [s - c for s, c in zip(strongest[2:], chosen[2:], strict=True)]
    assert below[0]["y"][:2] == [None, None]
    assert below[0]["y"][-1] == pytest.approx(sum(gaps) / len(gaps))


def test_the_table_of_tokens_tells_field_weight_odds_share_and_how_steady():
    token = DOCUMENTS["tuned"]["strongest"]["towards_yes"][0]
    said = text_of("tuned", "tokens")
    assert f"{token['field']} {token['token']}" in said
    assert f"{token['weight']:+.3f}{odds(token['weight'])}{percent(token['share'])}" in said
    assert percent(token["kept"]) in said
    assert "associations in this log, not causes" in said
    assert "personal data" in said


def test_slices_say_how_much_better_than_their_base_rate():
    row = max(DOCUMENTS["tuned"]["slices"]["rows"], key=lambda r: r["messages"])
    figure = carried("tuned")["figures"]["slices"]
    assert figure["layout"]["yaxis"]["ticktext"][0] == row["slice"]
    assert figure["data"][1]["x"][0] == pytest.approx(row["log_loss"] / row["normalised_entropy"])
    assert "The 30 largest of 36 slices are drawn" in text_of("tuned", "slices")


def test_the_making_has_all_that_is_needed_to_make_it_again():
    said = text_of("tuned", "making")
    document = DOCUMENTS["tuned"]
    for text in (document["command"], document["log"]["digest"], "bedload 0.1.0", "fields[2].kind", '"ftrl"'):
        assert text in said
    for text in ("200,000", "198,000 with an outcome", "12 rejected", "second pass: 96 models side by side"):
        assert text in said


def test_what_is_missing_is_said_and_not_drawn():
    assert "the messages carry none" in text_of("bare", "making")
    assert "Set metrics.slice_by" in text_of("bare", "slices")
    assert "alerts a day" not in text_of("bare", "thresholds")
    assert "% of the messages (the log does not say" in text_of("bare", "thresholds")
    assert "slices" not in carried("bare")["figures"]
    assert "Calibration ratio" not in text_of("bare", "calibration")
    assert "Half the weights" not in text_of("bare", "choice")
    for part in ("paths", "tokens"):
        assert "only its intercept" in text_of("empty", part)
    assert "No labelled message was scored in a slice by route" in text_of("empty", "slices")
    assert set(carried("empty")["figures"]) == {"sizes", "course"}


def test_an_undefined_log_loss_everywhere_draws_no_curve():
    document = copy.deepcopy(DOCUMENTS["empty"])
    for candidate in document["candidates"]:
        candidate |= {"log_loss": None, "difference": None, "log_loss_se": None}
        candidate["block_log_loss"] = [None] * len(candidate["block_log_loss"])
    assert "No candidate has a log loss" in page(document)


def test_strengths_in_the_other_unit_are_named_so():
    document = copy.deepcopy(DOCUMENTS["bare"])
    document["grid"]["unit"] = "l1"
    for candidate in document["candidates"]:
        candidate |= {"l1": candidate["l1_per_example"] * 1e4, "l1_per_example": 0.0}
    text = page(document)
    chosen = document["candidates"][document["choice"]["index"]]
    assert f"l1 = {chosen['l1']!r}" in text and "l1, weaker" in text


def test_numbers_that_are_not_finite_are_refused():
    document = copy.deepcopy(DOCUMENTS["bare"])
    document["candidates"][2]["log_loss"] = float("nan")
    with pytest.raises(ValueError, match="JSON"):
        page(document)


def test_the_forward_test_has_a_column_where_there_was_one():
    document = copy.deepcopy(DOCUMENTS["bare"])
    assert "forward" not in text_of("bare", "sizes")
    document["candidates"][0]["forward_log_loss"] = 0.51234
    assert '<td class="number">0.5123</td>' in page(document)


def test_tables_for_other_programs_hold_every_digit(tmp_path):
    document = DOCUMENTS["tuned"]
    write_tables(document, tmp_path)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["candidates.csv", "paths.csv"]
    rows = read_csv(tmp_path / "candidates.csv")
    assert [float(row["log_loss"]) for row in rows] == [c["log_loss"] for c in document["candidates"]]
    assert [row["forward_log_loss"] for row in rows] == [""] * len(rows)
    assert [int(row["index"]) for row in rows if row["chosen"] == "1"] == [document["choice"]["index"]]
    rows = read_csv(tmp_path / "paths.csv")
    weights = [weight for token in document["paths"]["tokens"] for weight in token["weights"]]
    assert [float(row["weight"]) for row in rows] == weights
    assert rows[0]["token"] == document["paths"]["tokens"][0]["token"]


def test_tables_for_other_programs_hold_any_token_whole(tmp_path):
    write_tables(DOCUMENTS["nasty"], tmp_path)
    rows = read_csv(tmp_path / "paths.csv")
    assert {row["token"] for row in rows} >= {text for text in NASTY if "\ud800" not in text}


def read_csv(path):
    with path.open(encoding="utf-8", newline="") as lines:
        return list(csv.DictReader(lines))


@pytest.mark.parametrize(
    ("made", "said"),
    [
        (plain(0.0), "0"),
        (plain(3.2e-5), "3.2e-5"),
        (plain(0.000321), "0.000321"),
        (percent(0.0), "0 %"),
        (percent(0.00012), "0.0120 %"),
        (percent(0.5), "50.0 %"),
        (percent(1.0), "100 %"),
        (percent(None), "–"),
        (odds(0.0), "×1.00"),
        (odds(-9.0), "×0.00012"),
        (odds(20.0), "×485,165,195"),
        (difference(0.0, 0.0), "0"),
        (difference(-0.0012, 0.0003), "−0.00120 ± 0.00030"),
        (size(999), "999 bytes"),
        (size(15_700), "15.7 kB"),
        (shortened("abcdefghij", 7), "abcd…ij"),
        (visible("a\u202eb\u200dc\x00\ud800"), "a\\u{202e}b\u200dc\\u{0}\\u{d800}"),
        (named({"field": "weight_kg", "token": ""}), "weight_kg"),
        (named({"field": "", "token": ""}), "(name not known)"),
    ],
)
def test_numbers_and_names_as_people_read_them(made, said):
    assert made == said


def test_nothing_of_the_plotting_library_is_imported_before_a_report_is_drawn():
    told = "import sys, stream.cli.main, stream.reports; sys.exit('plotly' in sys.modules)"
    subprocess.run([sys.executable, "-c", told], check=True, cwd=ROOT)
