"""The tuning report in a real browser: it asks nothing of the network; pictures, slider and budget work."""

import shutil

import pytest

from stream.reports import write_report
from tests import report_documents
from tests.browser import running_or_skip

PICTURES = ["sizes", "paths", "tokens", "course", "calibration", "thresholds", "slices"]
MARKS = ".js-line[d], .point, .point path"
LIGHT, DARK = "rgb(255, 255, 255)", "rgb(20, 23, 27)"


@pytest.fixture(scope="module")
def browser():
    with running_or_skip() as running:
        yield running


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    made = tmp_path_factory.mktemp("report")
    for name in ("tuned", "bare", "empty", "nasty"):
        write_report(getattr(report_documents, name)(), made / f"{name}.html")
    return made


class Opened:
    """A page in a window of its own without a network, and all that it complained of or asked for."""

    def __init__(self, browser, path, width=1280, scheme="light"):
        phone = {"is_mobile": True, "has_touch": True} if width < 500 else {}
        self.window = browser.new_context(
            viewport={"width": width, "height": 900},
            color_scheme=scheme,
            reduced_motion="reduce",
            offline=True,
            **phone,
        )
        self.page = self.window.new_page()
        self.complaints, self.asked = [], []
        self.page.on("console", lambda message: self.complaints.append(message.text))
        self.page.on("pageerror", lambda error: self.complaints.append(str(error)))
        self.page.on("request", lambda request: self.asked.append(request.url))
        self.page.goto(path.as_uri())
        self.page.wait_for_selector("html[data-drawn]", state="attached")

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.window.close()

    def sideways(self):
        """Pixels by which the page is wider than the window."""
        return self.page.evaluate("document.documentElement.scrollWidth - innerWidth")

    def point_at(self, picture, mark):
        """Moves the mouse to the middle of a mark of a picture; the text that comes up."""
        self.page.mouse.move(1, 1)
        place = self.page.evaluate(MIDDLE, [f"#picture-{picture}", mark])
        self.page.mouse.move(place["x"] - 1, place["y"])
        self.page.mouse.move(place["x"], place["y"])
        return self.page.locator(f"#picture-{picture} .hoverlayer .hovertext").first.text_content(
            timeout=15_000
        )

    def line_at(self, picture):
        """Where across its field, from 0 to 1, the dotted line of a picture stands."""
        return self.page.evaluate(LINE, f"#picture-{picture}")

    def line_colour(self):
        return self.page.evaluate(COLOUR)

    def wait_for_line_colour(self, is_it, colour):
        self.page.wait_for_function(
            f"([is, colour]) => (({COLOUR})() === colour) === is", arg=[is_it, colour]
        )

    def slide(self, key):
        self.page.locator("#strength").press(key)
        return int(self.page.input_value("#strength"))


@pytest.fixture(scope="module")
def opened(browser, folder):
    """One wide window that tests share; each puts what it touches into the state that it starts from."""
    with Opened(browser, folder / "tuned.html") as shared:
        yield shared


MIDDLE = """([picture, mark]) => {
  const element = document.querySelector(`${picture} ${mark}`);
  element.scrollIntoView({block: "center", behavior: "instant"});
  if (element.getTotalLength && mark.includes("js-line")) {
    const along = element.getPointAtLength(element.getTotalLength() * 0.6);
    const point = along.matrixTransform(element.getScreenCTM());
    return {x: point.x, y: point.y};
  }
  const box = element.getBoundingClientRect();
  return {x: box.x + box.width / 2, y: box.y + box.height / 2};
}"""
LINE = """(picture) => {
  const field = document.querySelector(`${picture} .nsewdrag`).getBoundingClientRect();
  const line = document.querySelector(`${picture} .shapelayer path`).getBoundingClientRect();
  return (line.x + line.width / 2 - field.x) / field.width;
}"""
COLOUR = "() => getComputedStyle(document.querySelector('#picture-course .js-line')).stroke"
OUTSIDE = """(picture) => {
  const whole = document.querySelector(picture).getBoundingClientRect();
  const texts = [...document.querySelectorAll(`${picture} text`)];
  const out = (box) => box.width && (box.left < whole.left - 1 || box.right > whole.right + 1);
  return texts.filter((text) => out(text.getBoundingClientRect())).map((text) => text.textContent);
}"""


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [390, 1280])
def test_a_report_draws_every_picture_without_a_word_or_the_network(browser, folder, width, scheme):
    with Opened(browser, folder / "tuned.html", width, scheme) as opened:
        assert opened.complaints == []
        assert opened.asked == [(folder / "tuned.html").as_uri()]
        assert opened.sideways() == 0
        for name in PICTURES:
            assert opened.page.locator(f"#picture-{name}").locator(MARKS).count() > 2, name
            assert opened.page.evaluate(OUTSIDE, f"#picture-{name}") == [], "a text is cut off"
        ground = opened.page.evaluate("getComputedStyle(document.body).backgroundColor")
        assert ground == {"light": LIGHT, "dark": DARK}[scheme]


def test_pointing_at_a_mark_tells_its_figures(opened):
    said = {name: opened.point_at(name, ".point") for name in ("sizes", "tokens")}
    said |= {name: opened.point_at(name, ".js-line") for name in ("paths", "course", "thresholds")}
    said["calibration"] = opened.point_at("calibration", ".bars .point path")
    said["slices"] = opened.point_at("slices", ".points .point")
    assert opened.complaints == []
    assert "learning rate 0." in said["sizes"] and "to the lowest" in said["sizes"]
    assert "route=R" in said["paths"] and "at strength" in said["paths"]
    assert "of messages" in said["tokens"] and "of blocks" in said["tokens"]
    assert "choice" in said["course"] and "log loss 0." in said["course"]
    assert "predicted" in said["calibration"] and "observed" in said["calibration"]
    assert "precision" in said["thresholds"] and "recall" in said["thresholds"]
    assert "normalised entropy" in said["slices"]


def test_the_slider_shows_the_model_at_each_strength(opened):
    document = report_documents.tuned()
    page = opened.page
    page.fill("#strength", str(document["models"].index(chosen_model(document))))
    start, listed = opened.line_at("paths"), page.inner_text("#model")
    assert "(the choice)" in page.inner_text("#model-said")
    assert opened.slide("Home") == 0
    assert opened.line_at("paths") < 0.1
    assert page.locator("#model tbody tr").count() == 0
    assert "0 weights" in page.inner_text("#model-said")
    assert page.get_attribute("#strength", "aria-valuetext") == "0.03, 0 weights"
    assert opened.slide("End") == 31
    assert opened.line_at("paths") > 0.9 > start
    weakest = document["models"][-1]
    assert f"{weakest['nnz']:,} weights" in page.inner_text("#model-said")
    rows = page.locator("#model-yes tbody tr").all_inner_texts()
    assert len(rows) == len(weakest["towards_yes"])
    assert weakest["towards_yes"][0]["token"] in rows[0]
    for _ in range(31 - document["models"].index(chosen_model(document))):
        opened.slide("ArrowLeft")
    assert page.inner_text("#model") == listed
    assert opened.line_at("paths") == pytest.approx(start, abs=0.002)
    assert opened.complaints == []


def chosen_model(document):
    (found,) = [model for model in document["models"] if model["index"] == document["choice"]["index"]]
    return found


def press_along_the_paths(opened, press):
    field = opened.page.locator("#picture-paths .nsewdrag")
    field.scroll_into_view_if_needed()
    box = field.bounding_box()
    for share, low, high in ((0.1, 0, 5), (0.9, 26, 31), (0.5, 13, 18)):
        press(box["x"] + share * box["width"], box["y"] + 0.55 * box["height"])
        opened.page.wait_for_function(
            "([low, high]) => { const at = Number(document.getElementById('strength').value);"
            " return low <= at && at <= high; }",
            arg=[low, high],
        )
        assert opened.line_at("paths") == pytest.approx(share, abs=0.03)
    assert opened.complaints == []


def test_a_click_in_the_paths_shows_the_model_there(opened):
    press_along_the_paths(opened, opened.page.mouse.click)


def test_a_tap_in_the_paths_shows_the_model_there(browser, folder):
    with Opened(browser, folder / "tuned.html", 390) as opened:
        press_along_the_paths(opened, opened.page.touchscreen.tap)


def test_a_budget_of_alerts_is_answered_with_a_threshold(opened):
    rows = report_documents.tuned()["thresholds"]["rows"]
    page = opened.page
    page.fill("#budget", "1000")
    fits = [row for row in rows if row["flagged"] * 20_000 <= 1000][-1]
    said = page.inner_text("#budget-said")
    assert f"Threshold {fits['threshold']:.3f}: about {round(fits['flagged'] * 20_000)} alerts a day" in said
    assert f"{100 * fits['precision']:.1f} % of the alerts are right" in said
    assert f"find {100 * fits['recall']:.1f} % of all yes answers" in said
    assert opened.line_at("thresholds") == pytest.approx(
        fits["threshold"] / (rows[0]["threshold"] * 1.02), abs=0.01
    )
    page.fill("#budget", "1")
    assert page.inner_text("#budget-said").startswith("Too few for any threshold listed")
    page.fill("#budget", "20000000")
    assert f"Threshold {rows[-1]['threshold']:.3f}" in page.inner_text("#budget-said")
    page.fill("#budget", "")
    assert page.inner_text("#budget-said") == "Give a number, zero or more."
    assert opened.complaints == []


def test_without_messages_a_day_the_budget_is_a_share(browser, folder):
    rows = report_documents.bare()["thresholds"]["rows"]
    with Opened(browser, folder / "bare.html") as opened:
        opened.page.fill("#budget", "5")
        fits = [row for row in rows if row["flagged"] <= 0.05][-1]
        said = opened.page.inner_text("#budget-said")
        assert f"Threshold {fits['threshold']:.3f}: {100 * fits['flagged']:.2f} % of the messages" in said
        opened.page.fill("#budget", f"{100 * rows[0]['flagged']}")
        assert "unknown of the alerts are right" in opened.page.inner_text("#budget-said")
        assert opened.complaints == []


def test_the_part_near_the_lowest_loss_can_be_looked_at_and_left(opened):
    def ticks(page):
        return [float(text) for text in page.locator("#picture-sizes .ytick text").all_text_contents()]

    before = ticks(opened.page)
    opened.page.get_by_role("button", name="Near the lowest loss").click()
    near = ticks(opened.page)
    assert max(near) < max(before) - 0.03
    assert opened.page.locator("#picture-sizes .errorbar").count() > 10
    opened.page.get_by_role("button", name="All models").click()
    assert ticks(opened.page) == before
    assert opened.complaints == []


def test_pictures_follow_the_screen_and_are_dark_on_light_on_paper(browser, folder):
    with Opened(browser, folder / "tuned.html", scheme="dark") as opened:
        page, dark = opened.page, opened.line_colour()
        opened.slide("Home")
        moved = opened.line_at("paths")
        page.emulate_media(color_scheme="light")
        opened.wait_for_line_colour(False, dark)
        light = opened.line_colour()
        assert opened.line_at("paths") == pytest.approx(moved, abs=0.002), "the strength looked at is kept"
        page.emulate_media(color_scheme="dark")
        opened.wait_for_line_colour(True, dark)
        page.evaluate(f"window.seen = []; addEventListener('beforeprint', () => seen.push(({COLOUR})()))")
        assert page.pdf(format="A4").startswith(b"%PDF")
        assert page.evaluate("seen") == [light]
        assert opened.line_colour() == dark, "after printing the screen is as it was"
        assert opened.complaints == []


@pytest.mark.parametrize("width", [390, 1280])
def test_a_feed_that_writes_markup_into_its_tokens_runs_nothing(browser, folder, width):
    with Opened(browser, folder / "nasty.html", width) as opened:
        page = opened.page
        opened.slide("End")
        assert report_documents.NASTY[1] in page.inner_text("#model")
        names = page.locator("#picture-paths .annotation-text").all_text_contents()
        assert any(name.startswith("<img src") for name in names)
        if width == 1280:
            assert opened.point_at("paths", ".js-line").startswith("note=" + report_documents.NASTY[0])
        assert page.evaluate("window.hurt") is None
        assert page.locator("img, #model script, .picture a[*|href]").count() == 0
        assert opened.sideways() == 0
        assert opened.complaints == []
        assert opened.asked == [(folder / "nasty.html").as_uri()]


@pytest.mark.parametrize("name", ["bare", "empty"])
def test_a_report_with_parts_missing_has_no_complaints(browser, folder, name):
    with Opened(browser, folder / f"{name}.html", 390) as opened:
        assert opened.complaints == []
        assert opened.sideways() == 0
        assert opened.page.locator(".picture:empty").count() == 0


def test_without_a_browser_tests_are_skipped_aloud_and_fail_where_one_is_required(monkeypatch):
    monkeypatch.setattr(shutil, "which", lambda name: None)
    monkeypatch.setenv("BEDLOAD_REQUIRE_BROWSER", "0")
    with pytest.raises(pytest.skip.Exception, match=r"NOT TESTED.*no chromium.*apt-get"), running_or_skip():
        pass
    monkeypatch.setenv("BEDLOAD_REQUIRE_BROWSER", "1")
    with (
        pytest.raises(pytest.fail.Exception, match=r"BEDLOAD_REQUIRE_BROWSER=1.*no chromium"),
        running_or_skip(),
    ):
        pass
