"""The sections that only a sizing result has, from the key figures to the nose curves, as content."""

from __future__ import annotations

from collections.abc import Iterator

from compsize.plan.records import Plan, SizeResult
from compsize.report.answer import cost_decimals, currency_of, figures_of, mvar_decimals, state_labels
from compsize.report.blocks import Block, Cell, Column, Paragraph, Section, Table, Words
from compsize.report.cases import (
    bars_of,
    curves_of,
    details_table,
    margins_table,
    pair_up,
    worst_first,
)
from compsize.report.checks_content import proof_blocks, runners_up_table, verification_blocks, voltage_blocks
from compsize.report.shown import shown, shown_money
from compsize.report.words import DEVICES, amount

__all__ = ["sections_before_basis"]


def sections_before_basis(result: SizeResult) -> Iterator[Section]:
    """From the key figures to the runner-up plans, in reading order; a section without content is left out."""
    yield Section("figures", "Key figures", (figures_of(result),))
    yield Section("plan", "The plan", tuple(_plan_blocks(result)))
    labels = state_labels(result)
    if any(labels):
        yield Section("margins", "Margins by case", tuple(_margin_blocks(result, labels)))
        yield Section("noses", "Nose curves", tuple(_nose_blocks(result, labels)))
    if result.voltages:
        yield Section("voltages", "Voltage conditions", tuple(voltage_blocks(result)))
    heading = "Why nothing cheaper works" if result.status == "optimal" else "What was proved"
    yield Section("proof", heading, tuple(proof_blocks(result)))
    if result.plan is not None or result.verification is not None:
        yield Section("verification", "Verification", tuple(verification_blocks(result)))
    if result.runners_up:
        yield Section("runners_up", "Runner-up plans", (runners_up_table(result),))


def _plan_blocks(result: SizeResult) -> Iterator[Block]:
    plan = result.plan
    if plan is None:
        yield Paragraph(("There is no plan to show.",))
        return
    if not plan.rows:
        yield Paragraph(("Build nothing. The cost is 0.",))
        return
    places = mvar_decimals(plan)
    columns = (
        Column("site", "Site", "id"),
        Column("equipment", "Equipment", "id"),
        Column("kind", "Kind"),
        Column("steps", "New steps", "number"),
        Column("step_mvar", "Per step", "number", "Mvar", decimals=places),
        Column("total_mvar", "Added", "number", "Mvar", decimals=places),
    )
    rows = tuple(
        (
            Cell(row.site, row.site),
            Cell(row.equipment, row.equipment),
            Cell(row.kind, DEVICES.get(row.kind, row.kind)),
            Cell(row.steps, f"{row.steps:,}"),
            Cell(row.step_mvar, shown(row.step_mvar, places)),
            Cell(row.total_mvar, shown(row.total_mvar, places)),
        )
        for row in plan.rows
    )
    steps, mvar = sum(row.steps for row in plan.rows), sum(row.total_mvar for row in plan.rows)
    blank = Cell(None, "")
    total = (Cell("Total", "Total"), blank, blank, Cell(steps, f"{steps:,}"), blank, Cell(mvar, shown(mvar, places)))
    yield Table("plan", ("What to build",), columns, rows, total=total)
    yield _cost_table(result, plan)


def _cost_table(result: SizeResult, plan: Plan) -> Table:
    decimals, currency = cost_decimals(result), currency_of(result)
    columns = (
        Column("site", "Site", "id"),
        Column("item", "Item", "id"),
        Column("part", "What is paid"),
        Column("cost", "Cost", "number", currency, decimals=decimals),
    )
    site_costs = dict(plan.site_costs)
    rows = []
    for site in dict.fromkeys((*plan.sites, *site_costs)):
        for row in (row for row in plan.rows if row.site == site):
            part = f"{amount(row.steps, 'step')} and the fixed part of the equipment"
            cost = Cell(row.cost, shown(row.cost, decimals))
            rows.append((Cell(site, site), Cell(row.equipment, row.equipment), Cell(part, part), cost))
        if site in site_costs:
            cost = Cell(site_costs[site], shown(site_costs[site], decimals))
            rows.append((Cell(site, site), Cell(None, ""), Cell("site cost", "site cost, once"), cost))
    blank = Cell(None, "")
    total = (Cell("Total", "Total"), blank, blank, Cell(plan.cost, shown(plan.cost, decimals)))
    notes: tuple[Words, ...] = ()
    if result.cost is not None and abs(result.cost - plan.cost) > 1e-6 * max(1.0, abs(plan.cost)):
        stated = shown_money(result.cost, decimals, currency)
        notes = ((f"The cost of the plan is {stated}: it counts more than these lines, as the basis says.",),)
    return Table("costs", ("How its cost adds up",), columns, tuple(rows), total=total, notes=notes)


def _margin_blocks(result: SizeResult, labels: tuple[str, str]) -> Iterator[Block]:
    pairs = pair_up(result.cases_before, result.cases_after)
    if result.plan is None and result.cases_after:
        yield Paragraph(("No plan meets everything; “best reachable” shows how far the candidates go.",))
    yield bars_of(pairs, labels)
    yield margins_table("margins", ("Noses and margins by case",), pairs, labels, result.basis)
    if result.plan is not None and result.plan.rows:
        covered = any(case.case.startswith("bank:") for case in result.cases_after)
        yield Paragraph(
            (
                "The loss of the new equipment itself is among the cases."
                if covered
                else "The loss of the new equipment itself is not among the cases.",
            ),
        )


def _nose_blocks(result: SizeResult, labels: tuple[str, str]) -> Iterator[Block]:
    worst = [pair.last.case for pair in worst_first(pair_up(result.cases_before, result.cases_after))]
    charts = curves_of(result.curves, worst, (labels[0] or "Without the plan", labels[1] or "With the plan"))
    if charts is not None:
        yield charts
    for key, label, cases in (("after", labels[1], result.cases_after), ("before", labels[0], result.cases_before)):
        if label:
            caption = f"Where and how each case turns: {label[0].lower()}{label[1:]}"
            yield details_table(f"details_{key}", (caption,), cases, result.basis)
