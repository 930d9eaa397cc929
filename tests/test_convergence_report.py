"""The report of `converge`: what stands in it, that it asks nothing of the network, and how it is drawn."""

import json
import re

import pytest

from stream.reports import convergence_page, write_convergence
from tests import convergence_documents
from tests.browser import running_or_skip
from tests.test_report import Elements
from tests.test_report_browser import Opened

DOCUMENTS = {name: getattr(convergence_documents, name)() for name in convergence_documents.__all__}
PAGES = {name: convergence_page(document) for name, document in DOCUMENTS.items()}
READ = {name: Elements(text) for name, text in PAGES.items()}
PICTURES = {"whole": 12, "bare": 3, "nasty": 3, "single": 5}


@pytest.fixture(scope="module")
def browser():
    with running_or_skip() as running:
        yield running


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    made = tmp_path_factory.mktemp("report")
    for name, document in DOCUMENTS.items():
        write_convergence(document, made / f"{name}.html")
    return made


@pytest.mark.parametrize("name", DOCUMENTS)
def test_a_page_refers_to_nothing_outside_itself(name):
    for tag, attributes in READ[name].elements:
        assert tag not in ("img", "iframe", "object", "embed", "base", "form")
        assert "src" not in attributes
        assert attributes.get("href", "#").startswith(("#", "data:,"))
    (policy,) = [a["content"] for t, a in READ[name].elements if t == "meta" and "http-equiv" in a]
    assert policy.startswith("default-src 'none'; script-src 'sha256-")


@pytest.mark.parametrize("name", DOCUMENTS)
def test_a_page_has_a_way_to_each_part_and_a_figure_for_each_picture(name):
    ids = [a["id"] for _, a in READ[name].elements if "id" in a]
    assert len(ids) == len(set(ids))
    parts = [part for part in READ[name].texts if part]
    assert [a["href"] for t, a in READ[name].elements if t == "a"] == [f"#{part}" for part in parts]
    assert ("excess" in parts, "windows" in parts) == (DOCUMENTS[name]["has_truth"], name == "whole")
    figures = json.loads(READ[name].scripts[0])["figures"]
    drawn = [i.removeprefix("picture-") for i in ids if i.startswith("picture-")]
    assert sorted(drawn) == sorted(figures)
    assert len(drawn) == PICTURES[name]


@pytest.mark.parametrize("name", DOCUMENTS)
def test_the_same_document_gives_the_same_bytes(name):
    assert convergence_page(json.loads(json.dumps(DOCUMENTS[name]))) == PAGES[name]


def test_the_end_says_gap_support_and_what_is_proved():
    said = re.sub(r"\s+", " ", READ["whole"].texts["end"])
    assert "After 30,000 messages" in said
    assert "≤ 0.00 %" in said and "+0.40 %" in said and "0.847" in said
    assert "−0.80 ± 0.00" in READ["whole"].texts["gaps"]


def test_figures_that_a_log_of_ones_own_has_not_have_no_column():
    titles = {name: re.findall(r"<th[^>]*>([^<]*)", PAGES[name].split('id="figures"')[1]) for name in PAGES}
    assert "truth F1" in titles["whole"] and "excess" in titles["whole"]
    assert "batch F1" in titles["bare"]
    assert not {"truth P", "truth R", "truth F1", "excess"} & set(titles["bare"])


def test_fitted_lines_are_spoken_of_where_there_are_some():
    assert "dotted" in READ["whole"].texts["gaps"]
    assert "dotted" not in READ["single"].texts["gaps"]
    assert "dotted" not in READ["whole"].texts["seconds"]


def test_a_batch_fit_that_is_loosely_proved_is_warned_of():
    assert "may be up to" not in PAGES["bare"]
    loose = convergence_documents.bare()
    loose["fits"][1]["batch"] |= {"proved_gap": 0.4003, "loose": True}
    said = Elements(convergence_page(loose)).texts["end"]
    assert "batch fit of 3,000 messages may be up to 40.03 %" in said


def test_a_fitted_line_goes_through_a_curve_that_is_a_power():
    figure = json.loads(READ["whole"].scripts[0])["figures"]["gaps-0"]
    line, curve = figure["data"][0], figure["data"][4]
    assert (line["line"]["dash"], curve["name"]) == ("dot", "ftrl, one pass")
    assert line["x"] == [curve["x"][0], curve["x"][-1]]
    assert line["y"] == pytest.approx([curve["y"][0], curve["y"][-1]])
    assert figure["layout"]["xaxis"]["type"] == figure["layout"]["yaxis"]["type"] == "log"


@pytest.mark.parametrize(("width", "scheme"), [(390, "dark"), (1280, "light")])
def test_every_picture_is_drawn_without_a_word_or_the_network(browser, folder, width, scheme):
    with Opened(browser, folder / "whole.html", width, scheme) as opened:
        page = opened.page
        assert page.locator(".picture .main-svg").count() >= PICTURES["whole"]
        assert page.locator("#picture-gaps-0 .js-line").count() == 8  # and fitted lines
        assert opened.sideways() == 0
        assert opened.complaints == []
        assert opened.asked == [(folder / "whole.html").as_uri()]
        if width == 1280:
            hidden = "e => [e.scrollWidth - e.clientWidth, e.scrollHeight - e.clientHeight]"
            for part in page.locator("#figures .scroll").all():
                assert part.evaluate(hidden) == [0, 0], "every figure is in sight"
            assert re.search(r"messages.*%", opened.point_at("gaps-0", ".point"))


@pytest.mark.parametrize("name", ["single", "nasty"])
def test_a_report_with_parts_missing_or_markup_in_names_has_no_complaints(browser, folder, name):
    with Opened(browser, folder / f"{name}.html", 390) as opened:
        assert opened.complaints == []
        assert opened.sideways() == 0
        assert opened.page.evaluate("window.hurt") is None
        assert opened.page.locator(".picture:empty, img").count() == 0
