"""The answer of a sizing run in a few words and figures, as content."""

from __future__ import annotations

from compsize.plan.records import Plan, SizeResult
from compsize.report.blocks import Figure, Figures, Ident, Quote, Tone, Words
from compsize.report.cases import miss_words, pair_up, worst_first
from compsize.report.shown import decimals_for, shown, shown_bound, shown_gap, shown_money
from compsize.report.words import PROOFS, STATUSES, amount

__all__ = ["answer_of", "cost_decimals", "currency_of", "figures_of", "mvar_decimals", "state_labels"]


def currency_of(result: SizeResult) -> str:
    """The currency as ``[report]`` states it, or nothing."""
    return dict(result.report).get("currency", "")


def cost_decimals(result: SizeResult) -> int:
    """Places for every cost of the report: none where all are whole."""
    costs = [result.cost, *(runner.cost for runner in result.runners_up)]
    if result.plan is not None:
        costs += [row.cost for row in result.plan.rows] + [cost for _, cost in result.plan.site_costs]
    return decimals_for(costs)


def state_labels(result: SizeResult) -> tuple[str, str]:
    """Headings of the states without and with the plan; empty where no case was evaluated in it."""
    after = "With the plan" if result.plan is not None else "Best reachable"
    return ("Without the plan" if result.cases_before else "", after if result.cases_after else "")


def answer_of(result: SizeResult) -> tuple[Tone, str, Words]:
    """Tone, status and one sentence that answers: what to build, at what cost, and how sure that is."""
    plan, cases = result.plan, result.cases_after
    missed = [pair.last for pair in worst_first(pair_up((), cases)) if not pair.last.met]
    worst: Words = ()
    if missed:
        verb = "misses" if len(missed) == 1 else "miss"
        worst = (
            f"{len(missed):,} of {amount(len(cases), 'case')} {verb} the required margin; the furthest from it, ",
            Ident(missed[0].case), ",", *miss_words(missed[0]),
        )  # fmt: skip
    if plan is None:
        status = STATUSES[result.status]
        if result.status == "unreachable":
            head = "No plan from the candidates, within the limits given, meets every requirement."
            tail: Words = (" With the best that can be reached, ", *worst, ".") if worst else ()
            return "bad", status, (head, *tail)
        bound = shown_bound(result.cost_bound, None, cost_decimals(result))
        least: Words = ()
        if bound:
            least = ("No plan can cost less than ", Quote(_with_currency(result, bound)), f"{_assuming(result)}. ")
        head = "The search stopped before it found a plan that meets every requirement. "
        return "warn", status, (head, *least, "Whether there is one remains open.")
    failed = result.verification is not None and not result.verification.passed
    if failed or missed or result.status in ("unreachable", "limit"):
        status = "The plan failed its verification" if failed else "The plan does not meet every requirement"
        if failed and result.verification is not None:
            worst = (Quote(result.verification.sentence), *((" ", *worst, ".") if worst else ()))
            return "bad", status, ("Do not build it as it stands: ", *worst)
        return "bad", status, ("The plan falls short: ", *worst, ".") if worst else ("The plan falls short.",)
    if not plan.rows:
        every = "Every case already keeps" if len(cases) != 1 else "The case already keeps"
        return "good", "Nothing to build", (
            f"{every} its required margin without new equipment, so the least-cost plan is to build nothing."
            f"{_voltages(result)}",
        )  # fmt: skip
    steps = sum(row.steps for row in plan.rows)
    mvar = shown(sum(row.total_mvar for row in plan.rows), mvar_decimals(plan))
    cost = shown_money(result.cost, cost_decimals(result), currency_of(result))
    build: Words = (
        f"Build {amount(steps, 'step')} ({mvar} Mvar) at {amount(len(plan.sites), 'site')} for ",
        Quote(cost),
        ": every case keeps" if len(cases) != 1 else ": the case keeps",
    )
    if result.status == "optimal":
        sure = f" its required margin, and no cheaper plan does that{_assuming(result)}.{_voltages(result)}"
        return "good", STATUSES["optimal"], (*build, sure)
    bound = shown_bound(result.cost_bound, result.cost, cost_decimals(result))
    rest = "a cheaper plan may exist."
    if bound and result.gap_pct is not None:
        gap = shown_gap(result.gap_pct)
        rest = f"a cheaper plan may exist, but none below {bound} (gap {gap} %){_assuming(result)}."
    return "warn", STATUSES["feasible"], (*build, f" its required margin; {rest}{_voltages(result)}")


def _voltages(result: SizeResult) -> str:
    """A sentence on the voltage conditions that are not met, such as those that also fail without the plan."""
    failing = sum(not check.met for check in result.voltages)
    if not failing:
        return ""
    return f" {amount(failing, 'voltage condition is', 'voltage conditions are')} not met and listed below."


def _assuming(result: SizeResult) -> str:
    """A bound is called what it is: one that rests on an assumption, tested on samples, says so."""
    tested = any(part.tests for part in result.proof.parts)
    return " on the assumption named with the proof" if result.proof.kind == "covers" or tested else ""


def _with_currency(result: SizeResult, text: str) -> str:
    currency = currency_of(result)
    return f"{currency}\N{NO-BREAK SPACE}{text}" if currency else text


def figures_of(result: SizeResult) -> Figures:
    """Cost, bound, gap, kind of proof, what is added and how many cases are met."""
    decimals, currency = cost_decimals(result), currency_of(result)
    none = "\N{EN DASH}"
    bound = shown_bound(result.cost_bound, result.cost, decimals)
    remark: Words = (f"no plan can cost less{_assuming(result)}",) if bound else ()
    figures = [
        Figure("Cost", shown(result.cost, decimals) or none, currency if result.cost is not None else ""),
        Figure("Lower bound", bound or none, currency if bound else "", remark),
        Figure("Gap", shown_gap(result.gap_pct) or none, "%" if result.gap_pct is not None else ""),
        Figure("Proof", PROOFS.get(result.proof.kind, (result.proof.kind, ""))[0]),
    ]
    if result.plan is not None:
        mvar = sum(row.total_mvar for row in result.plan.rows)
        sites = amount(len(result.plan.sites), "site")
        figures.append(Figure("Added", shown(mvar, mvar_decimals(result.plan)), "Mvar", (f"at {sites}",)))
    cases = result.cases_after or result.cases_before
    if cases:
        met = sum(case.met for case in cases)
        label = state_labels(result)[1 if result.cases_after else 0]
        figures.append(Figure("Cases met", f"{met:,} of {len(cases):,}", "", (label[0].lower() + label[1:],)))
    return Figures(tuple(figures))


def mvar_decimals(plan: Plan) -> int:
    """Places for Mvar that lose nothing of the plan's steps."""
    return decimals_for(value for row in plan.rows for value in (row.step_mvar, row.total_mvar))
