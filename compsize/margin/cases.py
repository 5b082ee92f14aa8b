"""The cases of a study, what each must keep, and a nose in names and MW."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from compsize.network.cases import CaseModel
from compsize.network.grid import Grid
from compsize.network.plans import Choice
from compsize.nose.engine import LIMIT, NONE, UNRESOLVED, Nose
from compsize.plan.records import CaseMargin
from compsize.study.records import Requirement, Study

INTACT = "intact"
BANK_OUTAGE = "bank_outage"
MARGIN_TOLERANCE = 1e-6


@dataclass(frozen=True)
class CaseSpec:
    """One case: its name, class, what is lost, and which steps of which choice are lost with it."""

    name: str
    klass: str
    elements: tuple[tuple[str, str], ...] = ()
    choice: int = -1
    """Index of the choice whose steps a bank outage loses, else -1."""


def listed_cases(study: Study) -> tuple[CaseSpec, ...]:
    """The intact network and every listed event, in file order (bank outages depend on the plan)."""
    events = (CaseSpec(e.name, e.klass, e.elements) for e in study.contingencies.events)
    return (CaseSpec(INTACT, INTACT), *events)


def bank_cases(study: Study, choices: Sequence[Choice], new: Sequence[int]) -> tuple[CaseSpec, ...]:
    """Loss of one installed step of a bank, or of a whole SVC or STATCOM, for each equipment with new steps."""
    if study.contingencies.bank_outage == "none":
        return ()
    return tuple(
        CaseSpec(f"bank:{choice.name}", BANK_OUTAGE, (), k)
        for k, (choice, steps) in enumerate(zip(choices, new, strict=True))
        if steps > 0
    )


def steps_lost(study: Study, choice: Choice, new: int) -> int:
    """Steps that the bank outage of ``choice`` loses out of ``new`` steps and the existing ones."""
    if study.contingencies.bank_outage == "site":
        return new
    return 1 if choice.candidate.equipment.kind == "bank" else new + choice.existing


def _base_of(grid: Grid, spec: CaseSpec, model: CaseModel, of: str) -> float:
    """Positive MW of a requirement's base in one case, without what its outage loses or cuts off."""
    if of == "total":
        return model.total_mw
    lost = {element for kind, element in spec.elements if kind == "load"}
    served = ~model.dead[grid.load_bus] & ~np.array([name in lost for name in grid.tables.loads.load], dtype=bool)
    positive = np.maximum(grid.load_p, 0.0)
    if of.startswith("area:"):
        area = of[5:]
        inside = np.array([grid.tables.buses.area[k] == area for k in grid.load_bus], dtype=bool)
        return float(positive[served & inside].sum())
    grows = set(grid.growth.loads)
    inside = np.array([name in grows for name in grid.tables.loads.load], dtype=bool)
    return float(positive[served & inside].sum())


def applies(requirement: Requirement, spec: CaseSpec) -> bool:
    """Whether a requirement covers a case."""
    if requirement.cases == "outages":
        return spec.name != INTACT
    if requirement.cases == INTACT:
        return spec.name == INTACT
    return spec.name != INTACT and requirement.cases == spec.klass


def required_mw(study: Study, grid: Grid, spec: CaseSpec, model: CaseModel) -> float | None:
    """The largest margin [MW] that the requirements ask of a case; None where none applies."""
    needs: list[float] = []
    for requirement in study.requirements:
        if not applies(requirement, spec):
            continue
        if requirement.margin_mw is not None:
            needs.append(requirement.margin_mw)
        if requirement.margin_pct is not None:
            needs.append(requirement.margin_pct / 100.0 * _base_of(grid, spec, model, requirement.of))
    return max(needs) if needs else None


def tolerance_mw(model: CaseModel) -> float:
    """What a margin may fall short of the requirement [MW]: 1e-6 of the base, as the interface says."""
    return MARGIN_TOLERANCE * max(abs(model.base_mw), abs(model.mw_per_loading))


def limited_devices(grid: Grid, model: CaseModel, nose: Nose) -> tuple[str, ...]:
    """Devices at a limit at the nose, as ``id:max`` or ``id:min``."""
    if nose.point is None:
        return ()
    found: list[str] = []
    for bus, segments in model.chains.items():
        seg = int(nose.point.seg[grid.node[bus]])
        if 0 <= seg < len(segments):
            found.extend(segments[seg].limited)
    names = grid.tables.branches.branch
    for m, k in enumerate(grid.tap_branches.tolist()):
        node = int(grid.tap_nodes[m])
        s = model.case.segptr[node] + nose.point.seg[node]
        count = model.case.segptr[node + 1] - model.case.segptr[node]
        if count > 1 and not model.case.hold[s]:
            row = int(grid.branch_row[k])
            at_max = model.case.coef[s, 0] == grid.tables.branches.tap_max[row]
            found.append(f"{names[row]}:{'max' if at_max else 'min'}")
    return tuple(found)


def case_margin(
    grid: Grid, spec: CaseSpec, model: CaseModel, nose: Nose | None, need: float | None, steps_off: str = ""
) -> CaseMargin:
    """The row of a case; ``nose`` is None where the case cannot be evaluated."""
    if nose is None or nose.point is None or nose.kind == UNRESOLVED:
        status = model.status if not model.evaluable else (nose.status if nose is not None else "unresolved")
        return CaseMargin(
            spec.name, spec.klass, model.base_mw, None, None, None, need, False, "", "", None, "", None, (), "", status
        )
    margin = nose.loading * model.mw_per_loading
    met = need is None or margin >= need - tolerance_mw(model)
    v = nose.point.v[grid.node]
    live = ~model.dead
    lowest = int(np.argmin(np.where(live, v, np.inf)))
    fall = nose.direction[2 * grid.node + 1]
    watched = live & grid.tables.buses.monitored
    weakest = int(np.argmin(np.where(watched, fall, np.inf))) if watched.any() else lowest
    status = model.status
    if nose.status:
        status = nose.status if status == "ok" else f"{status}; {nose.status}"
    if nose.kind == NONE:
        said = f"no turn up to {model.base_mw + margin:g} MW"
        status = said if status == "ok" else f"{status}; {said}"
    limited = limited_devices(grid, model, nose)
    if nose.kind == LIMIT:
        culprit = culprit_name(grid, model, nose)
        said = f"limit of {culprit}"
        status = said if status == "ok" else f"{status}; {said}"
    names = grid.tables.buses.bus
    return CaseMargin(
        case=spec.name,
        klass=spec.klass,
        base_mw=model.base_mw,
        nose_mw=model.base_mw + margin,
        margin_mw=margin,
        margin_pct=100.0 * margin / model.base_mw if model.base_mw > 0.0 else None,
        required_mw=need,
        met=met,
        nose_kind=nose.kind,  # type: ignore[arg-type]
        weakest_bus=names[weakest],
        weakest_v_pu=float(v[weakest]),
        lowest_bus=names[lowest],
        lowest_v_pu=float(v[lowest]),
        limited_devices=limited,
        steps_off=steps_off,
        status=status,
    )


def culprit_name(grid: Grid, model: CaseModel, nose: Nose) -> str:
    """Names of the devices that reach their limit at a limit-induced nose."""
    for m, node in enumerate(grid.tap_nodes.tolist()):
        if node == nose.culprit:
            return grid.tables.branches.branch[int(grid.branch_row[grid.tap_branches[m]])]
    assert nose.point is not None
    for bus, segments in model.chains.items():
        if grid.node[bus] == nose.culprit:
            here = set(segments[int(nose.point.seg[nose.culprit])].limited)
            around = {
                name
                for k in (-1, 1)
                if 0 <= int(nose.point.seg[nose.culprit]) + k < len(segments)
                for name in segments[int(nose.point.seg[nose.culprit]) + k].limited
            }
            names = sorted({name.rsplit(":", 1)[0] for name in here ^ around})
            return ", ".join(names) if names else grid.tables.buses.bus[bus]
    return ""
