"""A page of content as one HTML file that needs nothing beside it: no network, no fonts, no other file."""

from __future__ import annotations

import base64
import hashlib
from importlib import resources

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from compsize.report.blocks import Bars, CurveChart, Ident, Page
from compsize.report.charts import NARROW, WIDE, bars_svg, curves_svg

__all__ = ["render_html"]


def render_html(page: Page) -> str:
    """The page as HTML text. All text is escaped by the template engine; only the drawings are markup."""
    script, style = (_own_file(name) for name in ("page.js", "page.css"))
    environment = Environment(
        loader=PackageLoader("compsize.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.tests["ident"] = _is_ident
    environment.globals |= {
        "bars_markup": _bars_markup,
        "curves_markup": _curves_markup,
        "spans": _spans,
    }
    # The browser runs this script and no other, and fetches nothing: text from a study cannot act.
    digest = base64.b64encode(hashlib.sha256(script.encode("utf-8")).digest()).decode("ascii")
    policy = (
        f"default-src 'none'; style-src 'unsafe-inline'; script-src 'sha256-{digest}'; img-src data:; "
        "base-uri 'none'; form-action 'none'"
    )
    return environment.get_template("page.html").render(
        page=page, policy=policy, script=Markup(script), style=Markup(style)
    )


def _own_file(name: str) -> str:
    text = resources.files("compsize.report").joinpath("templates", name).read_text(encoding="utf-8")
    return text.replace("\r\n", "\n")


def _is_ident(piece: object) -> bool:
    return isinstance(piece, Ident)


def _bars_markup(bars: Bars, ident: str) -> Markup:
    return Markup("\n".join(bars_svg(bars, size, f"{ident}-{size.name}") for size in (WIDE, NARROW)))


def _curves_markup(chart: CurveChart, ident: str) -> Markup:
    return Markup("\n".join(curves_svg(chart, size, f"{ident}-{size.name}") for size in (WIDE, NARROW)))


def _spans(groups: list[str]) -> list[tuple[str, int]]:
    """Neighbouring equal headings and how many columns each spans."""
    found: list[tuple[str, int]] = []
    for group in groups:
        if found and found[-1][0] == group:
            found[-1] = (group, found[-1][1] + 1)
        else:
            found.append((group, 1))
    return found
