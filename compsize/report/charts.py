"""Charts of a report as inline vector drawings: text stays text, ids are fixed, colours have a second cue.

matplotlib draws with its own defaults, whatever the user's settings; what it writes is then reduced to
plain SVG elements that may stand several times in one HTML page.
"""

from __future__ import annotations

import io
import re
import warnings
import xml.etree.ElementTree as ET
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import matplotlib as mpl
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import FuncFormatter, MaxNLocator

from compsize.report.blocks import Bars, CurveChart

__all__ = ["NARROW", "WIDE", "bars_svg", "curves_svg"]

INK, QUIET, RULE = "#1f2326", "#5b6166", "#d9d6cf"
AFTER, BEFORE, PALE = "#0d4a57", "#b0571f", "#f0dcc9"
LONGEST_LABEL = 30

RC: Any = {
    "svg.fonttype": "none",
    "svg.hashsalt": "compsize",
    "text.parse_math": False,
    "font.family": "DejaVu Sans",
    "font.size": 12,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "hatch.linewidth": 1.2,
}


@dataclass(frozen=True)
class Format:
    """Width of a drawing in CSS pixels and what follows from it."""

    name: str
    width: int
    legend_columns: int
    labels_beside: bool


WIDE = Format("wide", 900, 5, True)
NARROW = Format("narrow", 350, 2, False)


def curves_svg(chart: CurveChart, size: Format, ident: str) -> str:
    """Nose curves of one case as an ``<svg>`` element whose ids start with ``ident``."""
    return _svg(lambda: _curves(chart, size), f"Nose curves, {chart.case}", chart.description, ident, size)


def bars_svg(bars: Bars, size: Format, ident: str) -> str:
    """Margins of the cases as an ``<svg>`` element whose ids start with ``ident``."""
    return _svg(lambda: _bars(bars, size), "Margins by case", bars.description, ident, size)


def _curves(chart: CurveChart, size: Format) -> Figure:
    head, height = (70, 420) if size.labels_beside else (104, 380)
    figure, axes = _figure(size.width, height, left=62, right=14, top=head, bottom=48)
    for curve in chart.curves:
        colour, dashes = (AFTER, "solid") if curve.after else (BEFORE, (0, (6, 3)))
        stop = curve.nose_index + 1
        axes.plot(curve.mw[:stop], curve.v_pu[:stop], color=colour, linestyle=dashes, linewidth=2.4, zorder=3)
        # The lower branch is no operating state: the same line, but thin.
        axes.plot(curve.mw[stop - 1 :], curve.v_pu[stop - 1 :], color=colour, linestyle=dashes, linewidth=1, zorder=3)
        face = colour if curve.after else "white"
        for point, shape, extent in ((curve.operating, "s", 7), (curve.required, "D", 7), (curve.nose, "o", 9)):
            if point is not None:
                axes.plot(
                    [point.mw], [point.v_pu], shape, markersize=extent, markerfacecolor=face,
                    markeredgecolor=colour, markeredgewidth=1.8, zorder=4,
                )  # fmt: skip
    low, high = axes.get_xlim()
    marks: list[tuple[float, str, Any, int]] = [(chart.operating_mw, "load today", (0, (1, 2)), 20)]
    if chart.required_mw is not None:
        marks.append((chart.required_mw, "required load", (0, (7, 2, 1, 2)), 5))
        high = max(high, chart.required_mw + 0.02 * (high - low))
    low = min(low, chart.operating_mw - 0.02 * (high - low))
    axes.set_xlim(low, high)
    for mw, words, dashes, lift in marks:
        axes.axvline(mw, color=INK, linewidth=1.1, linestyle=dashes, zorder=2)
        to_left = (mw - low) / (high - low) > 0.55
        axes.annotate(
            words, (mw, 1), (-4 if to_left else 4, lift), xycoords=axes.get_xaxis_transform(),
            textcoords="offset points", ha="right" if to_left else "left", fontsize=11, color=INK, zorder=6,
        )  # fmt: skip
    axes.set_xlabel("Load that grows [MW]")
    axes.set_ylabel("Voltage [pu]")
    _plain_ticks(axes, 5 if not size.labels_beside else 9)
    handles = [
        Line2D([], [], color=AFTER if c.after else BEFORE, linestyle="solid" if c.after else (0, (6, 3)),
               linewidth=2.4, label=c.label)
        for c in chart.curves
    ]  # fmt: skip
    for shape, words in (("s", "operating point"), ("D", "at required load"), ("o", "nose")):
        handles.append(Line2D([], [], color=INK, linestyle="none", marker=shape, markersize=7, label=words))
    _legend(figure, handles, size)
    return figure


def _bars(bars: Bars, size: Format) -> Figure:
    states = bars.has_before + bars.has_after
    thick = 11.0
    row_height = states * thick + (14 if size.labels_beside else 30)
    head = 36 if size.labels_beside else 50
    height = int(head + len(bars.rows) * row_height + 46)
    left = 216 if size.labels_beside else 12
    figure, axes = _figure(size.width, height, left=left, right=24, top=head, bottom=46)
    values = [v for row in bars.rows for v in (row.before, row.after, row.required, 0.0) if v is not None]
    low, high = min(values, default=0.0), max(values, default=1.0)
    room = 0.14 if size.labels_beside else 0.22  # for the figures at the ends of the bars
    span = (high - low) or 1.0
    axes.set_xlim(low - (room * span if low < 0 else 0), high + room * span)
    left_end, right_end = axes.get_xlim()
    per_pixel = (right_end - left_end) / (size.width - left - 24)
    for number, row in enumerate(bars.rows):
        top = number * row_height + (4 if size.labels_beside else 20)
        name = ("\N{BALLOT X} " if not row.met else "") + _label(row.case)
        if size.labels_beside:
            axes.annotate(
                name, (0, top + states * thick / 2), (-10, 0), xycoords=axes.get_yaxis_transform(),
                textcoords="offset points", ha="right", va="center", fontsize=12, zorder=6,
            )  # fmt: skip
        else:
            axes.annotate(
                name, (0, top), (0, 5), xycoords=axes.get_yaxis_transform(),
                textcoords="offset points", ha="left", va="baseline", fontsize=12, zorder=6,
            )  # fmt: skip
        at = top
        for shown, value, text, after in (
            (bars.has_before, row.before, row.before_text, False),
            (bars.has_after, row.after, row.after_text, True),
        ):
            if not shown:
                continue
            if value is not None:
                axes.barh(at + thick / 2, value, thick - 2, **_bar_style(after, bars), zorder=3)
                end, way = value, 1 if value >= 0 else -1
                if row.required is not None and 0 <= way * (row.required - value) < (7 * len(text) + 8) * per_pixel:
                    end = row.required  # the figure stands clear of the mark
                axes.annotate(
                    text, (end, at + thick / 2), (4 * way, 0), textcoords="offset points",
                    ha="left" if way > 0 else "right", va="center", fontsize=10, color=QUIET, zorder=6,
                )  # fmt: skip
            at += thick
        if row.required is not None:
            axes.plot([row.required] * 2, [top - 2, top + states * thick + 2], color=INK, linewidth=2.6, zorder=4)
    axes.set_ylim(len(bars.rows) * row_height, 0)
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    axes.axvline(0, color=QUIET, linewidth=1, zorder=4)
    axes.set_xlabel("Margin [MW]")
    _plain_ticks(axes, 5 if not size.labels_beside else 9, y_too=False)
    handles: list[Any] = []
    for shown, label, after in ((bars.has_before, bars.before_label, False), (bars.has_after, bars.after_label, True)):
        if shown:
            handles.append(Patch(label=label, **_bar_style(after, bars)))
    if any(row.required is not None for row in bars.rows):
        handles.append(
            Line2D(
                [], [], color=INK, linestyle="none", marker="|", markersize=13, markeredgewidth=2.6, label="required"
            )
        )
    _legend(figure, handles, size)
    return figure


def _bar_style(after: bool, bars: Bars) -> dict[str, Any]:
    if after or not bars.has_after:
        return {"facecolor": AFTER, "edgecolor": AFTER, "linewidth": 1.0}
    return {"facecolor": PALE, "edgecolor": BEFORE, "linewidth": 1.0, "hatch": "////"}


def _figure(width: int, height: int, *, left: int, right: int, top: int, bottom: int) -> tuple[Figure, Any]:
    """A figure in CSS pixels (1 pixel is one point of the drawing) with one pair of axes."""
    figure = Figure((width / 72, height / 72), dpi=72, facecolor="none")
    FigureCanvasSVG(figure)
    axes = figure.add_axes(
        (left / width, bottom / height, (width - left - right) / width, (height - top - bottom) / height),
        facecolor="none",
    )
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    axes.grid(axis="both", color=RULE, linewidth=0.8, zorder=0)
    axes.set_axisbelow(True)
    axes.tick_params(length=4, labelsize=11)
    return figure, axes


def _plain_ticks(axes: Any, most: int, y_too: bool = True) -> None:
    for axis in (axes.xaxis, axes.yaxis) if y_too else (axes.xaxis,):
        axis.set_major_locator(MaxNLocator(most, steps=[1, 2, 2.5, 5, 10]))
        axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.6g}".replace("-", "\N{MINUS SIGN}")))


def _legend(figure: Figure, handles: list[Any], size: Format) -> None:
    figure.legend(
        handles=handles, loc="upper left", bbox_to_anchor=(0, 1), ncols=min(size.legend_columns, len(handles)),
        frameon=False, fontsize=11, handlelength=2.2, columnspacing=1.2, borderaxespad=0.2, handletextpad=0.6,
    )  # fmt: skip


def _label(name: str) -> str:
    """A name short enough for an axis, without what an XML text cannot hold."""
    clean = re.sub(r"\s+", " ", name)
    clean = re.sub("[^\t\n\r\u0020-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]", "\ufffd", clean)
    return clean if len(clean) <= LONGEST_LABEL else clean[: LONGEST_LABEL - 1].rstrip() + "\N{HORIZONTAL ELLIPSIS}"


def _svg(draw: Callable[[], Figure], title: str, description: str, ident: str, size: Format) -> str:
    stream = io.StringIO()
    with mpl.rc_context(), warnings.catch_warnings():
        mpl.rcdefaults()
        mpl.rcParams.update(RC)
        # Names in scripts that the measuring font lacks: the reader's browser has the fonts for them.
        warnings.filterwarnings("ignore", message=r"Glyph .* missing from", category=UserWarning)
        nothing = dict.fromkeys(("Date", "Creator", "Format", "Type"))
        draw().savefig(stream, format="svg", metadata=nothing, transparent=True)
    root = ET.fromstring(stream.getvalue())
    _reduce(root, ident)
    for key in ("width", "height", "version"):
        root.attrib.pop(key, None)
    root.set("class", f"chart {size.name}")
    root.set("role", "img")
    root.set("aria-labelledby", f"{ident}-title {ident}-desc")
    for position, (tag, text) in enumerate((("title", title), ("desc", description))):
        element = ET.Element(tag, {"id": f"{ident}-{tag}"})
        element.text = re.sub("[^\t\n\r\u0020-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]", "\ufffd", text)
        element.tail = "\n"
        root.insert(position, element)
    return ET.tostring(root, encoding="unicode")


def _reduce(root: ET.Element, ident: str) -> None:
    """Drop namespaces, style sheets, fonts and idle ids; give the other ids the prefix of this drawing."""
    used: set[str] = set()
    for element in root.iter():
        for value in element.attrib.values():
            used.update(re.findall(r"#([\w.-]+)", value) if value.startswith("#") or "url(#" in value else ())
    for parent in list(root.iter()):
        for child in list(parent):
            if child.tag.endswith("}style") or child.tag.endswith("}metadata"):
                parent.remove(child)
    for element in root.iter():
        element.tag = element.tag.rpartition("}")[2]
        element.attrib = {key.rpartition("}")[2]: value for key, value in element.attrib.items()}
        own = element.attrib.pop("id", None)
        if own in used:
            element.set("id", f"{ident}-{own}")
        for key, value in element.attrib.items():
            if key == "href":
                element.set(key, f"#{ident}-{value[1:]}")
            elif "url(#" in value:
                element.set(key, re.sub(r"url\(#([\w.-]+)\)", rf"url(#{ident}-\1)", value))
        if element.tag == "text" and "style" in element.attrib:
            parts = (part for part in element.attrib["style"].split("; ") if not part.startswith("font-family"))
            element.set("style", "; ".join(parts))
