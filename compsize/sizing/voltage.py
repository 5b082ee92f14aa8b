"""The voltage conditions of a study, for the search: which states of switched steps keep them.

A plan is good when some state k of its switched steps meets the intact band and, unchanged, the limits after
every outage before switching, and the change of voltage as the last step that is on comes on; light load may be
served by another state. Fixed banks, SVCs and STATCOMs are always in service. A violation that exists without
the plan and is not made worse counts as met where the study says ``report``.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from compsize.margin.assess import Bench
from compsize.margin.cases import CaseSpec, steps_lost
from compsize.network.cases import Addition, CaseModel, build_case, vary
from compsize.network.grid import build_grid
from compsize.network.plans import additions
from compsize.nose.engine import Engine, Point
from compsize.study.records import Growth

Floats = NDArray[np.float64]
Steps = tuple[int, ...]
WORSENED_PU = 0.001
TIGHT = 1e-9


@dataclass(frozen=True)
class Fault:
    """A voltage condition that a state breaks: its key in ``[voltage]``, the case, the bus, and by how much [pu]."""

    name: str
    case: str
    bus: str
    excess: float

    def __str__(self) -> str:
        return f"{self.name} is broken by {self.excess:.4g} pu at bus {self.bus} ({self.case})"


class VoltageJudge:
    """Judges states; remembers verdicts and tries first the case that broke a condition last."""

    def __init__(self, bench: Bench) -> None:
        self.bench = bench
        self.limits = bench.study.voltage
        grid = bench.grid
        buses = grid.tables.buses
        self.watched = buses.monitored
        low, high = self.limits.intact_min_pu, self.limits.intact_max_pu
        self.low = buses.v_min_pu if low is None else np.full(len(buses.bus), low)
        self.high = buses.v_max_pu if high is None else np.full(len(buses.bus), high)
        self.forgives = self.limits.existing_violations == "report"
        self.events = list(bench.specs[1:])
        self._verdicts: dict[Steps, Fault | None] = {}
        self._plain: dict[str, Floats | None] = {}
        self._models: dict[tuple[str, Steps], CaseModel] = {}
        self._light: dict[Steps, Fault | None] = {}
        self._light_engine: Engine | None = None
        self.zero: Steps = tuple(0 for _ in bench.choices)
        self.solved = 0

    @property
    def asks(self) -> bool:
        return self.limits.given

    # States.

    def fault(self, plan: Steps) -> Fault | None:
        """None where some state of the plan keeps all conditions, else what the state with all steps on breaks."""
        if not self.asks:
            return None
        first: Fault | None = None
        ranges = [
            range(n, -1, -1) if choice.switched else range(n, n - 1, -1)
            for choice, n in zip(self.bench.choices, plan, strict=True)
        ]
        for state in itertools.product(*ranges):
            found = self.state_fault(state)
            if found is None:
                return self._light_fault(plan)
            first = found if first is None else first
        return first

    def state_fault(self, state: Steps) -> Fault | None:
        """The first condition that a state breaks, None if it keeps all."""
        if state not in self._verdicts:
            self._verdicts[state] = self._judge(state)
        return self._verdicts[state]

    def _judge(self, state: Steps) -> Fault | None:
        limits = self.limits
        intact_model = self._model(self.bench.specs[0], state)
        intact = self._solve(intact_model, self.bench.base)
        if intact is None:
            return Fault("intact_min_pu", "intact", "", math.inf)
        v0 = self._volts(intact)
        plain0 = self._plain_volts(self.bench.specs[0])
        fault = self._band("intact", v0, plain0, self.low, self.high, ("intact_min_pu", "intact_max_pu"))
        if fault is not None:
            return fault
        after = (limits.post_outage_min_pu, limits.post_outage_max_pu, limits.post_outage_change_max_pct)
        points: dict[str, Point] = {}
        if any(x is not None for x in (*after, limits.switching_step_outage_max_pct)):
            for spec, at in self._outages(state):
                model = self._model(spec, at)
                point = self._solve(model, intact) if model.evaluable else None
                if point is None:
                    return self._keep(spec, Fault("post_outage_min_pu", spec.name, "", math.inf))
                points[spec.name] = point
                fault = self._after_outage(spec, model, self._volts(point), v0, plain0)
                if fault is not None:
                    return self._keep(spec, fault)
        return self._switching(state, intact, points)

    def _outages(self, state: Steps) -> list[tuple[CaseSpec, Steps]]:
        found = [(spec, state) for spec in self.events]
        if self.bench.study.contingencies.bank_outage != "none":
            for k, choice in enumerate(self.bench.choices):
                if state[k] > 0:
                    lost = steps_lost(self.bench.study, choice, state[k])
                    at = (*state[:k], state[k] - lost, *state[k + 1 :])
                    found.append((CaseSpec(f"bank:{choice.name}", "bank_outage", (), k), at))
        return found

    def _keep(self, spec: CaseSpec, fault: Fault) -> Fault:
        if spec in self.events:
            self.events.remove(spec)
            self.events.insert(0, spec)
        return fault

    # Conditions.

    def _worst(self, name: str, case: str, excess: Floats, old: Floats | None, room: float) -> Fault | None:
        """The bus furthest beyond its limit, existing violations set apart."""
        bad = self.watched & (excess > TIGHT)
        if old is not None and self.forgives:
            bad &= ~((old > 0.0) & (excess <= old + room))
        if not bad.any():
            return None
        bus = int(np.argmax(np.where(bad, excess, -np.inf)))
        return Fault(name, case, self.bench.grid.tables.buses.bus[bus], float(excess[bus]))

    def _band(
        self, case: str, v: Floats, plain: Floats | None, low: Floats, high: Floats, names: tuple[str, str]
    ) -> Fault | None:
        for name, excess, old in (
            (names[0], low - v, None if plain is None else low - plain),
            (names[1], v - high, None if plain is None else plain - high),
        ):
            fault = self._worst(name, case, excess, old, WORSENED_PU)
            if fault is not None:
                return fault
        return None

    def _after_outage(
        self, spec: CaseSpec, model: CaseModel, v: Floats, v0: Floats, plain0: Floats | None
    ) -> Fault | None:
        limits = self.limits
        plain = self._plain_volts(spec) if spec.choice < 0 else plain0
        count = v.size
        none = np.full(count, -np.inf)
        low = none if limits.post_outage_min_pu is None else np.full(count, limits.post_outage_min_pu)
        high = -none if limits.post_outage_max_pu is None else np.full(count, limits.post_outage_max_pu)
        alive = np.where(model.dead, np.nan, v)
        fault = self._band(spec.name, alive, plain, low, high, ("post_outage_min_pu", "post_outage_max_pu"))
        if fault is not None or limits.post_outage_change_max_pct is None:
            return fault
        most = limits.post_outage_change_max_pct / 100.0
        excess = np.abs(alive - v0) / v0 - most
        old = None if plain is None or plain0 is None else np.abs(plain - plain0) / plain0 - most
        return self._worst("post_outage_change_max_pct", spec.name, excess, old, WORSENED_PU)

    def _switching(self, state: Steps, intact: Point, points: dict[str, Point]) -> Fault | None:
        limits = self.limits
        asked: list[tuple[str, float, CaseSpec, Point]] = []
        if limits.switching_step_max_pct is not None:
            asked.append(("switching_step_max_pct", limits.switching_step_max_pct, self.bench.specs[0], intact))
        if limits.switching_step_outage_max_pct is not None:
            most = limits.switching_step_outage_max_pct
            asked += [
                ("switching_step_outage_max_pct", most, spec, points[spec.name])
                for spec in self.events
                if spec.name in points
            ]
        for name, most, spec, on in asked:
            v = self._volts(on)
            for k, choice in enumerate(self.bench.choices):
                if not choice.switched or state[k] < 1:
                    continue
                off = (*state[:k], state[k] - 1, *state[k + 1 :])
                model = self._model(spec, off)
                point = self._solve(model, on)
                if point is None:
                    return Fault(name, spec.name, choice.candidate.site, math.inf)
                before = np.where(model.dead, np.nan, self._volts(point))
                fault = self._worst(name, spec.name, np.abs(v - before) / before - most / 100.0, None, 0.0)
                if fault is not None:
                    return fault
        return None

    def _light_fault(self, plan: Steps) -> Fault | None:
        """The ceiling at light load, by the state of switched steps that serves it best."""
        if self.limits.light_load_pct is None:
            return None
        ranges = [
            range(n + 1) if choice.switched else range(n, n + 1)
            for choice, n in zip(self.bench.choices, plan, strict=True)
        ]
        first: Fault | None = None
        for state in itertools.product(*ranges):
            if state not in self._light:
                self._light[state] = self._judge_light(state)
            if self._light[state] is None:
                return None
            first = first or self._light[state]
        return first

    def _judge_light(self, state: Steps) -> Fault | None:
        engine = self._engine_of_all_loads()
        assert self.limits.light_load_pct is not None
        loading = self.limits.light_load_pct / 100.0 - 1.0
        volts = []
        for steps in (state, self.zero):
            model = build_case(engine.grid, (), additions(self.bench.choices, steps))
            point = engine.settle(model, self.bench.base or engine.flat(model), loading)
            self.solved += 1
            volts.append(None if point is None else point.v[engine.grid.node])
        v, plain = volts
        if v is None:
            return Fault("light_load_pct", "intact", "", math.inf)
        old = None if plain is None else plain - self.high
        return self._worst("light_load_pct", "intact", v - self.high, old, WORSENED_PU)

    def _engine_of_all_loads(self) -> Engine:
        if self._light_engine is None:
            tables = self.bench.grid.tables
            on = np.flatnonzero(tables.loads.status)
            growth: Growth = replace(
                self.bench.study.growth,
                loads=tuple(tables.loads.load[k] for k in on),
                dp_mw=tuple(float(x) for x in tables.loads.p_mw[on]),
                dq_mvar=tuple(float(x) for x in tables.loads.q_mvar[on]),
                base_mw=float(tables.loads.p_mw[on].sum()),
            )
            self._light_engine = Engine(build_grid(tables, growth))
        return self._light_engine

    # Solutions.

    def _model(self, spec: CaseSpec, state: Steps) -> CaseModel:
        base = self._models.get((spec.name, self.zero))
        if base is None:
            base = self._models[spec.name, self.zero] = self.bench.model(spec, self.zero)
        changed = [(c, n) for c, n in zip(self.bench.choices, state, strict=True) if n != 0]
        if all(c.candidate.equipment.kind == "bank" for c, _ in changed):
            found = vary(self.bench.grid, base, (), [Addition(c.bus, b_pu=n * c.step_pu) for c, n in changed])
            if found is not None:
                return found
        return self.bench.model(spec, state)

    def _solve(self, model: CaseModel, start: Point | None) -> Point | None:
        self.solved += 1
        engine = self.bench.engine
        if start is not None:
            point = engine.settle(model, start)
            if point is not None:
                return point
        return engine.settle(model, engine.flat(model))

    def _volts(self, point: Point) -> Floats:
        return point.v[self.bench.grid.node]

    def _plain_volts(self, spec: CaseSpec) -> Floats | None:
        """Voltages of a case without new equipment."""
        if spec.name not in self._plain:
            model = self._model(spec, self.zero)
            point = self._solve(model, self.bench.base) if model.evaluable else None
            self._plain[spec.name] = None if point is None else np.where(model.dead, np.nan, self._volts(point))
        return self._plain[spec.name]
