"""From a case to its nose: the compiled trace with a start that is sure to be on the operating branch."""

from __future__ import annotations

import threading
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from compsize.flow.equations import DEAD, TAP, State, new_state
from compsize.flow.lu import Factors, new_factors
from compsize.network.cases import CaseModel
from compsize.network.grid import Grid
from compsize.nose.direct import direct
from compsize.nose.leap import leap, limited_doubt
from compsize.nose.limits import refactor, settle, step_back
from compsize.nose.newton import (
    ALPHA,
    BRANCH,
    CULPRIT,
    DOUBT,
    FACTORS,
    LAM,
    LOADING,
    LOGGED,
    PIECE,
    PIN,
    WORST,
    Work,
    new_work,
)
from compsize.nose.trace import AT_FOLD, AT_LIMIT, NO_TURN, trace

Floats = NDArray[np.float64]

FOLD, LIMIT, NONE, UNRESOLVED = "fold", "limit", "none", ""
LONGEST_STEP = 0.05
LIFT = 0.015
# A nose found straight from a near one may lie so far from it [pu, rad].
NEAR_V = 0.06
NEAR_TH = 0.3
# First, longest and shortest leap [pu of the pinned magnitude]; from so many nodes on, leaps cost less than events.
LEAPS = (0.02, 0.08, 0.006)
LEAP_NODES = 500
# Where to look for a start when the base load has no solution: lighter load first, then heavier.
LIGHTER = (-0.02, -0.05, -0.1, -0.2, -0.35, -0.5, -0.65, -0.8, -0.9, -0.97)
HEAVIER = (0.05, 0.1, 0.2, 0.4, 0.7)


@dataclass(frozen=True, eq=False)
class Point:
    """A solved state, in elimination order: angles [rad], magnitudes [pu] and ratios, segments, loading."""

    th: Floats
    v: Floats
    seg: NDArray[np.int64]
    loading: float


@dataclass(frozen=True, eq=False)
class Nose:
    """Outcome of one evaluation.

    ``kind`` is ``fold``, ``limit``, ``none`` (no turn up to ``point.loading``) or empty (unresolved).
    ``direction`` is the change of the state towards the nose (loading direction at a limit-induced nose and
    at ``none``, null vector with falling voltage at a fold), two per node.
    """

    kind: str
    loading: float
    point: Point | None
    base: Point | None
    """The solved state at base load; None where there is none or it was not needed."""
    direction: Floats
    culprit: int
    """Node of the device that reaches its limit at a limit-induced nose, else -1."""
    status: str
    factorisations: int
    worst_residual: float
    sign: float
    """Sign of the Jacobian's determinant on the branch that was traced."""
    traced: bool
    """Traced from the operating point (else from a point next to a near nose)."""
    log: Floats
    """[points, 1 + nodes]: loading and magnitudes along the way, if asked for."""
    segments: int
    """Number of segments of the case, by which a near case with the same devices is known."""


class Bench:
    """Workspaces of one thread for one grid."""

    def __init__(self, grid: Grid) -> None:
        self.state: State = new_state(grid.count, grid.tap_branches.size)
        self.factors: Factors = new_factors(grid.pattern)
        self.work: Work = new_work(grid.count)
        self.no_log = np.zeros((0, grid.count + 1))
        self.seg = np.zeros(grid.count, dtype=np.int64)


class Engine:
    """Evaluates cases of one grid; safe to call from several threads."""

    def __init__(self, grid: Grid) -> None:
        self.grid = grid
        self._local = threading.local()
        total = float(np.abs(grid.load_p).sum())
        self.top = 20.0 * max(1.0, total / grid.scale_mw)

    def _bench(self) -> Bench:
        bench = getattr(self._local, "bench", None)
        if bench is None:
            bench = self._local.bench = Bench(self.grid)
        return bench

    def flat(self, model: CaseModel) -> Point:
        """A start from the tables: their voltages where given, set-points held."""
        grid = self.grid
        th, v = np.zeros(grid.count), np.ones(grid.count)
        th[grid.node], v[grid.node] = grid.th_start, grid.v_start
        taps = grid.tables.branches.tap
        for m, k in enumerate(grid.tap_branches.tolist()):
            v[grid.tap_nodes[m]] = taps[grid.branch_row[k]]
        return Point(th, v, model.first_segment, 0.0)

    def level(self, model: CaseModel) -> Point:
        """A start with all angles zero and magnitudes one or at their set-points."""
        flat = self.flat(model)
        v = np.ones(self.grid.count)
        v[self.grid.tap_nodes] = flat.v[self.grid.tap_nodes]
        for bus, segments in model.chains.items():
            hold = next((s for s in segments if s.hold), None)
            if hold is not None:
                v[self.grid.node[bus]] = hold.coef[0]
        return Point(np.zeros(self.grid.count), v, model.first_segment, 0.0)

    def _load(self, bench: Bench, model: CaseModel, start: Point) -> None:
        state = bench.state
        state.th[:] = start.th
        state.v[:] = start.v
        lengths = np.diff(model.case.segptr)
        fits = (start.seg >= 0) & (start.seg < lengths)
        state.seg[:] = np.where(fits, start.seg, model.first_segment)

    def _point(self, bench: Bench) -> Point:
        state = bench.state
        return Point(state.th.copy(), state.v.copy(), state.seg.copy(), float(bench.work.real[LAM]))

    def settle(self, model: CaseModel, start: Point, loading: float = 0.0) -> Point | None:
        """The solved state at ``loading`` with every device within its limits, from ``start``; None if not found."""
        bench = self._bench()
        self._load(bench, model, start)
        return self._point(bench) if self._settle(bench, model, loading) else None

    def _settle(self, bench: Bench, model: CaseModel, loading: float) -> bool:
        bench.work.whole[PIECE] = int(np.searchsorted(model.case.gbreak, loading, side="right")) - 1
        done = settle(self.grid.pattern, model.case, bench.state, bench.factors, bench.work, LOADING, loading, 60)
        return bool(done == 0)

    def nose(
        self,
        model: CaseModel,
        start: Point | None = None,
        points: int = 0,
        cap: float = LONGEST_STEP,
        fast: bool = False,
    ) -> Nose:
        """The first nose on the branch from the operating point, traced event by event.

        ``start`` is a near solved state (the intact network's); ``points`` asks for a log of so many points. With
        ``fast`` long steps with many events each go ahead of the trace, as far as they can be believed
        (:mod:`compsize.nose.leap`); ``traced`` of the result is then False.
        """
        bench = self._bench()
        bench.work.whole[:] = 0
        starts = (
            [start, self.flat(model), self.level(model)] if start is not None else [self.flat(model), self.level(model)]
        )
        base: Point | None = None
        for candidate in starts:
            self._load(bench, model, candidate)
            if self._settle(bench, model, 0.0):
                base = self._point(bench)
                break
        if base is not None:
            if fast:
                found = self._trace(bench, model, base, base, "", 0, cap, attempts=1, fast=True)
                if found.kind:
                    return found
            found = self._trace(bench, model, base, base, "", points, cap)
            if found.kind:
                return found
        stuck = base is not None
        for loading in LIGHTER + HEAVIER:
            for candidate in starts:
                self._load(bench, model, candidate)
                if not self._settle(bench, model, loading):
                    continue
                point = self._point(bench)
                found = self._trace(bench, model, point, base, "", points, cap)
                if not found.kind:
                    continue
                if loading < 0.0 and not stuck and found.kind != NONE and found.loading < 0.0:
                    status = "no solution at base load"
                elif loading > 0.0 and not stuck:
                    status = "no solution at base load, solved from heavier load on"
                else:
                    status = ""
                return self._trace(bench, model, point, base, status, points, cap) if status else found
        return Nose(
            UNRESOLVED,
            float("nan"),
            None,
            base,
            np.zeros(2 * self.grid.count),
            -1,
            "unresolved: no nose could be located",
            int(bench.work.whole[FACTORS]),
            float("nan"),
            0.0,
            True,
            bench.no_log,
            0,
        )

    def nose_near(self, model: CaseModel, near: Nose, lift: float = LIFT, careful: bool = False) -> Nose | None:
        """The first nose beyond a point just before the nose ``near`` of a similar case.

        That point is the near nose with its fastest falling magnitude raised by ``lift``, solved anew with its
        own limits. None where it cannot be solved, or lies on another branch (the determinant's sign differs):
        then only :meth:`nose` can tell.
        """
        if near.point is None or near.kind not in (FOLD, LIMIT):
            return None
        bench = self._bench()
        bench.work.whole[:] = 0
        if not careful:
            found = self._direct(bench, model, near)
            if found is not None:
                return found
        self._load(bench, model, near.point)
        pin = self._fastest(model, near)
        if pin < 0:
            return None
        bench.work.real[LAM] = near.loading
        bench.work.whole[PIECE] = int(np.searchsorted(model.case.gbreak, near.loading, side="right")) - 1
        before = bench.state.v[pin]
        if step_back(self.grid.pattern, model.case, bench.state, bench.factors, bench.work, pin, lift, 20) != 0:
            return None
        if bench.state.v[pin] < before or not bool(np.all(bench.state.v > 0.2)):
            return None
        point = self._point(bench)
        at = float(bench.work.whole[PIECE])
        if not model.case.gbreak[int(at)] <= point.loading <= model.case.gbreak[int(at) + 1]:
            return None
        if careful:
            sign = refactor(self.grid.pattern, model.case, bench.state, bench.factors, bench.work)
            doubt = limited_doubt(self.grid.pattern, model.case, bench.state, bench.factors, bench.work)
            bench.work.real[DOUBT] = doubt
            if sign != near.sign or not np.isfinite(doubt):
                return None
        found = self._trace(bench, model, point, None, near.status, 0, LONGEST_STEP, traced=False, attempts=1)
        if not found.kind or found.sign != near.sign:
            return None
        return found

    def _direct(self, bench: Bench, model: CaseModel, near: Nose) -> Nose | None:
        assert near.point is not None
        state, work, case = bench.state, bench.work, model.case
        if near.point.seg.size != state.seg.size or near.segments != case.hold.size:
            return None
        state.th[:], state.v[:], state.seg[:] = near.point.th, near.point.v, near.point.seg
        work.d1[:] = near.direction
        work.real[LAM] = near.loading
        pieces = case.gbreak.size
        work.whole[PIECE] = 0 if pieces == 2 else int(np.searchsorted(case.gbreak, near.loading, side="right")) - 1
        outcome = direct(self.grid.pattern, case, state, bench.factors, work, near.culprit, near.sign)
        if outcome not in (AT_FOLD, AT_LIMIT):
            return None
        if np.abs(state.v - near.point.v).max() > NEAR_V or np.abs(state.th - near.point.th).max() > NEAR_TH:
            # Not the same nose moved a little: the path decides.
            return None
        direction = work.d1.copy()
        if outcome == AT_FOLD:
            # The pinned magnitude falls.
            direction *= -1.0
        return Nose(
            FOLD if outcome == AT_FOLD else LIMIT,
            float(work.real[LAM]),
            self._point(bench),
            None,
            direction,
            int(work.whole[CULPRIT]),
            near.status,
            int(work.whole[FACTORS]),
            float(work.real[WORST]),
            near.sign,
            False,
            bench.no_log,
            case.hold.size,
        )

    def beyond(self, model: CaseModel, nose: Nose, node: int, drop: float = 0.01) -> list[tuple[float, float]]:
        """Points (loading, magnitude of ``node``) past a nose, with falling voltage; for pictures only."""
        assert nose.point is not None
        bench = self._bench()
        self._load(bench, model, nose.point)
        if nose.culprit >= 0:
            # The device that reached its limit stays there.
            node_seg = bench.state.seg[nose.culprit]
            for move in (1, -1):
                trial = node_seg + move
                if 0 <= trial < int(model.case.segptr[nose.culprit + 1] - model.case.segptr[nose.culprit]):
                    bench.state.seg[nose.culprit] = trial
                    break
        near = Nose(
            nose.kind,
            nose.loading,
            self._point(bench),
            None,
            nose.direction,
            -1,
            "",
            0,
            0.0,
            nose.sign,
            True,
            nose.log,
            0,
        )
        pin = self._fastest(model, near)
        if pin < 0:
            return []
        bench.work.whole[:] = 0
        bench.work.real[LAM] = nose.loading
        bench.work.whole[PIECE] = int(np.searchsorted(model.case.gbreak, nose.loading, side="right")) - 1
        found = []
        low = nose.loading - 0.6 * abs(nose.loading)
        for _ in range(120):
            start = self._point(bench)
            lift = -drop * min(1.0, 0.2 + float(start.v[pin]))
            if step_back(self.grid.pattern, model.case, bench.state, bench.factors, bench.work, pin, lift, 20) != 0:
                break
            loading = float(bench.work.real[LAM])
            if loading > nose.loading or loading < low or bench.state.v[pin] < 0.05:
                break
            found.append((loading, float(bench.state.v[node])))
        return found

    def _fastest(self, model: CaseModel, near: Nose) -> int:
        """The free bus whose magnitude falls fastest at ``near``."""
        assert near.point is not None
        fall = near.direction[1::2].copy()
        case = model.case
        s = np.maximum(near.point.seg, 0) + case.segptr[:-1]
        has = (near.point.seg >= 0) & (s < case.segptr[1:])
        held = np.zeros(fall.size, dtype=bool)
        held[has] = case.hold[s[has]] == 1
        fall[held | ((case.role & (DEAD | TAP)) != 0)] = 0.0
        pin = int(np.argmin(fall))
        return pin if fall[pin] < 0.0 else -1

    def _trace(
        self,
        bench: Bench,
        model: CaseModel,
        start: Point,
        base: Point | None,
        status: str,
        points: int,
        cap: float,
        traced: bool = True,
        attempts: int = 3,
        fast: bool = False,
    ) -> Nose:
        outcome = -1
        log = bench.no_log
        for attempt in (cap, 0.3 * cap, 0.05 * cap)[:attempts]:
            self._load(bench, model, start)
            bench.work.real[LAM] = start.loading
            bench.work.real[ALPHA] = 0.0
            bench.work.whole[PIN] = -1
            bench.work.whole[LOGGED] = 0
            bench.work.whole[PIECE] = int(np.searchsorted(model.case.gbreak, start.loading, side="right")) - 1
            if fast:
                traced = False
                leap(self.grid.pattern, model.case, bench.state, bench.factors, bench.work, bench.seg, *LEAPS)
                if not np.isfinite(bench.work.real[DOUBT]):
                    break
            log = np.zeros((points, self.grid.count + 1)) if points else bench.no_log
            outcome = trace(
                self.grid.pattern, model.case, bench.state, bench.factors, bench.work, self.top, attempt, log
            )
            if outcome in (AT_FOLD, AT_LIMIT, NO_TURN):
                break
        kind = {AT_FOLD: FOLD, AT_LIMIT: LIMIT, NO_TURN: NONE}.get(outcome, UNRESOLVED)
        work = bench.work
        direction = work.d1.copy()
        if kind == FOLD:
            direction *= -np.sign(direction[2 * work.whole[PIN] + 1])
        return Nose(
            kind,
            float(work.real[LAM]),
            self._point(bench),
            base,
            direction,
            int(work.whole[CULPRIT]),
            status if kind else "unresolved: no nose could be located",
            int(work.whole[FACTORS]),
            float(work.real[WORST]),
            float(work.real[BRANCH]),
            traced,
            log[: int(work.whole[LOGGED])],
            model.case.hold.size,
        )
