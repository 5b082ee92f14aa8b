"""The cases of a study with a plan: what is lost, which steps are installed, and which of them are on."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace

import numpy as np

from compsize.errors import UsageError
from compsize.plan.records import Plan
from compsize.study.records import Equipment, Study
from compsize.verify.flow import Equations
from compsize.verify.model import Added, Model, NotEvaluable, build_model
from compsize.verify.path import operating_point

Row = tuple[str, str]
"""A site and an equipment."""
Steps = Mapping[Row, int]
"""New steps per row."""


@dataclass(frozen=True)
class Installed:
    """All steps of one equipment at one site. Existing steps are always on; new ones of a switched bank may be off."""

    site: str
    equipment: Equipment
    existing: int
    new: int

    @property
    def row(self) -> Row:
        return self.site, self.equipment.equipment

    @property
    def may_be_off(self) -> bool:
        return self.equipment.kind == "bank" and self.equipment.switched and self.new > 0


class Cases:
    """Models of the cases of one study with one plan."""

    def __init__(self, study: Study, plan: Plan) -> None:
        """Raises UsageError where the plan names something that is no candidate of the study."""
        self.study = study
        new = {(row.site, row.equipment): row.steps for row in plan.rows}
        self.installed = tuple(
            Installed(c.site, c.equipment, c.existing_steps, new.pop((c.site, c.equipment.equipment), 0))
            for c in study.candidates
        )
        if new:
            site, equipment = next(iter(new))
            raise UsageError(f"the study has no candidate {equipment!r} at {site!r}")
        self.events = {event.name: event for event in study.contingencies.events}
        self._kv = dict(zip(study.network.buses.bus, study.network.buses.kv.tolist(), strict=True))
        self._references: dict[str, float] = {}
        if any(self._floats(item) for item in self.installed):
            self._references = self._intact_voltages()

    @staticmethod
    def _floats(item: Installed) -> bool:
        """Whether a device takes its reference from the network as it is without the plan."""
        in_use = item.existing + item.new > 0
        return item.equipment.kind != "bank" and item.equipment.v_ref_pu is None and in_use

    def _intact_voltages(self) -> dict[str, float]:
        """Voltages of the network as it is, existing steps on but those whose reference is to be found."""
        found = [item for item in self.installed if item.existing and not self._floats(item)]
        added = tuple(self._device(item, item.existing) for item in found)
        model = build_model(self.study.network, self.study.growth, added=added)
        if isinstance(model, NotEvaluable):
            raise UsageError(f"the network cannot be evaluated: {model.reason}")
        equations = Equations(model)
        state = operating_point(equations)
        if state is None:
            raise UsageError("the intact network has no solution at base load, so v_ref_pu cannot be left blank")
        return dict(zip(model.buses, np.abs(equations.voltages(state.y)).tolist(), strict=True))

    def _device(self, item: Installed, steps: int) -> Added:
        """So many steps of a row as equipment; rated at another voltage it gives (bus kv / kv)^2 as much."""
        e = item.equipment
        times = steps * (1.0 if e.kv is None else (self._kv[item.site] / e.kv) ** 2)
        v_ref = e.v_ref_pu if e.v_ref_pu is not None else self._references.get(item.site, 1.0)
        name = f"{item.site}:{e.equipment}"
        return Added(item.site, e.kind, times * e.step_mvar, times * e.q_absorb_mvar, e.slope_pct, v_ref, name)

    @property
    def bank_cases(self) -> tuple[str, ...]:
        """Names of the outages of what the plan adds."""
        if self.study.contingencies.bank_outage == "none":
            return ()
        return tuple(f"bank:{item.site}:{item.equipment.equipment}" for item in self.installed if item.new)

    @property
    def names(self) -> tuple[str, ...]:
        """Every case that the plan has to pass: intact, the events, the outages of new equipment."""
        return ("intact", *self.events, *self.bank_cases)

    def switched(self) -> tuple[Installed, ...]:
        return tuple(item for item in self.installed if item.may_be_off)

    def _left(self, case: str, item: Installed, new: int) -> int:
        """Steps in service where ``new`` ones are on: an outage takes one step of a bank, a whole svc or statcom,
        or all that the plan adds."""
        if case != f"bank:{item.site}:{item.equipment.equipment}":
            return item.existing + new
        if self.study.contingencies.bank_outage == "site":
            return item.existing
        return max(item.existing + new - 1, 0) if item.equipment.kind == "bank" else 0

    def model(
        self,
        case: str,
        off: Steps | None = None,
        *,
        on: Steps | None = None,
        load_factor: float = 1.0,
    ) -> Model | NotEvaluable:
        """Model of a case with all new steps on but ``off``, or with the switched ones that ``on`` gives.

        A lost step is one of those that would be on. Raises UsageError for a case that the study does not have.
        """
        if case not in self.names:
            raise UsageError(f"the study has no case {case!r}")
        added = []
        for item in self.installed:
            new = item.new
            if on is not None and item.may_be_off:
                new = on.get(item.row, 0)
            elif off is not None and item.may_be_off:
                new -= off.get(item.row, 0)
            steps = self._left(case, item, max(new, 0))
            if steps > 0:
                added.append(self._device(item, steps))
        elements = self.events[case].elements if case in self.events else ()
        return build_model(self.study.network, self.study.growth, elements, added, load_factor)


def parse_off(text: str, rows: Iterable[Row]) -> dict[Row, int]:
    """Steps off from ``SITE:EQUIPMENT:COUNT`` joined by spaces, of the ``rows`` that there are.

    Names may hold spaces and colons, so they are looked for, the longest first. Raises UsageError for anything else.
    """
    known = {f"{site}:{equipment}:": (site, equipment) for site, equipment in rows}
    off: dict[Row, int] = {}
    left = text.strip()
    while left:
        start = next((name for name in sorted(known, key=len, reverse=True) if left.startswith(name)), None)
        count, _, rest = left[len(start or "") :].partition(" ")
        if start is None or not count.isdecimal():
            raise UsageError(f"{left!r} does not read SITE:EQUIPMENT:COUNT")
        off[known[start]] = off.get(known[start], 0) + int(count)
        left = rest.lstrip()
    return off


def without(plan: Plan, site: str, equipment: str) -> Plan:
    """The plan with one step fewer of a row; a row without steps goes, and its site cost with the last one."""
    rows = []
    for row in plan.rows:
        if (row.site, row.equipment) != (site, equipment):
            rows.append(row)
        elif row.steps > 1:
            rows.append(replace(row, steps=row.steps - 1, total_mvar=row.total_mvar - row.step_mvar))
    sites = {row.site for row in rows}
    return Plan(tuple(rows), tuple((name, cost) for name, cost in plan.site_costs if name in sites))
