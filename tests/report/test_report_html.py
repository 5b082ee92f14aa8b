"""The page is one self-contained file, the same bytes for the same result, and shows text as text."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from dataclasses import replace
from functools import cache
from html.parser import HTMLParser
from pathlib import Path

import pytest
from sample_results import LIMIT, MARGINS, NASTY, OPTIMAL, SIZES, UNREACHABLE, nasty_result

from compsize.plan.records import MarginsResult, SizeResult
from compsize.report.blocks import Bars, CurveCharts
from compsize.report.charts import NARROW, WIDE, bars_svg, curves_svg
from compsize.report.content import page_of
from compsize.report.html import render_html

RESULTS: dict[str, SizeResult | MarginsResult] = {**SIZES, "margins": MARGINS, "nasty": nasty_result()}
VOID = {"meta", "link", "br", "hr", "img", "input"}


@cache
def html(name: str) -> str:
    return render_html(page_of(RESULTS[name]))


class Reader(HTMLParser):
    """Collects elements, attributes and the text of each bdi element; complains of tags that do not match."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.isolated: list[str] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)
        if tag == "bdi":
            self.isolated.append("")

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if "bdi" in self.open:
            self.isolated[-1] += data


@pytest.mark.parametrize("name", RESULTS)
def test_page_is_well_formed_and_self_contained(name: str) -> None:
    """Tags match, ids are unique, every reference stays inside the page, and no address of the network occurs."""
    page = Reader(html(name))
    assert page.open == []
    ids = [value for _, attrs in page.tags if (value := attrs.get("id"))]
    assert len(ids) == len(set(ids))
    for tag, attrs in page.tags:
        for key in ("href", "xlink:href"):
            if (target := attrs.get(key)) and target != "data:,":
                assert target[0] == "#", tag
                assert target[1:] in ids
        for key in ("aria-labelledby", "aria-describedby"):
            assert set((attrs.get(key) or "").split()) <= set(ids)
        assert "src" not in attrs
        assert not [key for key in attrs if key.startswith("on")]
        for found in re.findall(r"url\(([^)]*)\)", attrs.get("style") or ""):
            assert found[1:] in ids
    assert not re.search(r"https?:|//[a-z]|@import|@font-face", html(name))


@pytest.mark.parametrize("name", RESULTS)
def test_only_the_page_s_own_script(name: str) -> None:
    """There is one script element, and the page's policy lets a browser run that text and fetch nothing."""
    page = Reader(html(name))
    assert [tag for tag, _ in page.tags].count("script") == 1
    policy = next(attrs["content"] for tag, attrs in page.tags if attrs.get("http-equiv") == "Content-Security-Policy")
    assert policy is not None
    assert policy.startswith("default-src 'none'; ")
    assert re.search(r"script-src 'sha256-[A-Za-z0-9+/]{43}='", policy)


def test_names_come_through_as_text() -> None:
    """Formulas, markup, quotes, accents, 200 characters and right-to-left text are text, each isolated."""
    page = Reader(html("nasty"))
    for name in NASTY:
        assert page.isolated.count(name) >= 8, name
    for name in NASTY[:1] + NASTY[2:]:
        assert f"remark on {name}" in page.isolated


def test_drawings_describe_themselves() -> None:
    """Every drawing is an image with a title and a description, its text is text, and its case is named."""
    page = Reader(html("optimal"))
    drawings = [attrs for tag, attrs in page.tags if tag == "svg"]
    assert len(drawings) == 6  # bars and two cases, each wide and narrow
    for attrs in drawings:
        assert attrs["role"] == "img"
        ident, _ = (attrs["aria-labelledby"] or "").split()
        assert re.search(rf'<title id="{ident}">(Margins by case|Nose curves, [^<]+)</title>', html("optimal"))
        assert re.search(rf'<desc id="{ident.replace("title", "desc")}">[^<]{{40,}}</desc>', html("optimal"))
    assert ">required load</text>" in html("optimal")
    assert ">bank:Oakmere 110:MSC-15</text>" in html("optimal")


@pytest.mark.parametrize("result", [OPTIMAL, UNREACHABLE, LIMIT, MARGINS])
def test_drawings_fit_their_frame(result: SizeResult | MarginsResult) -> None:
    """All curves and marks lie inside the frame of the drawing."""
    for section in page_of(result).sections:
        for block in section.blocks:
            for size in (WIDE, NARROW):
                if isinstance(block, Bars):
                    drawings = [bars_svg(block, size, "b")]
                elif isinstance(block, CurveCharts):
                    drawings = [curves_svg(chart, size, "c") for chart in block.charts]
                else:
                    continue
                for drawing in drawings:
                    frame = re.search(r'viewBox="0 0 (\S+) (\S+)"', drawing)
                    assert frame is not None
                    assert float(frame[1]) == size.width
                    outside = [
                        (x, y)
                        for tag in re.findall(r"<(?:use|text)[^>]*>", drawing)
                        for x, y in re.findall(r' x="(\S+)" y="(\S+)"', tag)
                        if not (0 <= float(x) <= float(frame[1]) and 0 <= float(y) <= float(frame[2]))
                    ]
                    assert outside == []


def test_control_characters_in_a_name_do_not_break_a_drawing() -> None:
    """A name with a character that XML cannot hold is drawn with a replacement, and the page stands."""
    odd = "bay\x02\x00 7"
    page = render_html(page_of(replace(MARGINS, cases=(replace(MARGINS.cases[0], case=odd),))))
    assert "bay\ufffd\ufffd 7</text>" in page


SCRIPT = """
import hashlib, sys
sys.path.insert(0, sys.argv[1])
from sample_results import OPTIMAL
from compsize.report.write import result_files
for name, text in sorted(result_files(OPTIMAL).items()):
    print(name, hashlib.sha256(text.encode()).hexdigest())
"""


def test_same_result_same_bytes(tmp_path: Path) -> None:
    """Hash seed, time zone, locale and a user's drawing settings change no byte of any file."""
    (tmp_path / "matplotlibrc").write_text("font.size: 40\nlines.linewidth: 9\nsvg.fonttype: path\n")
    seen = []
    for seed, zone, folder in (("1", "UTC", "."), ("2", "Asia/Tokyo", str(tmp_path))):
        environment = os.environ | {
            "PYTHONHASHSEED": seed, "TZ": zone, "LC_ALL": "C.UTF-8", "PYTHONPATH": str(Path(__file__).parents[2]),
        }  # fmt: skip
        run = subprocess.run(
            [sys.executable, "-W", "error", "-c", SCRIPT, str(Path(__file__).parent)],
            cwd=folder, env=environment, capture_output=True, text=True, check=True,
        )  # fmt: skip
        seen.append(run.stdout)
    assert seen[0] == seen[1]
    assert len(seen[0].splitlines()) == 5


def test_drawing_leaves_the_caller_s_settings() -> None:
    """Drawing changes none of the settings of a program that uses matplotlib itself."""
    import matplotlib as mpl

    with mpl.rc_context({"font.size": 23.0, "svg.fonttype": "path"}):
        before = dict(mpl.rcParams)
        render_html(page_of(MARGINS))
        assert dict(mpl.rcParams) == before
