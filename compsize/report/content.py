"""The content of a report: headings, sentences, tables and chart data, without any rendering.

:func:`page_of` is a pure function of the result: no clock, no environment, no randomness.
"""

from __future__ import annotations

from collections.abc import Sequence

from compsize.plan.records import CaseMargin, MarginsResult, SizeResult
from compsize.report.answer import answer_of
from compsize.report.blocks import (
    Block,
    Figure,
    Figures,
    Ident,
    Items,
    Page,
    Pairs,
    Paragraph,
    Quote,
    Section,
    Tone,
    Words,
)
from compsize.report.cases import (
    bars_of,
    details_table,
    margins_table,
    miss_words,
    mw_decimals,
    pair_up,
    surplus,
    worst_first,
)
from compsize.report.shown import shown_pair
from compsize.report.size_content import sections_before_basis
from compsize.report.words import CAUTIONS, amount

__all__ = ["page_of"]


def page_of(result: SizeResult | MarginsResult) -> Page:
    """The page for a result of ``compsize size`` or ``compsize margins``, whatever its status."""
    if isinstance(result, SizeResult):
        return _size_page(result)
    return _margins_page(result)


def _size_page(result: SizeResult) -> Page:
    tone, status, answer = answer_of(result)
    labels = tuple(
        (name, words)
        for key, name in (
            ("project", "Project"),
            ("author", "Author"),
            ("currency", "Currency"),
            ("price_year", "Prices of"),
        )
        if (words := dict(result.report).get(key, ""))
    )
    own_notes = dict(result.report).get("notes", "")
    notes = (*((own_notes,) if own_notes else ()), *result.notes)
    return Page(
        "size",
        result.title or "Untitled study",
        labels,
        tone,
        status,
        answer,
        (Quote(result.sentence),) if result.sentence else (),
        (*sections_before_basis(result), *_closing(result.basis, notes)),
        _colophon(result),
    )


def _margins_page(result: MarginsResult) -> Page:
    cases = result.cases
    missed = [pair.last for pair in worst_first(pair_up(cases, ())) if not pair.last.met]
    asked = [case for case in cases if case.required_mw is not None]
    tone: Tone = "bad" if missed else "good"
    answer: Words
    if not cases:
        tone, status, answer = "warn", "No case", ("The study lists no case, so there is nothing to report.",)
    elif missed:
        status = "Requirement not met"
        count = amount(len(cases), "case")
        answer = (
            f"{len(missed):,} of {count} {'misses' if len(missed) == 1 else 'miss'} the required margin. ",
            "The furthest from it, ",
            Ident(missed[0].case),
            ",",
            *miss_words(missed[0]),
            ".",
        )
    elif asked:
        status = "Requirement met"
        whole = "The one case keeps" if len(cases) == 1 else f"All {len(cases):,} cases keep"
        tightest = min(asked, key=surplus)
        answer = (f"{whole} the required margin. The tightest, ", Ident(tightest.case), ",", *miss_words(tightest), ".")
    else:
        tone, status = "plain", "Margins computed"
        answer = (f"{amount(len(cases), 'nose')} computed; the study states no requirement for them.",)
    labels = ("Without new equipment", "")
    pairs = pair_up(cases, ())
    margins: tuple[Block, ...] = (
        _margin_figures(cases),
        bars_of(pairs, labels),
        margins_table("margins", ("Noses and margins by case",), pairs, labels, result.basis),
        details_table("details", ("Where and how each case turns",), cases, result.basis),
    )
    return Page(
        "margins",
        result.title or "Untitled study",
        (),
        tone,
        status,
        answer,
        (),
        (*((Section("margins", "Margins", margins),) if cases else ()), *_closing(result.basis, result.notes)),
        _colophon(result),
    )


def _margin_figures(cases: Sequence[CaseMargin]) -> Figures:
    decimals = mw_decimals(cases)
    found = [case for case in cases if case.margin_mw is not None]
    least = min(found, key=lambda case: case.margin_mw or 0.0, default=None)
    figures = [Figure("Cases", f"{len(cases):,}"), Figure("Not met", f"{sum(not case.met for case in cases):,}")]
    if least is not None:
        text = shown_pair(least.margin_mw, least.required_mw, least.met, decimals)[0]
        figures.append(Figure("Smallest margin", text, "MW", (Ident(least.case),)))
    unlocated = len(cases) - len(found)
    if unlocated:
        figures.append(Figure("Not located", f"{unlocated:,}", "", ("no nose, so not met",)))
    return Figures(tuple(figures))


def _closing(basis: Sequence[tuple[str, str]], notes: Sequence[str]) -> list[Section]:
    sections = []
    if basis:
        pairs = Pairs(tuple(((Quote(name),), (Quote(words),)) for name, words in basis))
        sections.append(Section("basis", "What every table rests on", (pairs,)))
    if notes:
        items = Items(tuple(("", (Quote(note),)) for note in notes))
        sections.append(Section("notes", "Notes", (items,)))
    cautions = Items(tuple((lead, (text,)) for lead, text in CAUTIONS), numbered=True)
    lead = Paragraph(("These hold for every result of this program.",))
    sections.append(Section("cautions", "Cautions", (lead, cautions)))
    return sections


def _colophon(result: SizeResult | MarginsResult) -> tuple[tuple[str, str], ...]:
    return (
        ("Program", f"compsize {result.version}"),
        ("Inputs (SHA-256)", result.study_hash),
        ("Work", _work(result)),
    )


def _work(result: SizeResult | MarginsResult) -> str:
    counts = result.counts
    named = (
        (counts.noses, "nose"),
        (counts.factorisations, "factorisation"),
        (counts.master_solves, "master solve"),
        (counts.relaxations, "relaxation"),
        (counts.plans_walked, "plan walked"),
        (counts.noses_traced, "nose traced again"),
        (counts.fallbacks, "fallback"),
    )
    plural = {"plan walked": "plans walked", "nose traced again": "noses traced again"}
    said = [amount(number, one, plural.get(one, "")) for number, one in named if number]
    return ", ".join(said) or "none"
