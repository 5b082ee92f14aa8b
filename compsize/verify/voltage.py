"""Voltages of a plan at base load: intact, after outages, at light load, and on switching one step.

The conditions, as they are read here: some state k of the switched steps, within those installed, meets the
intact band, and with k unchanged every outage keeps the limits after outages, since mechanical switching comes
later. Light load may be served by another state. The last of the steps that are on in k changes no monitored
voltage by more than the limit as it comes on, intact and in the outage where the change is largest. A violation
that exists without the plan and is not made worse by 0.001 pu counts as met where the study says ``report``.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from compsize.plan.records import VoltageCheck
from compsize.study.records import Study
from compsize.verify.cases import Cases, Row, Steps
from compsize.verify.flow import Equations, Singular, State
from compsize.verify.model import Model
from compsize.verify.path import operating_point
from compsize.verify.pickup import Floats

WORSENED = 0.001
"""pu by which an existing violation may not grow."""
MOST_STATES = 400
"""States of switched steps that are tried one by one; with more, only evenly spread ones are."""


@dataclass(frozen=True, eq=False)
class Voltages:
    """Solved voltages [pu] of a case by bus, and what is needed to solve again nearby."""

    v: dict[str, float]
    model: Model
    equations: Equations
    state: State


def solve_base(model: object) -> Voltages | None:
    """The operating point of a case, None where it has none or cannot be evaluated."""
    if not isinstance(model, Model):
        return None
    equations = Equations(model)
    state = operating_point(equations)
    if state is None:
        return None
    size = np.abs(equations.voltages(state.y))
    return Voltages(dict(zip(model.buses, size.tolist(), strict=True)), model, equations, state)


def after(model: object, before: Voltages) -> Voltages | None:
    """The same, started from the state before."""
    if not isinstance(model, Model):
        return None
    place = dict(zip(before.model.buses, before.equations.voltages(before.state.y), strict=True))
    start = np.array([place.get(bus, v) for bus, v in zip(model.buses, model.start, strict=True)])
    return solve_base(replace(model, start=start))


class VoltageRules:
    """The voltage conditions of a study, checked for one plan and its state of switched steps."""

    def __init__(self, study: Study, cases: Cases, unplanned: Cases) -> None:
        """``unplanned`` are the cases without new steps, whose violations count as existing ones."""
        self.study = study
        self.cases = cases
        self.unplanned = unplanned
        self.limits = study.voltage
        buses = study.network.buses
        self.monitored = [bus for bus, m in zip(buses.bus, buses.monitored, strict=True) if m]
        low, high = self.limits.intact_min_pu, self.limits.intact_max_pu
        self.low = {b: v if low is None else low for b, v in zip(buses.bus, buses.v_min_pu.tolist(), strict=True)}
        self.high = {b: v if high is None else high for b, v in zip(buses.bus, buses.v_max_pu.tolist(), strict=True)}
        self._existing: dict[tuple[str, float], Voltages | None] = {}

    def existing(self, case: str, load_factor: float = 1.0) -> Voltages | None:
        """Voltages of a case without the plan."""
        case = case if case in self.unplanned.names else "intact"
        key = (case, load_factor)
        if key not in self._existing:
            self._existing[key] = solve_base(self.unplanned.model(case, load_factor=load_factor))
        return self._existing[key]

    def intact(self, k: Steps) -> tuple[list[VoltageCheck], Voltages | None]:
        """The intact band with state k: one row for the lower and one for the upper limit."""
        found = solve_base(self.cases.model("intact", on=k))
        names = ("intact_min_pu", "intact_max_pu")
        if found is None:
            return [_unsolved(name, "intact") for name in names], None
        return [self._worst(names[0], "intact", found.v), self._worst(names[1], "intact", found.v)], found

    def outage(self, case: str, k: Steps, intact: Voltages) -> tuple[list[VoltageCheck], Voltages | None]:
        """The limits after an outage, before any switching."""
        wanted = {
            "post_outage_min_pu": self.limits.post_outage_min_pu,
            "post_outage_max_pu": self.limits.post_outage_max_pu,
            "post_outage_change_max_pct": self.limits.post_outage_change_max_pct,
        }
        asked = {name: value for name, value in wanted.items() if value is not None}
        found = after(self.cases.model(case, on=k), intact)
        if found is None:
            return [_unsolved(name, case) for name in asked], None
        checks = []
        for name, value in asked.items():
            if name == "post_outage_change_max_pct":
                checks.append(self._worst_change(name, case, _change(intact.v, found.v), value))
            else:
                checks.append(self._worst(name, case, found.v))
        return checks, found

    def light_load(self) -> list[VoltageCheck]:
        """The ceiling at light load, by the state that serves it best; switched steps may all be off."""
        if self.limits.light_load_pct is None:
            return []
        factor = self.limits.light_load_pct / 100.0
        best: VoltageCheck | None = None
        for k in self.states(upwards=True):
            found = solve_base(self.cases.model("intact", on=k, load_factor=factor))
            if found is None:
                continue
            check = self._worst("light_load_pct", "intact", found.v, factor)
            check = replace(check, note=_join(check.note, describe(k) if k else ""))
            if best is None or (check.met, best.value - best.limit) > (best.met, check.value - check.limit):
                best = check
            if best.met:
                break
        return [best or _unsolved("light_load_pct", "intact")]

    def switching(self, name: str, limit: float, case: str, k: Steps, on: Voltages) -> list[VoltageCheck]:
        """Change of voltage as one of the steps that are on in state k comes on last; the worst row of steps."""
        checks = []
        for item in self.cases.switched():
            if k.get(item.row, 0) < 1:
                continue
            before = after(self.cases.model(case, on={**k, item.row: k[item.row] - 1}), on)
            if before is None:
                return [_unsolved(name, case)]
            check = self._worst_change(name, case, _change(before.v, on.v), limit)
            checks.append(replace(check, note=f"one step of {item.equipment.equipment} at {item.site}"))
        return [max(checks, key=lambda check: check.value)] if checks else []

    def weakest(self, k: Steps, solved: dict[str, Voltages]) -> list[str]:
        """The listed outages in which a step changes most, by slopes dV/dQ: the three largest of each row."""
        chosen: list[str] = []
        for item in self.cases.switched():
            size = {}
            for case, point in solved.items():
                if case in self.cases.events and item.site in point.v:
                    size[case] = _slope(point, item.site)
            chosen += sorted(size, key=lambda case: -size[case])[:3]
        return list(dict.fromkeys(chosen))

    def states(self, upwards: bool = False) -> Iterator[dict[Row, int]]:
        """States of the switched steps, from all on downwards (or from all off upwards)."""
        rows = self.cases.switched()
        ranges = [range(item.new + 1) for item in rows]
        if np.prod([float(len(r)) for r in ranges], initial=1.0) > MOST_STATES:
            shares = np.linspace(0.0, 1.0, 21)
            every = list(dict.fromkeys(tuple(round(share * item.new) for item in rows) for share in shares))
        else:
            every = list(itertools.product(*ranges))
        every.sort(key=lambda steps: sum(n * i.equipment.step_mvar for n, i in zip(steps, rows, strict=True)))
        for steps in every if upwards else reversed(every):
            yield {item.row: n for item, n in zip(rows, steps, strict=True)}

    def _limit(self, name: str, bus: str) -> tuple[int, float]:
        """Side (1: ceiling, -1: floor) and limit [pu] of a condition at a bus."""
        if name.startswith("post_outage"):
            value = getattr(self.limits, name)
            return (1 if name.endswith("max_pu") else -1), float(value)
        return (-1, self.low[bus]) if name == "intact_min_pu" else (1, self.high[bus])

    def _worst(self, name: str, case: str, v: dict[str, float], load_factor: float = 1.0) -> VoltageCheck:
        """The monitored bus nearest to its limit or furthest beyond it, existing violations set apart."""
        rows = []
        for bus in self.monitored:
            if bus not in v:
                continue
            side, limit = self._limit(name, bus)
            excess = side * (v[bus] - limit)
            fails = excess > 1e-9
            if fails and self.limits.existing_violations == "report":
                known = self.existing(case, load_factor)
                old = side * (known.v[bus] - limit) if known is not None and bus in known.v else 0.0
                fails = not (old > 0.0 and excess <= old + WORSENED)
            rows.append((fails, excess, bus))
        if not rows:
            return VoltageCheck(name, case, "", 0.0, 0.0, "pu", True, "no monitored bus")
        fails, excess, bus = max(rows)
        note = "exists without the plan" if excess > 1e-9 and not fails else ""
        return VoltageCheck(name, case, bus, v[bus], self._limit(name, bus)[1], "pu", not fails, note)

    def _worst_change(self, name: str, case: str, change: dict[str, float], limit: float) -> VoltageCheck:
        """The monitored bus whose voltage changes most, in percent of the voltage before."""
        rows = []
        for bus in self.monitored:
            if bus not in change:
                continue
            fails = change[bus] > limit + 1e-7
            if fails and name.startswith("post_outage") and self.limits.existing_violations == "report":
                before, known = self.existing("intact"), self.existing(case)
                old = _change(before.v, known.v).get(bus, 0.0) if before is not None and known is not None else 0.0
                fails = not (old > limit and change[bus] <= old + 100.0 * WORSENED)
            rows.append((fails, change[bus], bus))
        if not rows:
            return VoltageCheck(name, case, "", 0.0, limit, "%", True, "no monitored bus")
        fails, value, bus = max(rows)
        note = "exists without the plan" if value > limit + 1e-7 and not fails else ""
        return VoltageCheck(name, case, bus, value, limit, "%", not fails, note)


def check_voltages(study: Study, cases: Cases, unplanned: Cases) -> tuple[VoltageCheck, ...]:
    """All voltage conditions of a plan, judged in the state of switched steps that serves them best.

    Nothing is asked, and nothing returned, where the study has no ``[voltage]``. Of the outages each limit has one
    row for the worst case and one for every further case that breaks it.
    """
    if not study.voltage.given:
        return ()
    rules = VoltageRules(study, cases, unplanned)
    order = list(cases.names[1:])
    fallback: dict[Row, int] | None = None
    for k in rules.states():
        checks, intact = rules.intact(k)
        if intact is None or not all(c.met for c in checks):
            continue
        fallback = k if fallback is None else fallback
        checks += _with_state(rules, k, intact, order, first=True)
        if all(c.met for c in checks):
            return (*_noted(checks, k), *rules.light_load())
    k = next(rules.states()) if fallback is None else fallback
    checks, intact = rules.intact(k)
    if intact is not None:
        checks += _with_state(rules, k, intact, order)
    return (*_noted(checks, k), *rules.light_load())


def _noted(checks: list[VoltageCheck], k: Steps) -> list[VoltageCheck]:
    return [replace(c, note=_join(c.note, describe(k))) for c in checks] if k else checks


def _with_state(
    rules: VoltageRules, k: Steps, intact: Voltages, order: list[str], first: bool = False
) -> list[VoltageCheck]:
    """The conditions on outages and on switching that state k has to meet besides the intact band.

    Outages are taken in ``order``, and one that breaks a condition moves to its head; ``first``: stop at it.
    """
    limits = rules.limits
    found: dict[str, list[VoltageCheck]] = {}
    solved: dict[str, Voltages] = {}
    after_outage = (limits.post_outage_min_pu, limits.post_outage_max_pu, limits.post_outage_change_max_pct)
    if any(value is not None for value in (*after_outage, limits.switching_step_outage_max_pct)):
        for case in list(order):
            checks, point = rules.outage(case, k, intact)
            for check in checks:
                found.setdefault(check.name, []).append(check)
            if point is not None:
                solved[case] = point
            if not all(check.met for check in checks):
                order.remove(case)
                order.insert(0, case)
                if first:
                    return checks
    result = []
    for checks in found.values():
        broken = [c for c in checks if not c.met]
        result += broken or [min(checks, key=lambda c: abs(c.value - c.limit))]
    if limits.switching_step_max_pct is not None:
        result += rules.switching("switching_step_max_pct", limits.switching_step_max_pct, "intact", k, intact)
    if limits.switching_step_outage_max_pct is not None:
        name, limit = "switching_step_outage_max_pct", limits.switching_step_outage_max_pct
        rows = [c for case in rules.weakest(k, solved) for c in rules.switching(name, limit, case, k, solved[case])]
        result += [max(rows, key=lambda c: (not c.met, c.value))] if rows else []
    return result


def _slope(point: Voltages, bus: str) -> float:
    """|dV/dQ| at a bus [pu per pu], devices as they are."""
    eq, state = point.equations, point.state
    i = point.model.buses.index(bus)
    f: Floats = np.zeros(eq.size)
    f[eq.n + i] = 1.0
    try:
        step = eq.factor(eq.jacobian(state.y, state.modes, state.segment), eq.size).step(f)
    except Singular:
        return float("inf")
    return float(np.abs(step[eq.n : 2 * eq.n]).max())


def _change(before: dict[str, float], now: dict[str, float]) -> dict[str, float]:
    """Change in percent of the voltage before, for buses that both have."""
    return {bus: 100.0 * abs(v - before[bus]) / before[bus] for bus, v in now.items() if bus in before}


def _join(*parts: str) -> str:
    return "; ".join(part for part in parts if part)


def _unsolved(name: str, case: str) -> VoltageCheck:
    return VoltageCheck(
        name, case, "", 0.0, 0.0, "%" if name.endswith("pct") else "pu", False, "no solution at base load"
    )


def describe(k: Steps) -> str:
    """A state of switched steps in words."""
    words = [f"{steps} of {equipment} at {site}" for (site, equipment), steps in k.items() if steps]
    return "switched steps on: " + (", ".join(words) or "none")
