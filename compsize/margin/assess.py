"""``margins``: every case of a study without new equipment."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from compsize.margin.cases import CaseSpec, bank_cases, case_margin, listed_cases, required_mw, steps_lost
from compsize.margin.pool import run_all
from compsize.network.cases import Addition, CaseModel, build_case, vary
from compsize.network.grid import Grid, build_grid
from compsize.network.plans import Choice, additions, build_choices
from compsize.nose.engine import LEAP_NODES, Engine, Nose, Point
from compsize.plan.records import CaseMargin
from compsize.study.records import Study


@dataclass(frozen=True, eq=False)
class Bench:
    """A study made ready: grid, engine, candidate choices and the intact operating point."""

    study: Study
    grid: Grid
    engine: Engine
    choices: tuple[Choice, ...]
    specs: tuple[CaseSpec, ...]
    base: Point | None
    """The intact network at base load with the existing steps in service; None: it has no solution."""
    intact: CaseModel
    """The intact network with the existing steps in service."""

    def model(self, spec: CaseSpec, new: Sequence[int]) -> CaseModel:
        """The case of ``spec`` with ``new`` steps in service, all on."""
        changed = [(c, n) for c, n in zip(self.choices, new, strict=True) if n != 0]
        if all(c.candidate.equipment.kind == "bank" for c, _ in changed):
            shunts = [Addition(c.bus, b_pu=n * c.step_pu) for c, n in changed]
            found = vary(self.grid, self.intact, spec.elements, shunts)
            if found is not None:
                return found
        return build_case(self.grid, spec.elements, additions(self.choices, new))


def prepare(study: Study) -> Bench:
    """Arrays and the intact operating point of a study; an SVC without set-point takes the intact voltage."""
    grid = build_grid(study.network, study.growth)
    engine = Engine(grid)
    bare = build_choices(grid, study.candidates, np.ones(len(grid.tables.buses.bus)))
    banks = [c for c in bare if c.candidate.equipment.kind == "bank"]
    start = build_case(grid, (), additions(banks, [0] * len(banks)))
    point = operating_point(engine, start)
    v = point.v[grid.node] if point is not None else np.ones(len(grid.tables.buses.bus))
    choices = build_choices(grid, study.candidates, v)
    if any(c.existing and c.candidate.equipment.kind != "bank" for c in choices):
        model = build_case(grid, (), additions(choices, [0] * len(choices)))
        point = operating_point(engine, model)
    intact = build_case(grid, (), additions(choices, [0] * len(choices)))
    return Bench(study, grid, engine, choices, listed_cases(study), point, intact)


def operating_point(engine: Engine, model: CaseModel) -> Point | None:
    """The solved state at base load from the tables' voltages, else from a level start."""
    for start in (engine.flat(model), engine.level(model)):
        point = engine.settle(model, start)
        if point is not None:
            return point
    return None


def evaluate(
    bench: Bench, spec: CaseSpec, new: Sequence[int], near: Nose | None = None
) -> tuple[CaseModel, Nose | None]:
    """The nose of one case with ``new`` steps in service, all on.

    Traced from the operating point event by event; on large networks from the intact network's nose ``near``, or
    by long steps, where these can be believed (:mod:`compsize.nose.leap`).
    """
    steps = list(new)
    if spec.choice >= 0:
        steps[spec.choice] -= steps_lost(bench.study, bench.choices[spec.choice], steps[spec.choice])
    model = bench.model(spec, steps)
    if not model.evaluable:
        return model, None
    if near is not None and bench.grid.count >= LEAP_NODES:
        nose = bench.engine.nose_near(model, near, careful=True)
        if nose is not None:
            return model, nose
    return model, bench.engine.nose(model, bench.base, fast=bench.grid.count >= LEAP_NODES)


def assess(
    bench: Bench,
    workers: int,
    done: Callable[[int, int], None] | None = None,
    stop: Callable[[], bool] | None = None,
) -> tuple[tuple[CaseMargin, ...], int, int]:
    """Rows of all cases without new equipment; and how many noses and factorisations that took.

    Cases not begun when ``stop`` says so are rows with that status.
    """
    none = [0] * len(bench.choices)
    specs = (*bench.specs, *bank_cases(bench.study, bench.choices, none))
    _, intact = evaluate(bench, specs[0], none)

    def one(spec: CaseSpec) -> tuple[CaseMargin, int, int]:
        if stop is not None and stop():
            model = bench.model(spec, none)
            need = required_mw(bench.study, bench.grid, spec, model)
            row = case_margin(bench.grid, spec, model, None, need)
            return replace(row, status="not evaluated: stopped by the time limit"), 0, 0
        model, nose = evaluate(bench, spec, none, intact)
        need = required_mw(bench.study, bench.grid, spec, model)
        row = case_margin(bench.grid, spec, model, nose, need)
        return row, 0 if nose is None else 1, 0 if nose is None else nose.factorisations

    tell = (lambda k: done(k, len(specs))) if done is not None else None
    outcomes = run_all(one, specs, workers, tell)
    rows = tuple(row for row, _, _ in outcomes)
    return rows, sum(n for _, n, _ in outcomes), sum(f for _, _, f in outcomes)
