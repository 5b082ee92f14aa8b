"""Checks of a network that look at several cells or tables, and the open networks."""

from __future__ import annotations

import re
import time
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from study_helpers import same

from compsize.errors import InputError, OutputError
from compsize.study.build_network import build_network
from compsize.study.columns import References, read_columns
from compsize.study.files import Faults
from compsize.study.new import write_network
from compsize.study.read_network import read_network
from compsize.study.schema_tables import NETWORK_TABLES
from compsize.study.tables import RawTable
from compsize.study.topology import bridges, components

FILES = {
    "network.toml": "base_mva = 100\nfrequency_hz = 50\n",
    "buses.csv": "bus,kv,v_min_pu,v_max_pu\nA,110,0.9,1.1\nB,110,,\nC,20,,\n",
    "loads.csv": "load,bus,p_mw,q_mvar,z_share_pct,i_share_pct\nL,B,50,10,60,40\nM,C,20,5,,\n",
    "branches.csv": "branch,from_bus,to_bus,r_pu,x_pu,tap,status,regulated_bus,v_target_pu,tap_min,tap_max,tap_steps\n"
    "ab1,A,B,0.01,0.1,,,,,,,\nab2,A,B,0.01,0.1,,off,,,,,\nbc,B,C,0,0.2,0.98,,C,1.02,0.9,1.1,16\n",
    "generators.csv": "generator,bus,p_mw,v_set_pu,q_min_mvar,q_max_mvar,slack,status\n"
    "G1,A,50,1.02,-10,30,yes,\nG2,A,10,1.02,,,,\nG3,B,10,1.01,,,,off\n",
    "svcs.csv": "svc,bus,kind,q_min_mvar,q_max_mvar,v_ref_pu,slope_pct\n"
    "S,B,svc,-20,30,1.0,3\nT,A,statcom,-5,5,1.02,0\n",
}


def make(folder: Path, *changes: tuple[str, str, str]) -> Path:
    """Writes the network with each (file, old, new) replaced once."""
    folder.mkdir()
    files = dict(FILES)
    for name, old, new in changes:
        assert old in files[name]
        files[name] = files[name].replace(old, new, 1)
    for name, content in files.items():
        (folder / name).write_text(content)
    return folder


def faults_of(folder: Path) -> list[str]:
    """All faults of a network as text; empty where it is right."""
    try:
        read_network(folder)
    except InputError as error:
        return [str(fault) for fault in error.faults]
    return []


def test_the_valid_network_reads(tmp_path: Path) -> None:
    """The network that the following tests spoil is right."""
    network = read_network(make(tmp_path / "n"))
    assert network.branches.regulated_bus == ("", "", "C")
    assert network.branches.tap_steps[2] == 16
    assert network.generators.slack.tolist() == [True, False, False]
    assert network.svcs.kind == ("svc", "statcom")


@pytest.mark.parametrize(
    ("file", "old", "new", "words"),
    [
        ("buses.csv", "A,110,0.9,1.1", "A,110,1.1,0.9", "buses.csv, row 2, v_min_pu: v_min_pu is above v_max_pu."),
        ("loads.csv", "60,40", "60,41", "loads.csv, row 2, z_share_pct: z_share_pct and i_share_pct exceed 100"),
        ("branches.csv", "ab1,A,B", "ab1,A,A", "row 2, to_bus: from_bus and to_bus are the same. Correct"),
        ("branches.csv", "ab2,A,B,0.01,0.1", "ab2,A,B,0,0", "row 3, x_pu: the branch has neither resistance nor"),
        ("branches.csv", "0.98", "-0.98", "row 4, tap: -0.98 is out of range. Permitted: above 0"),
        ("branches.csv", "C,1.02,0.9", ",1.02,0.9", "row 4, regulated_bus: the tap changer lacks regulated_bus. Give"),
        ("branches.csv", "C,1.02,0.9,1.1,16", "C,1.02,,,", "the tap changer lacks tap_min, tap_max, tap_steps"),
        ("branches.csv", "0.9,1.1,16", "1.1,0.9,16", "row 4, tap_min: tap_min is above tap_max."),
        ("branches.csv", "0.98", "0.88", "row 4, tap: tap lies outside tap_min and tap_max."),
        ("branches.csv", "1.1,16", "1.1,16.5", "row 4, tap_steps: '16.5' is not a whole number."),
        ("branches.csv", "C,1.02", "D,1.02", "row 4, regulated_bus: there is no bus 'D'."),
        ("branches.csv", ",off,,,,,", ",off,C,1.0,0.9,1.1,16", ""),
        (
            "branches.csv",
            "ab1,A,B,0.01,0.1,,,,,,,",
            "ab1,A,B,0.01,0.1,,,C,1.0,0.9,1.1,16",
            "'bc' holds bus 'C' at 1.02",
        ),
        ("generators.csv", "-10,30", "30,-10", "generators.csv, row 2, q_min_mvar: q_min_mvar is above q_max_mvar."),
        (
            "generators.csv",
            "yes",
            "no",
            "no unit in service is marked as slack. Write yes in the column slack of a unit",
        ),
        ("generators.csv", "30,yes,", "30,yes,off", "the slack unit 'G1' is out of service."),
        (
            "generators.csv",
            "G2,A,10,1.02,,,,",
            "G2,A,10,1.02,,,yes,",
            "2 units in service are marked as slack: 'G1', 'G2'",
        ),
        ("generators.csv", "G2,A,10,1.02", "G2,A,10,1.03", "row 3, v_set_pu: 'G2' holds bus 'A' at 1.03 pu, but 'G1'"),
        ("generators.csv", "G3,B,10,1.01,,,,off", "G3,A,10,1.01,,,,off", ""),
        ("generators.csv", "1.01", "112", "row 4, v_set_pu: 112 is out of range. Permitted: above 0, up to 2 pu."),
        ("svcs.csv", "1.02,0", "1.03,0", "svcs.csv, row 3, v_ref_pu: without slope, 'T' holds 1.03 pu at bus 'A'"),
        ("svcs.csv", "1.02,0", "1.03,1", ""),
        ("svcs.csv", "1.0,3", "1.0,-3", "svcs.csv, row 2, slope_pct: -3 is out of range."),
        ("svcs.csv", "-20,30", "40,30", "svcs.csv, row 2, q_min_mvar: q_min_mvar is above q_max_mvar."),
        (
            "branches.csv",
            "bc,B,C,0,0.2,0.98,,",
            "bc,B,C,0,0.2,0.98,off,",
            "1 bus with load or generation not connected",
        ),
        (
            "buses.csv",
            "C,20,,\n",
            "C,20,,\nD,20,,\nE,20,,\n",
            "buses.csv, row 5, bus: 2 buses not connected to the slack",
        ),
    ],
)
def test_each_cross_check(tmp_path: Path, file: str, old: str, new: str, words: str) -> None:
    """One contradiction gives exactly the fault that names its place, and what is permitted gives none."""
    found = faults_of(make(tmp_path / "n", (file, old, new)))
    assert len(found) == (1 if words else 0), found
    assert words in "".join(found)


def test_a_bad_number_hides_no_other_fault(tmp_path: Path) -> None:
    """Faults of several tables are reported together, and none twice."""
    found = faults_of(
        make(
            tmp_path / "n",
            ("buses.csv", "B,110", "B,x"),
            ("loads.csv", "L,B,50", "L,Bx,50"),
            ("branches.csv", "0.98", "tap"),
            ("generators.csv", "-10,30", "30,-10"),
        )
    )
    assert [re.split(": ", fault)[0] for fault in found] == [
        "buses.csv, row 3, kv",
        "loads.csv, row 2, bus",
        "branches.csv, row 4, tap",
        "generators.csv, row 2, q_min_mvar",
    ]


def test_a_missing_table_hides_no_other_fault(tmp_path: Path) -> None:
    """Without buses, references to buses are not judged but all the rest is."""
    folder = make(tmp_path / "n", ("loads.csv", "L,B,50", "L,B,much"))
    (folder / "buses.csv").unlink()
    assert [fault.split(":")[0] for fault in faults_of(folder)] == ["buses.csv", "loads.csv, row 2, p_mw"]


NETWORKS = {  # buses, branches, loads, generators, shunts: lines of each file less its header
    "ieee14": (14, 20, 11, 5, 1),
    "ieee30": (30, 41, 21, 6, 2),
    "ieee57": (57, 80, 42, 7, 3),
    "ieee118": (118, 186, 99, 54, 14),
    "ieee300": (300, 411, 201, 69, 29),
    "pegase1354": (1354, 1991, 673, 260, 1082),
    "pegase2869": (2869, 4582, 1491, 510, 2197),
    "poland2383": (2383, 2896, 1826, 327, 0),
    "rte6468": (6468, 9000, 3661, 399, 97),
    "pegase9241": (9241, 16049, 4895, 1445, 7327),
}


@pytest.mark.parametrize("name", NETWORKS)
def test_the_open_networks_read_and_round_trip(name: str, tmp_path: Path, shared: Callable[[str], Path]) -> None:
    """The ten open networks read without fault, whole, and write back to the same arrays."""
    network = read_network(shared(f"networks/{name}"))
    sizes = (network.buses.bus, network.branches.branch, network.loads.load, network.generators.generator)
    assert (*map(len, sizes), len(network.shunts.shunt)) == NETWORKS[name]
    same(read_network(write_network(network, tmp_path / "n")), network)


def test_the_largest_network_reads_fast(shared: Callable[[str], Path]) -> None:
    """9,241 buses read in seconds; the bound is wide because machines are shared (0.4 s measured alone)."""
    path = shared("networks/pegase9241")
    started = time.process_time()
    read_network(path)
    assert time.process_time() - started < 3.0


def test_the_comparison_of_networks_can_fail(tmp_path: Path) -> None:
    """The helper that compares networks sees one changed cell."""
    one = read_network(make(tmp_path / "a"))
    other = read_network(make(tmp_path / "b", ("loads.csv", "50,10", "50,11")))
    with pytest.raises(AssertionError, match="q_mvar"):
        same(one, other)


# Ids as users write them: anything visible, trimmed.
IDS = st.text(st.characters(exclude_categories=("C", "Z"), include_characters=" "), min_size=1, max_size=12).map(
    str.strip
)
NUMBERS = st.floats(-1e6, 1e6, allow_nan=False)
PART = st.floats(0.0, 50.0)


@st.composite
def networks(draw: st.DrawFn) -> dict[str, RawTable]:
    """Rows of a connected network with odd ids and numbers."""
    ids = draw(st.lists(IDS.filter(bool), min_size=2, max_size=6, unique=True))
    slack = draw(st.floats(0.5, 1.5))
    rows: dict[str, list[tuple[object, ...]]] = {
        "buses": [(bus, draw(st.floats(0.1, 1e3)), draw(IDS), draw(st.sampled_from(["yes", "no"]))) for bus in ids],
        "loads": [(bus, bus, draw(NUMBERS), draw(NUMBERS), draw(PART), draw(PART), draw(IDS)) for bus in ids[1:]],
        "branches": [
            (f"{a}-{b}", a, b, draw(NUMBERS), draw(st.floats(1e-6, 10)), draw(st.floats(0.5, 2)), draw(NUMBERS))
            for a, b in pairwise(ids)
        ],
        "generators": [("G", ids[0], draw(NUMBERS), slack, draw(NUMBERS), "yes")],
        "shunts": [("S", ids[-1], draw(NUMBERS), draw(NUMBERS), draw(st.sampled_from(["on", "off"])))],
        "svcs": [],
    }
    heads = {
        "buses": "bus kv area monitored",
        "loads": "load bus p_mw q_mvar z_share_pct i_share_pct group",
        "branches": "branch from_bus to_bus r_pu x_pu tap shift_deg",
        "generators": "generator bus p_mw v_set_pu q_min_mvar slack",
        "shunts": "shunt bus b_mvar g_mw status",
        "svcs": "svc bus kind q_min_mvar q_max_mvar v_ref_pu",
    }
    return {
        name: RawTable(
            name,
            tuple(heads[name].split()),
            tuple(tuple(cell if isinstance(cell, str) else repr(cell) for cell in row) for row in found),
            tuple(range(2, len(found) + 2)),
        )
        for name, found in rows.items()
    }


@given(networks(), IDS)
@settings(max_examples=60, deadline=None)
def test_any_network_round_trips(
    tmp_path_factory: pytest.TempPathFactory, raw: dict[str, RawTable], title: str
) -> None:
    """Whatever the ids and numbers, written tables read back to the same network."""
    faults = Faults()
    columns = {name: read_columns(raw[name], NETWORK_TABLES[name], References(), faults) for name in NETWORK_TABLES}
    assert not faults
    network = build_network(columns, 100.0, 50.0, title, "")
    folder = tmp_path_factory.mktemp("round") / "n"
    same(read_network(write_network(network, folder)), network)


def test_odd_ids_read(tmp_path: Path) -> None:
    """Ids with commas, quotes, semicolons, hashes, letters of any script and numbers with zeros are kept."""
    odd = ["01", "1", "1.0", "NA", "nan", 'a"b', "x, y; z", "#1", "Größe 3", "変電所", "-", "True", "1e5"]
    folder = make(tmp_path / "n")
    quoted = ['"' + name.replace('"', '""') + '"' for name in odd]
    (folder / "buses.csv").write_text("bus,kv\n" + "".join(f"{name},110\n" for name in quoted), encoding="utf-8")
    lines = [f"{at},{a},{b},0.01,0.1\n" for at, (a, b) in enumerate(pairwise(quoted))]
    (folder / "branches.csv").write_text("branch,from_bus,to_bus,r_pu,x_pu\n" + "".join(lines), encoding="utf-8")
    (folder / "generators.csv").write_text("generator,bus,p_mw,v_set_pu,slack\nG,01,1,1,yes\n")
    (folder / "loads.csv").write_text(f"load,bus,p_mw,q_mvar\nL,{quoted[5]},1,1\n")
    (folder / "svcs.csv").unlink()
    network = read_network(folder)
    assert list(network.buses.bus) == odd
    same(read_network(write_network(network, tmp_path / "m")), network)


def test_written_tables_never_land_on_others(tmp_path: Path) -> None:
    """A folder that holds anything is refused; with overwrite its stale tables go and other files stay."""
    network = read_network(make(tmp_path / "n"))
    (tmp_path / "n" / "notes.txt").write_text("mine")
    with pytest.raises(OutputError, match="is not empty"):
        write_network(network, tmp_path / "n")
    (tmp_path / "n" / "shunts.csv").write_text("shunt,bus,b_mvar\nold,B,500\n")
    write_network(network, tmp_path / "n", overwrite=True)
    assert not (tmp_path / "n" / "shunts.csv").exists()
    assert (tmp_path / "n" / "notes.txt").read_text() == "mine"
    same(read_network(tmp_path / "n"), network)
    assert [path.name for path in tmp_path.iterdir()] == ["n"]


def brute_bridges(size: int, ends: np.ndarray) -> list[bool]:  # type: ignore[type-arg]
    """Branches whose loss raises the number of components, by trying each."""
    whole = components(size, ends).max()
    return [bool(components(size, np.delete(ends, at, axis=0)).max() > whole) for at in range(len(ends))]


@given(
    st.integers(1, 9).flatmap(
        lambda n: st.tuples(
            st.just(n),
            st.lists(
                st.tuples(st.integers(0, n - 1), st.integers(0, n - 1)).filter(lambda pair: pair[0] != pair[1]),
                max_size=14,
            ),
        )
    )
)
@settings(deadline=None)
def test_bridges_are_the_branches_whose_loss_splits(case: tuple[int, list[tuple[int, int]]]) -> None:
    """The one-walk search finds what trying every branch finds, parallel branches included."""
    size, pairs = case
    ends = np.array(pairs, dtype=np.int64).reshape(-1, 2)
    assert bridges(size, ends).tolist() == brute_bridges(size, ends)
