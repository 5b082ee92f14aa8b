"""Margins of open networks against independent noses, and the IEEE 14-bus system as published."""

from __future__ import annotations

import csv
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from margin_studies import single, study_of
from verify_networks import CDF, DATA, everything, read, table

from compsize.api import margins
from compsize.margin.assess import prepare
from compsize.plan.records import CaseMargin
from compsize.study.read_network import read_network
from compsize.study.records import Candidate, Equipment, NetworkTables, Shunts

with (DATA / "reference_open.csv").open(newline="") as handle:
    ROWS = list(csv.DictReader(handle))
"""Noses by path following and by a general nonlinear programme, which agree to 1e-6 (see the README beside them)."""


def found(network: str, limits: str) -> Iterator[tuple[dict[str, str], CaseMargin]]:
    """Rows of the reference with the margins computed for them: outages together, each shunt as an existing bank."""
    rows = [row for row in ROWS if row["network"] == network and row["generator_limits"] == limits]
    net = read(network)
    growth = everything(net, generator_limits=limits == "yes")
    branches = [row["case"].split()[1] for row in rows if row["case"].startswith("branch")]
    result = margins(study_of(net, [single("branch", name) for name in branches], growth), workers=2)
    cases = {case.case: case for case in result.cases}
    for row in rows:
        words = row["case"].split()
        if words[0] == "shunt":
            bank = Equipment("bank", "bank", float(words[1]), 0.0, 0.0)
            candidates = [Candidate(words[3], bank, 1, existing_steps=1)]
            (case,) = margins(study_of(net, (), growth, (), candidates), workers=1).cases
        else:
            case = cases[f"branch:{words[1]}" if words[0] == "branch" else "intact"]
        yield row, case


@pytest.mark.parametrize(("network", "limits"), sorted({(row["network"], row["generator_limits"]) for row in ROWS}))
def test_reference_noses(network: str, limits: str) -> None:
    """Load multiple within 1e-8 of the reference, the kind of nose and the bus of lowest voltage as there."""
    count = 0
    for row, case in found(network, limits):
        assert case.base_mw == pytest.approx(float(row["base_mw"]), rel=1e-9)
        assert case.margin_mw is not None, row
        assert 1.0 + case.margin_mw / case.base_mw == pytest.approx(1.0 + float(row["lambda_path"]), abs=1e-8), row
        assert case.nose_kind == row["kind"], row
        assert case.lowest_bus == row["critical_bus"], row
        assert case.lowest_v_pu == pytest.approx(float(row["v_critical_pu"]), abs=2e-5), row
        count += 1
    assert count > 10


def test_the_reference_holds_both_kinds_and_all_networks() -> None:
    """The reference has folds and limit-induced noses, added shunts, outages, and cases without limits."""
    assert {row["network"] for row in ROWS} == {"ieee14", "ieee30", "ieee118"}
    assert {row["kind"] for row in ROWS} == {"fold", "limit"}
    assert {row["case"].split()[0] for row in ROWS} == {"intact", "branch", "shunt"}
    assert {row["generator_limits"] for row in ROWS} == {"yes", "no"}


@pytest.mark.parametrize("network", ["ieee14", "ieee30"])
def test_a_shunt_of_the_tables_is_a_bank_in_service(network: str) -> None:
    """20 Mvar give the same noses as a row of ``shunts.csv``, as an existing step, and as an existing step at 2 kv."""
    net = read(network)
    bus = net.buses.bus[-1]
    extra = table(Shunts, [{"shunt": "new", "bus": bus, "b_mvar": 20.0}])
    joined: dict[str, Any] = {
        name: values + getattr(extra, name)
        if isinstance(values, tuple)
        else np.concatenate([values, getattr(extra, name)])
        for name, values in vars(net.shunts).items()
    }
    events = [single("branch", net.branches.branch[0])]
    growth = everything(net)
    by_table = margins(study_of(replace(net, shunts=replace(net.shunts, **joined)), events, growth), workers=1).cases
    for kv, mvar in ((None, 20.0), (2.0 * float(net.buses.kv[-1]), 80.0)):
        bank = Equipment("bank", "bank", mvar, 0.0, 0.0, kv=kv)
        candidates = [Candidate(bus, bank, 3, existing_steps=1)]
        by_bank = margins(study_of(net, events, growth, (), candidates), workers=1).cases
        for one, other in zip(by_table, by_bank, strict=True):
            assert one.margin_mw == pytest.approx(other.margin_mw, rel=1e-9)
            assert one.nose_kind == other.nose_kind


@pytest.mark.parametrize("network", ["ieee14", "ieee30", "ieee118"])
def test_solved_base_point(network: str) -> None:
    """The operating point is the solved one of the tables (optimal power flow by a general solver, then Newton)."""
    net = read(network)
    bench = prepare(study_of(net))
    assert bench.base is not None
    node = bench.grid.node
    assert bench.base.v[node] == pytest.approx(net.buses.v_pu, abs=1e-6)
    assert np.rad2deg(bench.base.th[node]) == pytest.approx(net.buses.angle_deg, abs=1e-4)


PUBLISHED = (1.060, 1.045, 1.010, 1.019, 1.020, 1.070, 1.062, 1.090, 1.056, 1.051, 1.057, 1.055, 1.050, 1.036)
"""Voltages [pu] of buses 1 to 14, IEEE Common Data Format file of the 14-bus system; bus 14 lies at -16.04 degrees."""


def published_network() -> NetworkTables:
    """The 14-bus system as published: the open tables with its set-points, dispatch, ratios and limits of units."""
    net = read("ieee14")
    units = replace(
        net.generators,
        p_mw=np.array([232.4, 40.0, 0.0, 0.0, 0.0]),
        v_set_pu=np.array([1.06, 1.045, 1.01, 1.07, 1.09]),
        q_min_mvar=np.array([-np.inf, -40.0, 0.0, -6.0, -6.0]),
        q_max_mvar=np.array([np.inf, 50.0, 40.0, 24.0, 24.0]),
    )
    ratio = {("4", "7"): 0.978, ("4", "9"): 0.969, ("5", "6"): 0.932}
    ends = zip(net.branches.from_bus, net.branches.to_bus, strict=True)
    taps = np.array([ratio.get(pair, 1.0) for pair in ends])
    return replace(net, generators=units, branches=replace(net.branches, tap=taps))


def networks() -> list[NetworkTables]:
    """As published from the open tables, and the published file itself where it is at hand."""
    file = CDF / "ieee14cdf.txt"
    return [published_network(), *([read_network(file)] if file.exists() else [])]


@pytest.mark.parametrize("net", networks(), ids=["tables", "file"][: len(networks())])
def test_published_state(net: NetworkTables) -> None:
    """The operating point of the 14-bus system is the published one, to the digits that were published."""
    bench = prepare(study_of(net))
    assert bench.base is not None
    node = bench.grid.node
    assert bench.base.v[node] == pytest.approx(PUBLISHED, abs=2e-3)
    assert np.rad2deg(bench.base.th[node][13] - bench.base.th[node][0]) == pytest.approx(-16.04, abs=0.02)


@pytest.mark.parametrize("net", networks(), ids=["tables", "file"][: len(networks())])
@pytest.mark.parametrize(("limits", "times", "within"), [(False, 4.0602, 6e-5), (True, 1.77800, 6e-6)])
def test_nose_of_the_published_system(net: NetworkTables, limits: bool, times: float, within: float) -> None:
    """Loads and generation scaled together: 4.0602 times the base without reactive limits (widely quoted),
    1.77800 with them (computed twice by other means)."""
    (intact,) = margins(study_of(net, (), everything(net, generator_limits=limits)), workers=1).cases
    assert intact.nose_mw is not None
    assert intact.nose_mw / intact.base_mw == pytest.approx(times, abs=within)
