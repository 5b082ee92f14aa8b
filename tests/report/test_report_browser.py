"""The page as a reader meets it: in a browser, without a network, on a wide and a narrow screen and on paper."""

from __future__ import annotations

import base64
import re
from collections.abc import Iterator
from pathlib import Path

import pytest
from browser import Browser, find_chromium
from sample_results import MARGINS, NASTY, OPTIMAL, SIZES, nasty_result

from compsize.plan.records import MarginsResult, SizeResult
from compsize.report.content import page_of
from compsize.report.html import render_html

PROGRAM = find_chromium()
pytestmark = pytest.mark.skipif(PROGRAM is None, reason="no Chromium is installed")

BLANK = ["\N{EN DASH}"] * 2
PAGES: dict[str, SizeResult | MarginsResult] = {**SIZES, "margins": MARGINS, "nasty": nasty_result()}


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("pages")
    for name, result in PAGES.items():
        (path / f"{name}.html").write_text(render_html(page_of(result)), encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Browser]:
    assert PROGRAM is not None
    with Browser(PROGRAM, tmp_path_factory.mktemp("profile")) as browser:
        yield browser


@pytest.mark.parametrize("width", [390, 1280])
@pytest.mark.parametrize("name", PAGES)
def test_page_fits_the_screen(browser: Browser, folder: Path, name: str, width: int) -> None:
    """No page is wider than the screen, none complains, and none loads anything beside itself."""
    browser.open(folder / f"{name}.html", width)
    assert browser.run("document.documentElement.scrollWidth <= innerWidth && innerWidth") == width
    assert browser.requests == [(folder / f"{name}.html").as_uri()]
    assert browser.faults == []
    shown = browser.run(
        "[...document.querySelectorAll('svg')].filter(s => s.getBoundingClientRect().width).map(s => s.classList[1])"
    )
    assert set(shown) == {"narrow" if width == 390 else "wide"}


def test_drawn_text_stays_in_its_drawing(browser: Browser, folder: Path) -> None:
    """In the browser's own fonts no label leaves the frame of its drawing."""
    for width in (390, 1280):
        browser.open(folder / "optimal.html", width)
        outside = browser.run(
            """[...document.querySelectorAll("svg")].flatMap((svg) => {
              const frame = svg.getBoundingClientRect();
              return [...svg.querySelectorAll("text")].filter((text) => {
                const box = text.getBoundingClientRect();
                return frame.width && box.width && (box.left < frame.left - 1 || box.right > frame.right + 1
                  || box.top < frame.top - 1 || box.bottom > frame.bottom + 1);
              }).map((text) => text.textContent);
            })"""
        )
        assert outside == []


def test_heading_sorts_its_table(browser: Browser, folder: Path) -> None:
    """A click on a heading sorts by the unrounded numbers, a second click the other way, blanks always last."""
    browser.open(folder / "optimal.html", 1280)
    script = """(clicks) => {
      const table = document.querySelector("#table-margins table");
      const head = [...table.querySelectorAll(".columns th")][5];
      for (let i = 0; i < clicks; i++) head.querySelector("button").click();
      return [head.getAttribute("aria-sort"), ...[...table.tBodies[0].rows].map((row) => row.cells[5].textContent)];
    }"""
    up = browser.run(f"({script})(1)")
    assert up == [
        "ascending",
        "\u22124.26",
        "9.13",
        "14.90",
        "26.08",
        "\u2265\u202f31.70",
        "71.44",
        "\N{EN DASH}",
        "\N{EN DASH}",
    ]
    down = browser.run(f"({script})(1)")
    assert down == [
        "descending",
        "71.44",
        "\u2265\u202f31.70",
        "26.08",
        "14.90",
        "9.13",
        "\u22124.26",
        "\N{EN DASH}",
        "\N{EN DASH}",
    ]


def test_table_can_be_copied(browser: Browser, folder: Path) -> None:
    """The copied table is tab-separated: headings with units, unrounded numbers, names as they are."""
    browser.open(folder / "optimal.html", 1280)
    copied = browser.run(
        """(async () => {
          let text = "";
          Object.defineProperty(navigator, "clipboard", { value: { writeText: async (t) => { text = t; } } });
          document.querySelector("#table-margins .copy").click();
          await new Promise((done) => setTimeout(done, 50));
          return text;
        })()"""
    )
    lines = copied.split("\n")
    assert lines[0].split("\t")[:4] == ["Case", "Class", "Base load [MW]", "Required margin [MW]"]
    assert lines[0].split("\t")[-1] == "With the plan: Met"
    cells = [
        "Oakmere-Tarnside",
        "single",
        "240.0",
        "12.0",
        "235.73888",
        "-4.26112",
        "no",
        "252.00384",
        "12.00384",
        "yes",
    ]
    assert lines[1].split("\t") == cells
    assert len(lines) == 9


def test_case_selector_changes_the_curves(browser: Browser, folder: Path) -> None:
    """The binding case's curves show first; choosing another case shows that one alone."""
    browser.open(folder / "optimal.html", 1280)
    visible = """[...document.querySelectorAll(".curves figure")].filter((f) => f.offsetParent)
      .map((f) => f.querySelector("figcaption bdi").textContent)"""
    assert browser.run(visible) == ["Oakmere-Tarnside"]
    browser.run(
        """(() => { const s = document.querySelector(".curves select"); s.value = "1";
          s.dispatchEvent(new Event("change")); })()"""
    )
    assert browser.run(visible) == ["Fellhead-Oakmere 1"]


def test_all_curves_show_without_scripts(browser: Browser, folder: Path) -> None:
    """Where scripts are off every case's curves are on the page, and no idle control."""
    browser.call("Emulation.setScriptExecutionDisabled", value=True)
    try:
        browser.open(folder / "optimal.html", 1280)
        shown = "[...document.querySelectorAll('.curves figure, .choose, .copy')].filter((f) => f.offsetParent).length"
        assert browser.run(shown) == 2
    finally:
        browser.call("Emulation.setScriptExecutionDisabled", value=False)


def test_names_are_text_in_the_browser(browser: Browser, folder: Path) -> None:
    """The browser runs nothing from a name, and every name is read back from its cell unchanged."""
    browser.open(folder / "nasty.html", 1280)
    assert browser.run("document.title").startswith("<script>document.title=")
    assert browser.run("document.querySelectorAll('script').length") == 1
    cells = browser.run(
        "[...document.querySelectorAll('#table-plan tbody tr')].map((row) => row.querySelector('th bdi').textContent)"
    )
    assert cells == list(NASTY)
    options = browser.run("[...document.querySelectorAll('.curves option')].map((o) => o.textContent)")
    assert options == list(NASTY)
    directions = browser.run(
        "[...document.querySelectorAll('#table-plan tbody th bdi')].map((b) => getComputedStyle(b).direction)"
    )
    assert directions[NASTY.index("محطة الشمال 3")] == "rtl"
    assert directions[0] == "ltr"


@pytest.mark.parametrize("name", ["optimal", "nasty", "margins"])
def test_prints_on_a4(browser: Browser, folder: Path, name: str) -> None:
    """The page prints on A4, upright, without controls and with no table cut at the edge of the paper."""
    browser.open(folder / f"{name}.html", 1280)
    printed = base64.b64decode(browser.call("Page.printToPDF", preferCSSPageSize=True)["data"])
    boxes = set(re.findall(rb"/MediaBox \[0 0 (\d+)[.\d]* (\d+)[.\d]*\]", printed))
    assert boxes in ({(b"594", b"841")}, {(b"595", b"841")}, {(b"595", b"842")})
    # A4 less the margins of the page's style sheet is 182 mm, 688 CSS pixels.
    browser.open(folder / f"{name}.html", 688)
    browser.call("Emulation.setEmulatedMedia", media="print")
    try:
        wide = browser.run(
            """[...document.querySelectorAll("main *, header *, footer *")]
              .filter((e) => !e.closest("svg") && e.getBoundingClientRect().right > 689)
              .map((e) => e.outerHTML.slice(0, 90))"""
        )
        assert wide == []
        assert (
            browser.run("[...document.querySelectorAll('.copy, .choose, nav')].filter((e) => e.offsetParent).length")
            == 0
        )
    finally:
        browser.call("Emulation.setEmulatedMedia", media="")


def test_dark_on_light_and_legible_in_grey(browser: Browser, folder: Path) -> None:
    """Text has at least 4.5 to 1 contrast (WCAG 2.2, 1.4.3), and before and after differ by more than hue."""
    browser.open(folder / "optimal.html", 1280)
    low = browser.run(
        """(() => {
          const light = (css) => {
            const [r, g, b] = css.match(/[\\d.]+/g).map(Number).slice(0, 3).map((v) => v / 255)
              .map((v) => (v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4));
            return 0.2126 * r + 0.7152 * g + 0.0722 * b;
          };
          const behind = (e) => {
            for (; e; e = e.parentElement) {
              const colour = getComputedStyle(e).backgroundColor;
              if (!colour.endsWith(", 0)") && colour !== "transparent") return colour;
            }
            return "rgb(255, 255, 255)";
          };
          return [...document.querySelectorAll("p, dt, dd, th, td, button, li, span, h1, h2, svg text")]
            .filter((e) => e.textContent.trim() && e.getBoundingClientRect().width)
            .map((e) => {
              const style = getComputedStyle(e);
              const ink = light(e.closest("svg") ? style.fill : style.color);
              const [a, b] = [ink, light(behind(e))].sort((x, y) => y - x);
              return [(a + 0.05) / (b + 0.05), e.textContent.slice(0, 30)];
            })
            .filter(([ratio]) => ratio < 4.5);
        })()"""
    )
    assert low == []
    page = render_html(page_of(OPTIMAL))
    assert "stroke-dasharray" in page
    assert "<pattern" in page
