"""The report in a real headless browser: quiet, linked, by keyboard, on a phone, on paper, accessible."""

from __future__ import annotations

import io
import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pypdfium2
import pytest

from floorswing.files import read_measurement
from floorswing.report.making import write_report
from floorswing.report.overlay import annotate
from vision.records import Event

from .report_data import HOSTILE, RIGHT_TO_LEFT, SIZE_PX, commands, write_folder

sync_api = pytest.importorskip("playwright.sync_api", reason="playwright is not installed: pip install -e '.[test]'")

ARGUMENTS = ["--no-sandbox", "--disable-gpu", "--disable-background-networking", "--disable-component-update"]
NAMES = ("chromium", "chromium-browser", "google-chrome-stable", "google-chrome", "chrome")
KEY = "A1-11"


def installed_browser(own: str) -> str | None:
    """Return the path of a Chromium: playwright's own if it was downloaded, else the system's."""
    if Path(own).exists():
        return own
    return next((path for name in NAMES if (path := shutil.which(name))), None)


@pytest.fixture(scope="session")
def browser() -> Iterator[Any]:
    with sync_api.sync_playwright() as playwright:
        path = installed_browser(playwright.chromium.executable_path)
        if path is None:
            why = "no Chromium here; `python -m playwright install chromium` or the system's package brings one"
            if os.environ.get("FLOORSWING_BROWSER") == "required":
                pytest.fail(why)
            pytest.skip(why)
        launched = playwright.chromium.launch(executable_path=path, args=ARGUMENTS)
        yield launched
        launched.close()


@pytest.fixture(scope="session")
def report_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the page of a trial with all that can be wrong, hostile names included."""
    base = tmp_path_factory.mktemp("browser")
    folder = write_folder(
        base,
        "cork",
        commands(16),
        robot=HOSTILE,
        surface=RIGHT_TO_LEFT + " very long" * 50,
        flags={5: ("gap",)},
        stray_deg={11: 6.0},
        events=(Event(start_s=3.0, end_s=3.4, kind="handled", detail="</td><script>alert(1)</script>"),),
        warnings=("<img src=x onerror=alert(1)>",),
        factors={"note": "<b>bold</b>"},
    )
    return write_report(folder, base / "report.html").path


@pytest.fixture(scope="session")
def comparison_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the page of two surfaces, without pictures of the clips."""
    base = tmp_path_factory.mktemp("browser-two")
    folders = [
        write_folder(base / "1", "cork", commands(8), clip=False),
        write_folder(base / "2", "lino", commands(8), surface="lino", seed=9, clip=False),
    ]
    return write_report(folders, base / "report.html").path


class Visit:
    """A page with what it said and asked for."""

    def __init__(self, browser: Any, path: Path, **screen: Any) -> None:
        self.page = browser.new_page(**screen)
        self.said: list[str] = []
        self.asked: list[str] = []
        self.page.on("console", lambda message: self.said.append(f"{message.type}: {message.text}"))
        self.page.on("pageerror", lambda error: self.said.append(f"error: {error}"))
        self.page.on("dialog", lambda dialog: (self.said.append(f"dialog: {dialog.message}"), dialog.dismiss()))
        self.page.on("request", lambda request: self.asked.append(request.url))
        self.page.goto(path.as_uri())
        self.path = path

    def chosen(self, selector: str) -> list[str]:
        """Return the keys of the chosen things that match."""
        found = self.page.eval_on_selector_all(f"{selector}.chosen", "all => all.map(one => one.dataset.turn)")
        return list(found)

    def overflow_px(self) -> int:
        """Return by how much the page is wider than the screen."""
        return int(self.page.evaluate("document.documentElement.scrollWidth - innerWidth"))

    def close(self) -> None:
        self.page.close()


@pytest.fixture
def visit(browser: Any, report_file: Path) -> Iterator[Visit]:
    one = Visit(browser, report_file, viewport={"width": 1100, "height": 900})
    yield one
    assert one.said == []
    assert [url for url in one.asked if not url.startswith("data:")] == [report_file.as_uri()]
    one.close()


def test_a_page_left_alone_says_nothing_and_asks_for_nothing(visit: Visit):
    visit.page.wait_for_timeout(200)
    assert visit.page.title().startswith("Turning trial: </title><script>")
    assert not visit.page.is_visible("#chosen")


def test_the_answer_is_on_the_first_screen(visit: Visit):
    for selector in (".lead", ".numbers table", "h1"):
        box = visit.page.locator(selector).first.bounding_box()
        assert box is not None
        assert box["y"] + box["height"] < 900


def chosen_everywhere(visit: Visit, key: str) -> None:
    """Assert that one turn and no other is chosen in table, gallery and plots, and shown in the panel."""
    assert visit.chosen("tr") == [key]
    assert visit.chosen(".card") == [key]
    marks = visit.chosen("svg .mark")
    assert set(marks) == {key}
    plots = visit.page.eval_on_selector_all(".mark.chosen", "all => all.map(one => one.closest('.plot').id)")
    assert {plot.split("-")[0] for plot in plots} == {"relation", "repeats", "order", "start", "heading", "path"}
    assert visit.page.locator(".mark-ring").count() >= 5
    number = key.split("-")[1]
    assert visit.page.inner_text("#chosen-said").startswith(f"Turn {number}: commanded")
    assert visit.page.locator("#chosen-pair svg").count() == 2


def test_a_turn_chosen_in_the_table_is_shown_everywhere(visit: Visit):
    visit.page.click(f"#row-{KEY} a")
    chosen_everywhere(visit, KEY)
    assert "it strays by" in visit.page.inner_text("#chosen-said")


def test_a_turn_chosen_in_a_plot_is_shown_everywhere(visit: Visit):
    visit.page.locator(f'#order-A .mark[data-turn="{KEY}"]').click()
    chosen_everywhere(visit, KEY)
    visit.page.locator('#heading-A1 .mark[data-turn="A1-4"]').last.click()
    chosen_everywhere(visit, "A1-4")


def test_a_click_beside_a_mark_finds_the_nearest(visit: Visit):
    mark = visit.page.locator('#order-A .mark[data-turn="A1-8"]')
    mark.scroll_into_view_if_needed()
    box = mark.bounding_box()
    assert box is not None
    visit.page.mouse.click(box["x"] + 0.5 * box["width"] + 7.0, box["y"] + 0.5 * box["height"])
    assert visit.chosen("tr") == ["A1-8"]


def test_a_turn_chosen_in_the_gallery_is_shown_everywhere(visit: Visit):
    visit.page.locator("#card-A1-7 .pair").click()
    chosen_everywhere(visit, "A1-7")


def test_a_turn_named_in_a_sentence_is_shown_everywhere(visit: Visit):
    visit.page.locator(f'.doubts a[data-turn="{KEY}"]').click()
    chosen_everywhere(visit, KEY)


def test_the_keyboard_alone_does_it(visit: Visit):
    visit.page.keyboard.press("Tab")
    assert visit.page.evaluate("document.activeElement.textContent") == "To the answer"
    visit.page.locator("#order-A .scroll").focus()
    visit.page.keyboard.press("Enter")
    chosen_everywhere(visit, "A1-1")
    for _ in range(3):
        visit.page.keyboard.press("ArrowRight")
    visit.page.keyboard.press("ArrowLeft")
    chosen_everywhere(visit, "A1-3")
    visit.page.keyboard.press("Escape")
    assert not visit.page.is_visible("#chosen")
    assert visit.chosen("tr") == []
    visit.page.locator("#row-A1-2 a").focus()
    visit.page.keyboard.press("Enter")
    visit.page.keyboard.press("ArrowDown")
    chosen_everywhere(visit, "A1-3")
    assert visit.page.evaluate("document.activeElement.closest('tr').id") == "row-A1-3"


def test_the_panel_goes_on_and_closes_and_gives_the_focus_back(visit: Visit):
    visit.page.click("#row-A1-2 a")
    visit.page.click("#later")
    chosen_everywhere(visit, "A1-3")
    visit.page.click("#earlier")
    visit.page.click("#no-more")
    assert not visit.page.is_visible("#chosen")
    assert visit.page.evaluate("document.activeElement.closest('tr').id") == "row-A1-2"


def test_the_files_inside_can_be_saved(visit: Visit, tmp_path: Path):
    with visit.page.expect_download() as waiting:
        visit.page.click('a[download="cork-turns.csv"]')
    saved = tmp_path / "turns.csv"
    waiting.value.save_as(saved)
    assert saved.read_text(encoding="utf-8").startswith("turn,start_s,end_s,commanded_wheel_deg")


def test_stills_are_drawn(visit: Visit):
    shot = visit.page.locator("#card-A1-7 .still").first.screenshot()
    picture = cv2.imdecode(np.frombuffer(shot, np.uint8), cv2.IMREAD_GRAYSCALE)
    assert picture.std() > 20.0


@pytest.mark.parametrize("width_px", [360, 768])
def test_small_screens_scroll_one_way_only(browser: Any, report_file: Path, comparison_file: Path, width_px: int):
    for path in (report_file, comparison_file):
        one = Visit(browser, path, viewport={"width": width_px, "height": 740})
        assert one.overflow_px() <= 0
        one.page.locator("table.turns a").first.click()
        assert one.page.is_visible("#no-more")
        assert one.overflow_px() <= 0
        panel = one.page.locator("#chosen").bounding_box()
        assert panel is not None
        assert panel["height"] < 0.45 * 740
        assert one.said == []
        one.close()


@pytest.mark.parametrize(("paper", "width_pt", "height_pt"), [("A4", 595, 842), ("Letter", 612, 792)])
def test_paper(browser: Any, report_file: Path, paper: str, width_pt: int, height_pt: int):
    one = Visit(browser, report_file)
    document = pypdfium2.PdfDocument(io.BytesIO(one.page.pdf(format=paper)))
    one.close()
    assert 4 <= len(document) <= 14
    first = document[0].get_textpage().get_text_range()
    assert "What to command" in first
    assert "lands within" in first
    everything = "".join(document[n].get_textpage().get_text_range() for n in range(len(document)))
    assert "To do it again" in everything
    assert "wheel_diameter_mm" in everything  # folded parts are open on paper
    for n in range(len(document)):
        assert document[n].get_size() == pytest.approx((width_pt, height_pt), abs=1.0)
        for item in document[n].get_objects(max_depth=1):
            left, _, right, _ = item.get_pos() if hasattr(item, "get_pos") else item.get_bounds()
            assert left >= -1.0
            assert right <= width_pt + 1.0, (n, right)


def test_nothing_serious_is_found_by_the_accessibility_checker(browser: Any, report_file: Path, comparison_file: Path):
    """Source: axe-core's rules for WCAG 2 A and AA."""
    axe_module = pytest.importorskip("axe_playwright_python.sync_playwright", reason="axe-playwright-python is missing")
    for path in (report_file, comparison_file):
        one = Visit(browser, path, viewport={"width": 1100, "height": 900})
        one.page.locator("table.turns a").first.click()
        one.page.eval_on_selector_all("details", "all => all.forEach(one => { one.open = true; })")
        found = axe_module.Axe().run(one.page).response["violations"]
        grave = [f"{rule['id']}: {rule['nodes'][0]['html'][:200]}" for rule in found if rule["impact"] in GRAVE]
        assert grave == []
        one.close()


GRAVE = ("serious", "critical")


def test_the_annotated_clip_plays(browser: Any, tmp_path: Path):
    folder = write_folder(tmp_path, "short", commands(2))
    one = read_measurement(folder, with_track=True)
    annotated = annotate(one, Path(str(one.source.path)), tmp_path / "annotated.mp4")
    page = browser.new_page()
    kind = 'video/mp4; codecs="avc1.640028"'
    if not page.evaluate("kind => document.createElement('video').canPlayType(kind)", kind):
        page.close()
        pytest.skip("this browser was built without H.264")
    page.goto(annotated.as_uri())
    page.wait_for_function("document.querySelector('video')?.readyState >= 2", timeout=15_000)
    video = page.evaluate("(({videoWidth, videoHeight, duration}) => [videoWidth, videoHeight, duration])"
                          "(document.querySelector('video'))")  # fmt: skip
    assert video == pytest.approx([*SIZE_PX, 2.4], abs=0.11)
    assert page.evaluate("document.querySelector('video').error") is None
    page.close()
