"""Noses of open networks against independent answers."""

from __future__ import annotations

import csv

import numpy as np
import pytest
from verify_networks import CDF, DATA, everything, read

from compsize.study.read_network import read_network
from compsize.verify.flow import Equations
from compsize.verify.model import Added, Model, build_model
from compsize.verify.path import check_point, operating_point, trace

with (DATA / "reference_open.csv").open(newline="") as handle:
    ROWS = list(csv.DictReader(handle))


def check(network: str, rows: list[dict[str, str]]) -> None:
    net = read(network)
    for row in rows:
        words = row["case"].split()
        lost = [("branch", words[1])] if words[0] == "branch" else []
        added = [Added(words[3], "bank", float(words[1]))] if words[0] == "shunt" else []
        case = build_model(net, everything(net, generator_limits=row["generator_limits"] == "yes"), lost, added)
        assert isinstance(case, Model)
        found = trace(case)
        expected = float(row["lambda_path"])
        assert found.t_mw / case.base_mw == pytest.approx(expected, abs=2e-8 * (1.0 + abs(expected))), row
        assert found.kind == row["kind"], row
        lowest = int(np.argmin(np.abs(found.v)))
        assert case.buses[lowest] == row["critical_bus"], row
        assert abs(found.v[lowest]) == pytest.approx(float(row["v_critical_pu"]), abs=2e-5), row
        assert found.worst_mva < 1e-6
        point = check_point(case, found.t_mw, found.v)
        assert point.residual_mva < 1e-5, row
        if found.kind == "fold":
            assert point.smallest_singular < 1e-6, row
        else:
            assert found.device in point.on_corner, row


@pytest.mark.parametrize("limits", ["yes", "no"])
@pytest.mark.parametrize("network", ["ieee14", "ieee30"])
def test_small_networks(network: str, limits: str) -> None:
    """Every nose of 14 and 30 buses, with and without limits, with outages and shunts (reference_open.csv)."""
    check(network, [r for r in ROWS if r["network"] == network and r["generator_limits"] == limits])


def test_118_buses() -> None:
    """A few noses of 118 buses of both kinds (reference_open.csv)."""
    check("ieee118", [r for r in ROWS if r["network"] == "ieee118"][::5])


@pytest.mark.slow
def test_118_buses_all() -> None:
    """Every nose of 118 buses that the reference has."""
    check("ieee118", [r for r in ROWS if r["network"] == "ieee118"])


needs_cdf = pytest.mark.skipif(not CDF.exists(), reason="the IEEE CDF files are not beside the repository")


@needs_cdf
def test_published_state_of_14_buses() -> None:
    """Voltages and the angle of bus 14 as the IEEE CDF file publishes them."""
    net = read_network(CDF / "ieee14cdf.txt")
    case = build_model(net, everything(net))
    assert isinstance(case, Model)
    equations = Equations(case)
    state = operating_point(equations)
    assert state is not None
    v = equations.voltages(state.y)
    published = [1.060, 1.045, 1.010, 1.019, 1.020, 1.070, 1.062, 1.090, 1.056, 1.051, 1.057, 1.055, 1.050, 1.036]
    assert np.abs(v) == pytest.approx(published, abs=2e-3)
    assert np.rad2deg(np.angle(v[13])) == pytest.approx(-16.04, abs=0.02)


@needs_cdf
@pytest.mark.parametrize(("limits", "times", "within"), [(False, 4.0602, 6e-5), (True, 1.77800, 6e-6)])
def test_nose_of_14_buses_as_quoted(limits: bool, times: float, within: float) -> None:
    """Loads and generation of the IEEE 14-bus system scaled: 4.0602 times the base without reactive limits
    (widely quoted), 1.77800 with them (computed twice by other means)."""
    net = read_network(CDF / "ieee14cdf.txt")
    case = build_model(net, everything(net, generator_limits=limits))
    assert isinstance(case, Model)
    assert 1.0 + trace(case).t_mw / case.base_mw == pytest.approx(times, abs=within)
