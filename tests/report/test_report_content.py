"""What a report says, before it is rendered."""

from __future__ import annotations

import dataclasses
from dataclasses import replace

import pytest
from sample_results import (
    AFTER,
    BEFORE,
    FAILED_VERIFICATION,
    FEASIBLE,
    LIMIT,
    MARGINS,
    NASTY,
    NOTHING,
    OPTIMAL,
    PLAN,
    SIZES,
    UNREACHABLE,
    case,
    nasty_result,
)

from compsize.plan.records import Plan, PlanRow, Proof, ProofPart, SizeResult, VoltageCheck
from compsize.report.blocks import Bars, CurveCharts, Figures, Ident, Items, Notice, Page, Quote, Table, plain
from compsize.report.content import page_of
from compsize.report.words import CAUTIONS


def blocks_of(page: Page) -> list[object]:
    return [block for section in page.sections for block in section.blocks]


def table(page: Page, key: str) -> Table:
    return next(block for block in blocks_of(page) if isinstance(block, Table) and block.key == key)


def figures(page: Page) -> dict[str, str]:
    block = next(block for block in blocks_of(page) if isinstance(block, Figures))
    return {figure.label: f"{figure.text} {figure.unit}".strip() for figure in block.figures}


def column(block: Table, key: str, group: str = "") -> list[str]:
    at = next(i for i, c in enumerate(block.columns) if c.key == key and (not group or c.group == group))
    return [row[at].text for row in block.rows]


@pytest.mark.parametrize(
    ("result", "tone", "status", "sentence"),
    [
        (OPTIMAL, "good", "Least-cost plan, proved",
         "Build 4 steps (65 Mvar) at 2 sites for EUR\N{NO-BREAK SPACE}4,430,000: every case keeps its required margin, "
         "and no cheaper plan does that."),
        (FEASIBLE, "warn", "Plan found, least cost not proved",
         "Build 4 steps (65 Mvar) at 2 sites for EUR\N{NO-BREAK SPACE}4,430,000: every case keeps its required margin; "
         "a cheaper plan may exist, but none below 4,150,000 (gap 6.33 %) on the assumption named with the proof."),
        (NOTHING, "good", "Nothing to build",
         "Every case already keeps its required margin without new equipment, so the least-cost plan is to build "
         "nothing."),
        (UNREACHABLE, "bad", "The requirement cannot be met",
         "No plan from the candidates, within the limits given, meets every requirement. With the best that can be "
         "reached, 2 of 6 cases miss the required margin; the furthest from it, Tarnside transformer T1, "
         "has no located nose."),
        (LIMIT, "warn", "Stopped before a plan was found",
         "The search stopped before it found a plan that meets every requirement. No plan can cost less than "
         "EUR\N{NO-BREAK SPACE}1,730,000. Whether there is one remains open."),
        (FAILED_VERIFICATION, "bad", "The plan failed its verification",
         "Do not build it as it stands: The second code disagrees with the search."),
    ],
    ids=list(SIZES),
)  # fmt: skip
def test_answer(result: SizeResult, tone: str, status: str, sentence: str) -> None:
    """Each status has its answer in one or two plain sentences at the top."""
    page = page_of(result)
    assert (page.tone, page.status, plain(page.answer)) == (tone, status, sentence)


def test_plan_that_misses_is_never_praised() -> None:
    """Whatever the status says, a plan with a case that misses is reported as falling short."""
    for status in ("optimal", "feasible", "unreachable"):
        page = page_of(replace(OPTIMAL, status=status, cases_after=(*AFTER[:3], case("Oakmere-Tarnside", 11.999))))
        assert (page.tone, page.status) == ("bad", "The plan does not meet every requirement")
        assert plain(page.answer) == (
            "The plan falls short: 1 of 4 cases misses the required margin; the furthest from it, Oakmere-Tarnside, "
            "has 11.99 MW where 12.00 MW are required."
        )


def test_voltage_misses_are_in_the_answer() -> None:
    """A voltage condition that is not met, though the plan is accepted, is told in the first lines."""
    checks = (VoltageCheck("intact_min_pu", "intact", "A", 0.94, 0.95, "pu", False, "also without the plan"),)
    for result in (OPTIMAL, FEASIBLE, NOTHING):
        answer = plain(page_of(replace(result, voltages=checks)).answer)
        assert answer.endswith(". 1 voltage condition is not met and listed below.")


def test_bound_on_a_sampled_assumption_says_so() -> None:
    """A bound that rests on covers carries that with it; one from complete enumeration does not."""
    covers = replace(OPTIMAL, proof=Proof("covers", "", 3, (ProofPart("covers", 3, "monotone", 10, 0),)))
    assert plain(page_of(covers).answer).endswith("no cheaper plan does that on the assumption named with the proof.")
    assert "assumption" not in plain(page_of(replace(OPTIMAL, proof=Proof("full", ""))).answer)


def test_margins_answer() -> None:
    """The shorter page says how many cases miss, or which is tightest, or that nothing was required."""
    assert plain(page_of(MARGINS).answer) == (
        "2 of 6 cases miss the required margin. The furthest from it, Oakmere-Tarnside, has \N{MINUS SIGN}4.26 MW "
        "where 12.00 MW are required."
    )
    met = page_of(replace(MARGINS, cases=AFTER))
    assert met.status == "Requirement met"
    assert plain(met.answer) == (
        "All 8 cases keep the required margin. The tightest, Oakmere-Tarnside, has 12.00 MW "
        "where 12.00 MW are required."
    )
    free = page_of(replace(MARGINS, cases=(case("intact", 30.0, None),)))
    assert (free.status, plain(free.answer)) == (
        "Margins computed",
        "1 nose computed; the study states no requirement for them.",
    )
    assert page_of(replace(MARGINS, cases=())).status == "No case"


def test_key_figures() -> None:
    """Cost, bound, gap, kind of proof, Mvar and cases stand first; without a plan they are dashes, not zeros."""
    assert figures(page_of(OPTIMAL)) == {
        "Cost": "4,430,000 EUR", "Lower bound": "4,430,000 EUR", "Gap": "0.00 %", "Proof": "by several means",
        "Added": "65 Mvar", "Cases met": "8 of 8",
    }  # fmt: skip
    found = figures(page_of(UNREACHABLE))
    assert (found["Cost"], found["Lower bound"], found["Gap"]) == ("\N{EN DASH}", "\N{EN DASH}", "\N{EN DASH}")
    assert figures(page_of(NOTHING))["Cost"] == "0 EUR"


def test_cost_lines_add_up() -> None:
    """The cost of the plan is shown line by line, site costs included, and the total is their sum."""
    block = table(page_of(OPTIMAL), "costs")
    values = [row[-1].value for row in block.rows]
    assert values == [1_330_000.0, 400_000.0, 2_450_000.0, 250_000.0]
    assert (block.total[-1].value, block.total[-1].text) == (4_430_000.0, "4,430,000")
    assert not block.notes


def test_cost_that_counts_more_than_its_lines_says_so() -> None:
    """Where the cost is no plain sum (present value over stages), the table says that."""
    block = table(page_of(replace(OPTIMAL, cost=5_000_000.0)), "costs")
    assert "The cost of the plan is EUR\N{NO-BREAK SPACE}5,000,000" in plain(block.notes[0])


def test_margin_table_marks_the_binding_case() -> None:
    """Cases are joined by name, worst first; the one met with least to spare is marked, a new case has no before."""
    block = table(page_of(OPTIMAL), "margins")
    assert column(block, "case")[:3] == ["Oakmere-Tarnside", "bank:Oakmere 110:MSC-15", "bank:Tarnside 33:SVC-20"]
    assert block.marks == ("binding", *[""] * 7)
    assert column(block, "margin_mw", "Without the plan")[:2] == ["\N{MINUS SIGN}4.26", "\N{EN DASH}"]
    assert column(block, "margin_mw", "With the plan")[:2] == ["12.00", "12.77"]
    assert column(block, "met", "Without the plan")[0] == "no"


def test_no_case_binds_while_one_misses() -> None:
    """While a case misses its requirement that is what is marked, and no other."""
    marks = table(page_of(UNREACHABLE), "margins").marks
    assert marks == ("not met", "not met", "", "", "", "")


def test_open_end_is_not_shown_as_a_nose() -> None:
    """Where no turn was found, nose and margin are shown as at least that much."""
    block = table(page_of(MARGINS), "margins")
    at = column(block, "case").index("Fellhead unit 2")
    assert column(block, "margin_mw")[at] == "\N{GREATER-THAN OR EQUAL TO}\N{NARROW NO-BREAK SPACE}31.70"


@pytest.mark.parametrize("result", [*SIZES.values(), MARGINS], ids=[*SIZES, "margins"])
def test_shown_margins_read_as_their_verdict(result: SizeResult) -> None:
    """In every margin table the shown margin reaches the shown requirement exactly where the verdict is yes."""
    block = table(page_of(result), "margins")
    keys = [c.key for c in block.columns]
    required = keys.index("required_mw")
    seen = 0
    for row in block.rows:
        for at in (i for i, key in enumerate(keys) if key == "margin_mw"):
            if isinstance(row[at].value, float):
                text = row[at].text.lstrip("\N{GREATER-THAN OR EQUAL TO}\N{NARROW NO-BREAK SPACE}")
                margin = float(text.replace("\N{MINUS SIGN}", "-"))
                assert (margin >= float(row[required].text)) == (row[at + 1].text == "yes")
                seen += 1
    assert seen >= 4


def test_voltage_just_over_a_limit_is_shown_over_it() -> None:
    """A voltage that misses by less than the last place is still shown beyond the limit, upward or downward."""
    checks = (
        VoltageCheck("intact_max_pu", "intact", "A", 1.05000001, 1.05, "pu", False),
        VoltageCheck("post_outage_min_pu", "o", "B", 0.89999999, 0.90, "pu", False),
    )
    block = table(page_of(replace(OPTIMAL, voltages=checks)), "voltages")
    assert sorted(zip(column(block, "value"), column(block, "limit"), strict=True)) == [
        ("0.8999", "0.9000"),
        ("1.0501", "1.0500"),
    ]


def test_many_voltages_are_cut_aloud() -> None:
    """Beyond 200 conditions the nearest to their limits are shown, every miss among them, and the page says so."""
    checks = tuple(VoltageCheck("intact_max_pu", f"c{i}", "A", 1.0 + i * 1e-4, 1.05, "pu", i < 350) for i in range(360))
    block = table(page_of(replace(OPTIMAL, voltages=checks)), "voltages")
    assert len(block.rows) == 200
    assert column(block, "met")[:11] == ["no"] * 10 + ["yes"]
    assert "The 200 nearest to their limits of 360; result.json has them all." in [plain(n) for n in block.notes]


def test_bars_are_cut_aloud() -> None:
    """The bar chart shows the worst 24 cases and says how many there are."""
    cases = tuple(case(f"c{i:03}", 12.0 + i) for i in range(100))
    page = page_of(replace(OPTIMAL, cases_before=(), cases_after=tuple(reversed(cases))))
    bars = next(b for b in blocks_of(page) if isinstance(b, Bars))
    assert [row.case for row in bars.rows] == [f"c{i:03}" for i in range(24)]
    assert plain(bars.remarks[0]) == "The 24 worst of 100 cases; the table has them all."
    assert len(table(page, "margins").rows) == 100


def test_curves_start_with_the_binding_case() -> None:
    """The binding case's curves come up first, with operating point, required point and nose."""
    charts = next(b for b in blocks_of(page_of(OPTIMAL)) if isinstance(b, CurveCharts))
    assert charts.charts[charts.first].case == "Oakmere-Tarnside"
    chart = charts.charts[charts.first]
    before, after = chart.curves
    assert (chart.operating_mw, chart.required_mw) == (240.0, 252.0)
    assert before.operating is None
    assert before.required is None
    assert after.operating is not None
    assert after.required is not None
    assert after.required.mw == 252.0
    # The lossless two-bus nose voltage, V = E / ((1 - BX) sqrt(2 (1 + sin phi))) (Van Cutsem and Vournas 1998),
    # with 1 - BX = 235.73888 / 252.00384 and sin phi = sqrt(1 - 0.95^2).
    assert after.nose.v_pu == pytest.approx(0.617272 * 252.00384 / 235.73888, abs=2e-6)
    # 0.00384 MW above the required load: the square-root law near the fold puts the point just above the nose.
    assert after.nose.v_pu < after.required.v_pu < after.nose.v_pu + 0.01


def test_limit_names_of_devices_are_cut_aloud() -> None:
    """Six devices at a limit are named and the rest counted; the cell keeps them all."""
    block = table(page_of(MARGINS), "details")
    at = column(block, "case").index("Fellhead unit 2")
    cell = block.rows[at][[c.key for c in block.columns].index("limited_devices")]
    assert (cell.parts, cell.text) == (tuple(f"G{i}" for i in range(1, 7)), "and 4 more")
    assert str(cell.value).split() == [f"G{i}" for i in range(1, 11)]


def test_missing_verification_is_said() -> None:
    """A plan without a verification carries a warning in its place."""
    notices = [b for b in blocks_of(page_of(replace(OPTIMAL, verification=None))) if isinstance(b, Notice)]
    assert [plain(n.words) for n in notices] == ["This plan was not checked by a second code."]


def test_every_margin_table_states_its_basis() -> None:
    """Load direction, power factor, pick-up and the rest stand with every table of noses, margins or voltages."""
    tables = {b.key: b for b in blocks_of(page_of(OPTIMAL)) if isinstance(b, Table)}
    for key in ("margins", "details_before", "details_after", "voltages"):
        assert tables[key].basis == OPTIMAL.basis


@pytest.mark.parametrize("result", [*SIZES.values(), MARGINS], ids=[*SIZES, "margins"])
def test_every_page_carries_all_cautions(result: SizeResult) -> None:
    """All nine cautions are on every page, and so are the inputs' hash and the version."""
    page = page_of(result)
    assert len(CAUTIONS) == 9
    section = next(s for s in page.sections if s.key == "cautions")
    listed = section.blocks[-1]
    assert isinstance(listed, Items)
    assert len(listed.items) == 9
    assert dict(page.colophon)["Program"] == "compsize 0.1.0"
    assert dict(page.colophon)["Inputs (SHA-256)"] == result.study_hash


def strings_in(value: object) -> list[str]:
    """Plain strings of the content that are not names, quotes or cells of a names column."""
    if isinstance(value, str):
        return [value]
    if isinstance(value, (Ident, Quote)):
        return []
    if isinstance(value, tuple):
        return [text for item in value for text in strings_in(item)]
    return []


def test_study_text_is_kept_apart_from_the_page_s_words() -> None:
    """No sentence of the report has a name of the study melted into it."""
    page = page_of(nasty_result())
    found = strings_in(page.answer) + strings_in(page.detail)
    for block in blocks_of(page):
        for name in ("words", "remarks", "items", "pairs", "notes", "caption"):
            found += strings_in(getattr(block, name, ()))
        if isinstance(block, CurveCharts):
            found += [text for chart in block.charts for text in strings_in(chart.remarks)]
    assert len(found) > 20
    assert not [text for text in found for name in NASTY if name in text]


def test_unknown_kinds_are_shown_as_they_are() -> None:
    """A proof, a condition or an equipment of a kind without fixed words is still shown."""
    odd = replace(
        OPTIMAL,
        proof=Proof("other means", "Said so."),
        voltages=(VoltageCheck("own_rule_max_pu", "intact", "A", 1.0, 1.1, "pu", True),),
        plan=Plan((PlanRow("A", "B", "reactor", 1, 5.5, 5.5, 10.25),)),
        cost=10.25,
        cost_bound=10.25,
    )
    page = page_of(odd)
    assert figures(page)["Proof"] == "other means"
    assert figures(page)["Cost"] == "10.25 EUR"
    assert column(table(page, "voltages"), "name") == ["own_rule_max_pu"]
    assert column(table(page, "plan"), "kind") == ["reactor"]
    assert column(table(page, "plan"), "total_mvar") == ["5.50"]


def test_content_is_plain_values() -> None:
    """The content holds nothing but frozen records, tuples, text and numbers, so any renderer can read it."""

    def check(value: object) -> None:
        if dataclasses.is_dataclass(value):
            assert vars(type(value))["__dataclass_params__"].frozen
            for item in dataclasses.fields(value):
                check(getattr(value, item.name))
        elif isinstance(value, tuple):
            for part in value:
                check(part)
        else:
            assert value is None or type(value) in (str, int, float, bool)

    check(page_of(OPTIMAL))
    check(page_of(MARGINS))
    assert page_of(OPTIMAL) == page_of(dataclasses.replace(OPTIMAL, seconds=99.0))


def test_before_only_case_is_kept() -> None:
    """A case that exists only without the plan is still in the table."""
    block = table(page_of(replace(OPTIMAL, cases_before=(*BEFORE, case("old", 50.0)))), "margins")
    at = column(block, "case").index("old")
    assert column(block, "margin_mw", "With the plan")[at] == "\N{EN DASH}"


def test_runner_up_against_the_plan() -> None:
    """Runner-up plans name their rows and their difference in cost."""
    block = table(page_of(OPTIMAL), "runners_up")
    assert [row[0].parts for row in block.rows] == [
        ("Oakmere 110: 5 \N{MULTIPLICATION SIGN} MSC-15",),
        ("Tarnside 33: 2 \N{MULTIPLICATION SIGN} SVC-20",),
    ]
    assert column(block, "more") == ["\N{MINUS SIGN}2,080,000", "+120,000"]
    assert column(block, "meets") == ["no", "yes"]


def test_plan_rows() -> None:
    """The plan's table has its rows, kinds in words and totals."""
    block = table(page_of(OPTIMAL), "plan")
    assert column(block, "kind") == ["capacitor bank", "SVC"]
    assert [cell.text for cell in block.total] == ["Total", "", "", "4", "", "65"]
    assert len(block.rows) == len(PLAN.rows)
