"""Voltage conditions, proof, verification and runner-up plans of a sizing result, as content."""

from __future__ import annotations

from collections.abc import Iterator

from compsize.plan.records import SizeResult, VoltageCheck
from compsize.report.answer import cost_decimals, currency_of, mvar_decimals
from compsize.report.blocks import Block, Cell, Column, Items, Notice, Paragraph, Quote, Table, Words
from compsize.report.shown import Sense, shown, shown_pair
from compsize.report.words import CONDITIONS, PROOFS, amount

__all__ = ["proof_blocks", "runners_up_table", "verification_blocks", "voltage_blocks"]

MOST_VOLTAGES = 200


def voltage_blocks(result: SizeResult) -> Iterator[Block]:
    checks = sorted(result.voltages, key=lambda check: (check.met, _room(check)))
    failing = sum(not check.met for check in checks)
    said = "All are met." if not failing else f"{amount(failing, 'is', 'are')} not met."
    yield Paragraph((f"{amount(len(checks), 'condition')} checked. {said}",))
    columns = (
        Column("name", "Condition"),
        Column("case", "Case", "id"),
        Column("bus", "Bus", "id"),
        Column("value", "Value", "number"),
        Column("limit", "Limit", "number"),
        Column("unit", "Unit"),
        Column("met", "Met", "verdict"),
        Column("note", "Remark", "quote"),
    )
    rows = []
    for check in checks[: max(MOST_VOLTAGES, failing)]:
        places = 4 if check.unit == "pu" else 2
        value, limit = shown_pair(check.value, check.limit, check.met, places, _sense(check))
        verdict = "yes" if check.met else "no"
        name = CONDITIONS.get(check.name, check.name)
        rows.append(
            (
                Cell(name, name),
                Cell(check.case, check.case),
                Cell(check.bus, check.bus),
                Cell(check.value, value),
                Cell(check.limit, limit),
                Cell(check.unit, check.unit),
                Cell(verdict, verdict, "good" if check.met else "bad"),
                Cell(check.note, check.note),
            )
        )
    notes: list[Words] = [("Sorted by the room that is left.",)]
    if len(rows) < len(checks):
        notes.append((f"The {len(rows):,} nearest to their limits of {len(checks):,}; result.json has them all.",))
    yield Table(
        "voltages", ("Voltages against their limits",), columns, tuple(rows), notes=tuple(notes), basis=result.basis
    )


def _sense(check: VoltageCheck) -> Sense:
    return "at least" if "min" in check.name.split("_") else "at most"


def _room(check: VoltageCheck) -> float:
    """What is left to the limit, as a share of it."""
    left = check.value - check.limit if _sense(check) == "at least" else check.limit - check.value
    return left / max(abs(check.limit), 1e-12)


def proof_blocks(result: SizeResult) -> Iterator[Block]:
    proof = result.proof
    if proof.sentence:
        yield Paragraph((Quote(proof.sentence),))
    meaning = PROOFS.get(proof.kind, ("", ""))[1]
    if meaning:
        yield Paragraph((meaning,))
    if proof.cheaper_plans is not None:
        cheaper = amount(proof.cheaper_plans, "plan costs", "plans cost")
        reference = "than the plan" if result.plan is not None else "than the bound"
        yield Paragraph((f"{cheaper} less {reference}.",))
    if proof.parts:
        columns = (
            Column("means", "Excluded by", "quote"),
            Column("plans", "Plans", "number"),
            Column("assumption", "Assumes", "quote"),
            Column("tests", "Tests of it", "number"),
            Column("tests_failed", "Tests failed", "number"),
        )
        rows = tuple(
            (
                Cell(part.means, part.means),
                Cell(part.plans, f"{part.plans:,}"),
                Cell(part.assumption, part.assumption),
                Cell(part.tests, f"{part.tests:,}"),
                Cell(part.tests_failed, f"{part.tests_failed:,}", "bad" if part.tests_failed else "plain"),
            )
            for part in proof.parts
        )
        yield Table("proof", ("What the proof is made of",), columns, rows)
    if proof.traced:
        flips = "none changed a verdict" if not proof.flips else f"{amount(proof.flips, 'verdict')} changed"
        tail = "." if not proof.flips else "; each was corrected, and the check was widened."
        yield Paragraph(
            (f"{amount(proof.traced, 'deciding nose')} traced again from the operating point: {flips}{tail}",)
        )


def verification_blocks(result: SizeResult) -> Iterator[Block]:
    check = result.verification
    if check is None:
        yield Notice("warn", ("This plan was not checked by a second code.",))
        return
    if check.passed:
        yield Paragraph((f"Passed, {amount(check.cases, 'case')}. ", Quote(check.sentence)))
    else:
        yield Notice("bad", ("Failed. ", Quote(check.sentence)))
    if check.failures:
        yield Items(tuple(("", (Quote(failure),)) for failure in check.failures))
    yield Paragraph((f"Largest power mismatch: {check.worst_residual_mva:.1e} MVA.",), small=True)
    if check.one_step_fewer:
        decimals = cost_decimals(result)
        columns = (
            Column("site", "Site", "id"),
            Column("equipment", "Equipment", "id"),
            Column("steps", "Steps then", "number"),
            Column("cost", "Cost then", "number", currency_of(result), decimals=decimals),
            Column("breaks", "What breaks, or why it saves nothing", "quote"),
        )
        rows = tuple(
            (
                Cell(step.site, step.site),
                Cell(step.equipment, step.equipment),
                Cell(step.steps, f"{step.steps:,}"),
                Cell(step.cost, shown(step.cost, decimals)),
                Cell(step.breaks, step.breaks),
            )
            for step in check.one_step_fewer
        )
        yield Table("one_step_fewer", ("One step fewer",), columns, rows)


def runners_up_table(result: SizeResult) -> Table:
    decimals = cost_decimals(result)
    currency = currency_of(result)
    columns = [
        Column("plan", "Plan", "id"),
        Column("total_mvar", "Added", "number", "Mvar"),
        Column("cost", "Cost", "number", currency, decimals=decimals),
        *(
            [Column("more", "Against the plan", "number", currency, decimals=decimals)]
            if result.cost is not None
            else []
        ),
        Column("meets", "Meets all", "verdict"),
        Column("note", "Remark", "quote"),
    ]
    rows = []
    for runner in result.runners_up:
        parts = tuple(f"{row.site}: {row.steps} \N{MULTIPLICATION SIGN} {row.equipment}" for row in runner.plan.rows)
        mvar = sum(row.total_mvar for row in runner.plan.rows)
        row = [
            Cell(", ".join(parts), "" if parts else "build nothing", parts=parts),
            Cell(mvar, shown(mvar, mvar_decimals(runner.plan))),
            Cell(runner.cost, shown(runner.cost, decimals)),
        ]
        if result.cost is not None:
            more = runner.cost - result.cost
            row.append(Cell(more, ("+" if more > 0 else "") + shown(more, decimals)))
        verdict = "yes" if runner.meets else "no"
        row += [Cell(verdict, verdict, "good" if runner.meets else "bad"), Cell(runner.note, runner.note)]
        rows.append(tuple(row))
    return Table("runners_up", ("Other plans, for comparison",), tuple(columns), tuple(rows))
