"""Nose curves for pictures: upper branch from light load, the nose, and the lower branch."""

from __future__ import annotations

from compsize.margin.assess import Bench
from compsize.network.cases import CaseModel
from compsize.nose.engine import Nose
from compsize.plan.records import CaseMargin, NoseCurve

POINTS = 400


def nose_curve(bench: Bench, model: CaseModel, row: CaseMargin, plan: str, bus: str) -> NoseCurve | None:
    """The curve of one case at ``bus``, traced anew; None where no nose was located.

    Loading is shown in nominal MW of the load that grows, voltage in pu. The lower branch is followed with the
    limits in force until the loading falls below a third of the way back.
    """
    nose: Nose = bench.engine.nose(model, bench.base, points=POINTS, cap=0.01)
    if nose.point is None or not nose.kind:
        return None
    node = int(bench.grid.node[bench.grid.bus_index[bus]])
    points = [(float(p[0]), float(p[1 + node])) for p in nose.log]
    operating = None if nose.base is None else float(nose.base.v[node])
    lighter = []
    first = 0.0 if nose.base is not None or not points else points[0][0]
    at = nose.base if nose.base is not None else bench.engine.settle(model, bench.engine.flat(model), first)
    if at is not None and model.base_mw > 0.0:
        for k in range(1, 11):
            loading = first - 0.095 * k * (model.base_mw / model.mw_per_loading + first)
            found = bench.engine.settle(model, at, loading)
            if found is None:
                break
            at = found
            lighter.append((loading, float(at.v[node])))
    upper = [*reversed(lighter), *points]
    if nose.kind != "none" and abs(upper[-1][0] - nose.loading) > 1e-12:
        upper.append((nose.loading, float(nose.point.v[node])))
    lower = bench.engine.beyond(model, nose, node) if nose.kind != "none" else []
    scale = model.mw_per_loading
    return NoseCurve(
        case=row.case,
        plan="before" if plan == "before" else "after",
        bus=bus,
        load_mw=tuple(model.base_mw + scale * loading for loading, _ in upper + lower),
        v_pu=tuple(v for _, v in upper + lower),
        nose_index=len(upper) - 1,
        operating_mw=model.base_mw,
        operating_v_pu=operating,
        required_mw=row.required_mw,
        nose_kind=nose.kind,  # type: ignore[arg-type]
    )
