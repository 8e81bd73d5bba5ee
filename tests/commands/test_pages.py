"""The pages in a real browser: opened from disk, explored, corrected, and the correction measured again."""

import csv
import shutil
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from conftest import DrawnStudy, OneProcess, contents, draw_study

from vasohm.study import run

pytestmark = pytest.mark.slow

CHROMIUM = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
WIDTHS = {1280: 800, 390: 844}  # of a laptop and of a telephone
LEAST_CONTRAST = 4.5  # WCAG 2.2, success criterion 1.4.3, level AA, for text of the usual size
STEM, BRANCH = (20, 48), (60, 66)  # (x, y) on the two vessels of the first picture
NODE = (40, 48)
SIZE_PX = 96
# Ways out of text, attributes, comments, scripts, links and style (OWASP Cross Site Scripting Prevention Cheat Sheet,
# from memory) and of cells of a spreadsheet.
HOSTILE = (
    "<script>document.title='run'</script>",
    "</script><script>document.title='run'</script>",
    "</title><script>document.title='run'</script>",
    "<img src=x onerror=\"document.title='run'\">",
    "<svg onload=document.title='run'>",
    "\"><b onmouseover=document.title='run'>",
    "' autofocus onfocus='document.title=1",
    "<!--<script>document.title='run'//-->",
    "javascript:document.title='run'",
    "<a href=\"javascript:document.title='run'\">x</a>",
    "</style><style>@import 'http://example.invalid/x.css'</style>",
    "<link rel=stylesheet href=http://example.invalid/x.css>",
    "<iframe src=http://example.invalid></iframe>",
    "<meta http-equiv=refresh content='0;url=http://example.invalid'>",
    "<base href=http://example.invalid/>",
    "<form action=http://example.invalid><button>x</button></form>",
    "&lt;script&gt;document.title='run'&lt;/script&gt;",
    "\\u003cscript\\u003edocument.title='run'",
    "]]><script>document.title='run'</script>",
    "=cmd|'/c calc'!A0",
    "@SUM(1+1)",
    "${document.title='run'}",
    "{{document.title='run'}}",
    "\u2028document.title='run'",
    "\u202egnp.exe",
)
# Least contrast of all texts that are seen, each against the nearest painted ground (WCAG 2.2, contrast ratio).
CONTRAST = """() => {
  const parts = (colour) => colour.match(/[\\d.]+/g).map(Number);
  const linear = (v) => (v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4);
  const light = ([r, g, b]) => [r, g, b].map((v) => linear(v / 255))
    .reduce((sum, v, k) => sum + v * [0.2126, 0.7152, 0.0722][k], 0);
  const ground = (one) => {
    for (; one; one = one.parentElement) {
      const colour = parts(getComputedStyle(one).backgroundColor);
      if (colour.length === 3 || colour[3] > 0.5) return colour;
    }
    return [255, 255, 255];
  };
  const texts = [...document.querySelectorAll("body *")].filter((one) => one.checkVisibility() && !one.closest("svg") &&
    [...one.childNodes].some((node) => node.nodeType === 3 && node.textContent.trim()));
  return Math.min(...texts.map((one) => {
    const [a, b] = [light(parts(getComputedStyle(one).color)), light(ground(one))];
    return (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
  }));
}"""


@dataclass
class Watched:
    """A page, and what it did that it should not."""

    page: Any
    faults: list[str] = field(default_factory=list)

    def open(self, file: Path) -> Any:
        """Open a page from disk and wait until its scripts have done."""
        self.page.goto(file.as_uri())
        if file.parent.parent.name == "images":
            self.page.wait_for_selector("body[data-ready]")
        return self.page

    def at(self, x: float, y: float, width_px: int = SIZE_PX) -> dict[str, float]:
        """Where a pixel of the picture stands in the figure."""
        box = self.page.locator("#figure").bounding_box()
        return {"x": (x + 0.5) / width_px * box["width"], "y": (y + 0.5) / SIZE_PX * box["height"]}


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    if CHROMIUM is None:
        pytest.skip("no Chromium here: install it to try the pages in a browser")
    playwright = pytest.importorskip("playwright.sync_api")
    with playwright.sync_playwright() as started:
        launched = started.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        yield launched
        launched.close()


@pytest.fixture
def watch(browser: Any) -> Iterator[Callable[[int], Watched]]:
    """Return a function that opens a window of some width; nothing it shows may complain or ask a host."""
    opened = []

    def window(width: int) -> Watched:
        page = browser.new_page(viewport={"width": width, "height": WIDTHS[width]})
        watched = Watched(page)
        page.on("console", lambda told: told.type in ("error", "warning") and watched.faults.append(told.text))
        page.on("pageerror", lambda fault: watched.faults.append(str(fault)))
        local = ("file:", "data:", "blob:")
        page.on("request", lambda asked: asked.url.startswith(local) or watched.faults.append(asked.url))
        opened.append(watched)
        return watched

    yield window
    for watched in opened:
        watched.page.close()
        assert not watched.faults


@pytest.fixture(scope="module")
def measured(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[DrawnStudy, Path]]:
    """Return a study with hostile texts wherever a person may put one, measured; one of its images cannot be."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(run, "SupervisedPool", OneProcess)
        study = draw_study(tmp_path_factory.mktemp("pages"), patch)
        text = study.file.read_text().replace('"drawn"', f"'''{HOSTILE[0]}'''")
        study.file.write_text(text + "[[scenario]]\nname = '''<b onclick=x>wider</b>'''\nradius_factor = 1.1\n")
        named = f"{HOSTILE[2].replace('/', '_')}.png"
        (study.folder / study.ids[1]).with_suffix(".png").rename(study.folder / named)
        (study.folder / "=cmd().png").write_bytes(b"no picture")
        write_sheet(study, {study.ids[1]: named, study.ids[2]: "=cmd().png"})
        out = study.folder / "out"
        assert study.measure(out).status == 1  # one picture cannot be read
        yield study, out


def write_sheet(study: DrawnStudy, files: dict[str, str], edits: str = "") -> None:
    notes = {f"note_{chr(97 + k)}": text for k, text in enumerate(HOSTILE)}
    with (study.folder / "images.csv").open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream)
        writer.writerow(["image_id", "file", "group", "edits_file", *notes])
        for k, image_id in enumerate(study.ids):
            row = [image_id, files.get(image_id, f"{image_id}.png"), HOSTILE[k], edits if k == 0 else ""]
            writer.writerow([*row, *notes.values()])


def page_of(out: Path, study: DrawnStudy, number: int = 0) -> Path:
    return out / "images" / study.ids[number] / "index.html"


@pytest.mark.parametrize("width", WIDTHS)
def test_pages_fit_are_readable_and_run_nothing_that_a_sheet_says(
    width: int, watch: Callable[[int], Watched], measured: tuple[DrawnStudy, Path]
) -> None:
    """A cut column hides a number; a text from a sheet that runs could change what a reader sees."""
    study, out = measured
    for file in (out / "index.html", page_of(out, study), page_of(out, study, 1)):
        page = watch(width).open(file)
        page.wait_for_timeout(100)
        title = HOSTILE[0] if file.parent == out else file.parent.name
        assert page.title() == f"{title} - vasohm"
        assert page.evaluate("document.documentElement.scrollWidth <= innerWidth")
        assert page.evaluate(CONTRAST) >= LEAST_CONTRAST
        assert page.locator("script:not([src]):not([type='application/json'])").count() == 0
    text = watch(width).open(out / "index.html").locator("body").inner_text()
    assert "=cmd().png" in text  # the failed image, told as text
    assert text.index("Failed images") < text.index("Quality")


def test_the_study_page_finds_and_sorts_images(
    watch: Callable[[int], Watched], measured: tuple[DrawnStudy, Path]
) -> None:
    """Among 500 images nobody finds one by scrolling."""
    study, out = measured
    page = watch(1280).open(out / "index.html")
    shown = page.locator("table.sortable tbody tr:visible")
    assert shown.count() == 2
    page.get_by_role("button", name="segments").click()
    counts = [int(text) for text in page.locator("td[data-name=segments]").all_inner_texts()]
    assert counts == sorted(counts)
    page.fill("#filter", study.ids[1])
    assert shown.count() == 1
    with page.expect_navigation():
        shown.get_by_role("link", name=study.ids[1], exact=True).click()
    assert page.locator("h1").inner_text() == study.ids[1]


def test_a_pointer_finds_segments_colours_change_and_the_table_follows(
    watch: Callable[[int], Watched], measured: tuple[DrawnStudy, Path]
) -> None:
    """A picture that cannot be asked would be no more than the drawn one."""
    study, out = measured
    watched = watch(1280)
    page = watched.open(page_of(out, study))
    figure, told = page.locator("#figure"), page.locator("#chosen h3")
    figure.hover(position=watched.at(*BRANCH))
    hovered = page.locator("#tip strong").inner_text()
    assert "Hydraulic radius" in page.locator("#tip").inner_text()
    figure.click(position=watched.at(*BRANCH))
    assert told.inner_text() == hovered
    row = page.locator("#rows tr.chosen")
    assert f"Segment {row.locator('button').inner_text()}" == hovered
    with (out / "images" / study.ids[0] / "segments.csv").open(encoding="utf-8", newline="") as stream:
        length = {f"Segment {one['segment_id']}": float(one["length_um"]) for one in csv.DictReader(stream)}[hovered]
    assert float(row.locator("td").nth(3).inner_text()) == pytest.approx(length, rel=5e-3)  # three digits

    before = figure.screenshot()
    page.select_option("#colouring", "flags")
    assert "no doubt: " in page.locator("#legend").inner_text()
    page.mouse.move(0, 0)
    page.wait_for_timeout(300)
    assert figure.screenshot() != before


def test_all_can_be_done_from_the_keyboard(watch: Callable[[int], Watched], measured: tuple[DrawnStudy, Path]) -> None:
    """Who cannot use a pointer could neither choose a segment nor correct it (WCAG 2.2, success criterion 2.1.1)."""
    study, out = measured
    page = watch(1280).open(page_of(out, study))
    reached = set()
    for _ in range(60):
        page.keyboard.press("Tab")
        reached.add(page.evaluate("document.activeElement.id || document.activeElement.textContent"))
    assert {"colouring", "figure", "filter", "table-box", "nearer", "1"} <= reached
    page.locator("#figure").focus()
    scale = page.locator("#scale-words")
    whole = scale.inner_text()
    for _ in range(5):
        page.keyboard.press("+")
    assert scale.inner_text() != whole
    page.keyboard.press("0")
    assert scale.inner_text() == whole
    page.locator("#rows button").first.focus()
    page.keyboard.press("Enter")
    assert page.locator("#rows tr.chosen").count() == 1
    page.locator("[data-edit=keep]").focus()
    page.keyboard.press("Enter")
    assert "keep" in page.locator("#edit-list").inner_text()


def test_a_branching_can_be_said_to_be_a_crossing(
    watch: Callable[[int], Watched], measured: tuple[DrawnStudy, Path], tmp_path: Path
) -> None:
    """The second most frequent correction: where two vessels merely cross."""
    study, out = measured
    watched = watch(1280)
    page = watched.open(page_of(out, study, 0))
    page.check("#places")
    page.locator("#figure").click(position=watched.at(*NODE))
    page.get_by_role("button", name="Crossing", exact=True).click()
    (row,) = download(page, tmp_path / "edits.csv")
    assert row["edit"] == "crossing"
    assert (float(row["x_px"]), float(row["y_px"])) == pytest.approx(NODE, abs=4.0)  # the radius of the stem


def test_edits_made_on_the_page_are_applied_and_nothing_else_changes(
    watch: Callable[[int], Watched], measured: tuple[DrawnStudy, Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A correction that is lost, or that moves another image, would be worse than none."""
    study, results = measured
    monkeypatch.setattr(run, "SupervisedPool", OneProcess)
    out = tmp_path / "out"
    shutil.copytree(results, out)  # the other tests' pages stay as they are
    before = contents(out)
    watched = watch(1280)
    page = watched.open(page_of(out, study))
    page.locator("#figure").click(position=watched.at(*BRANCH))
    page.get_by_role("button", name="Drop").click()
    assert page.locator("#rows tr.dropped").count() == 1
    rows = download(page, study.folder / "edits.csv")
    assert [(one["edit"], one["value"]) for one in rows] == [("drop", "")]

    files = {study.ids[1]: f"{HOSTILE[2].replace('/', '_')}.png", study.ids[2]: "=cmd().png"}
    write_sheet(study, files, "edits.csv")
    assert study.measure(out).status == 1
    with (out / "images" / study.ids[0] / "image.csv").open(encoding="utf-8", newline="") as stream:
        assert next(csv.DictReader(stream))["n_segments"] == "1"  # the stem is one vessel again
    after = contents(out)
    other = f"images/{study.ids[1]}/"
    assert {k: v for k, v in after.items() if k.startswith(other)} == {
        k: v for k, v in before.items() if k.startswith(other)
    }

    page = watched.open(page_of(out, study))  # what was said before is still said by the next file
    page.locator("#figure").click(position=watched.at(*STEM))
    page.get_by_role("button", name="Venule").click()
    rows = download(page, study.folder / "edits.csv")
    assert [(one["edit"], one["value"]) for one in rows] == [("drop", ""), ("class", "venule")]


def download(page: Any, to: Path) -> list[dict[str, str]]:
    with page.expect_download() as caught:
        page.get_by_role("button", name="Download the edits file").click()
    caught.value.save_as(to)
    with to.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))
