"""Reading the IEEE Common Data Format."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from powerflow import solve
from study_helpers import same

from compsize.errors import InputError
from compsize.study.cdf import read_cdf
from compsize.study.new import write_network
from compsize.study.read_network import read_network
from compsize.study.read_study import read_study

# Items of an invented five-bus file; columns by the format's description.
TITLE = " 01/01/20 NOBODY IN PARTICULAR  100.0  2020 W Invented five bus system"
BUS_COLUMNS = (1, 7, 19, 21, 25, 28, 34, 41, 50, 60, 68, 77, 85, 91, 99, 107, 115, 124)
BRANCH_COLUMNS = (1, 6, 11, 13, 17, 19, 20, 30, 41, 51, 57, 63, 69, 74, 77, 84, 91, 98, 106, 113, 120)
BUSES = (
    (1, "Alderwick", 1, 1, 3, 1.04, 0.0, 0.0, 0.0, 95.2, 1.5, 220.0, 1.04, 0.0, 0.0, 0.0, 0.0, 0),
    (2, "Birchholm", 1, 1, 2, 1.02, -2.0, 20.0, 10.0, 40.0, 9.0, 220.0, 1.021, 50.0, -30.0, 0.0, 0.0, 0),
    (3, "Cedarcombe", 2, 1, 0, 1.00, -6.0, 90.0, 30.0, 0.0, 0.0, 110.0, 0.0, 0.0, 0.0, 0.01, 0.2, 0),
    (4, "Dunmoor", 2, 1, 1, 1.01, -7.0, 25.0, -5.0, 5.0, 2.0, 0.0, 0.0, 1.1, 0.9, 0.0, 0.0, 0),
    (5, "Elmfold", 0, 1, 0, 1.01, -5.0, 0.0, 0.0, 0.0, 0.0, 110.0, 0.0, 0.0, 0.0, 0.0, -0.05, 0),
)
BRANCHES = (
    (1, 2, 1, 1, 1, 0, 0.01, 0.08, 0.05, 300, 0, 0, 0, 0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0),
    (1, 2, 1, 1, 1, 0, 0.01, 0.08, 0.05, 300, 0, 0, 0, 0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0),
    (2, 3, 1, 1, 1, 2, 0.0, 0.1, 0.0, 0, 0, 0, 3, 2, 0.975, 0.0, 0.9, 1.1, 0.0125, 0.99, 1.01),
    (1, 5, 1, 1, 1, 1, 0.0, 0.12, 0.0, 0, 0, 0, 0, 0, 0.96, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0),
    (5, 4, 1, 1, 2, 4, 0.0, 0.05, 0.0, 0, 0, 0, 0, 0, 1.0, -3.5, -10.0, 10.0, 1.0, 0.0, 20.0),
    (3, 4, 1, 1, 1, 0, 0.02, 0.1, 0.01, 0, 0, 0, 0, 0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0),
)


def card(items: tuple[object, ...], columns: tuple[int, ...]) -> str:
    """Puts each item at its first column."""
    line = ""
    for item, column in zip(items, columns, strict=True):
        line = line.ljust(column - 1) + str(item)
    return line


def text(buses: tuple[tuple[object, ...], ...] = BUSES, branches: tuple[tuple[object, ...], ...] = BRANCHES) -> str:
    """The whole file."""
    return "\r\n".join(
        [
            TITLE,
            f"BUS DATA FOLLOWS                            {len(buses)} ITEMS",
            *(card(items, BUS_COLUMNS) for items in buses),
            "-999",
            f"BRANCH DATA FOLLOWS                         {len(branches)} ITEMS",
            *(card(items, BRANCH_COLUMNS) for items in branches),
            "-999",
            "LOSS ZONES FOLLOWS                     1 ITEMS",
            "  1 INVENTED",
            "-99",
            "END OF DATA",
        ]
    )


def changed(items: tuple[tuple[object, ...], ...], row: int, at: int, value: object) -> tuple[tuple[object, ...], ...]:
    """One item of one card changed."""
    return tuple((*i[:at], value, *i[at + 1 :]) if r == row else i for r, i in enumerate(items))


def read(path: Path, content: str):  # type: ignore[no-untyped-def]
    """Reads the file with this content."""
    path.write_text(content, encoding="latin-1", newline="")
    return read_cdf(path)


def test_every_item_lands_in_its_table(tmp_path: Path) -> None:
    """Buses, loads, units, shunts, ratios, shifts and tap changers are those of the file."""
    network = read(tmp_path / "five.cdf", text())
    assert network.title == "Invented five bus system"
    assert (network.base_mva, network.frequency_hz) == (100.0, 60.0)
    assert network.buses.bus == ("1", "2", "3", "4", "5")
    assert network.buses.kv.tolist() == [220.0, 220.0, 110.0, 1.0, 110.0]
    assert network.buses.area == ("1", "1", "2", "2", "")
    assert network.buses.v_pu.tolist() == [1.04, 1.02, 1.0, 1.01, 1.01]
    assert network.buses.angle_deg.tolist() == [0.0, -2.0, -6.0, -7.0, -5.0]
    assert network.loads.load == ("2", "3", "4")
    assert network.loads.q_mvar.tolist() == [10.0, 30.0, -5.0]
    units = network.generators
    assert units.generator == ("1", "2", "4")
    assert units.slack.tolist() == [True, False, False]
    assert units.v_set_pu.tolist() == [1.04, 1.021, 1.01]
    assert units.q_min_mvar.tolist() == [-math.inf, -30.0, 2.0]
    assert units.q_max_mvar.tolist() == [math.inf, 50.0, 2.0]
    assert network.shunts.shunt == ("3", "5")
    assert network.shunts.b_mvar.tolist() == [20.0, -5.0]
    assert network.shunts.g_mw.tolist() == [1.0, 0.0]
    branches = network.branches
    assert branches.branch == ("1-2-1", "1-2-2", "2-3-1", "1-5-1", "5-4-2", "3-4-1")
    assert branches.tap.tolist() == [1.0, 1.0, 0.975, 0.96, 1.0, 1.0]
    assert branches.shift_deg.tolist() == [0.0, 0.0, 0.0, 0.0, -3.5, 0.0]
    assert branches.rating_mva[:2].tolist() == [300.0, 300.0]
    assert np.isnan(branches.rating_mva[2:]).all()
    assert branches.regulated_bus == ("", "", "3", "", "", "")
    assert [branches.v_target_pu[2], branches.tap_min[2], branches.tap_max[2]] == [1.0, 0.9, 1.1]
    assert branches.tap_steps[2] == 16


def test_a_cdf_network_writes_as_tables(tmp_path: Path) -> None:
    """A network read from CDF, written as tables and read again is the same, also inside a study."""
    network = read(tmp_path / "five.cdf", text())
    same(read_network(write_network(network, tmp_path / "n")), network)
    (tmp_path / "study.toml").write_text('network = "five.cdf"\n[[requirement]]\ncases = "intact"\nmargin_mw = 1\n')
    study = read_study(tmp_path)
    same(study.network, network)
    assert [name for name, _ in study.files] == ["study.toml", "five.cdf"]


def test_unusable_tap_limits_leave_a_fixed_ratio(tmp_path: Path) -> None:
    """Without limits or a controlled bus a variable tap is the final ratio; without voltages the solved one holds."""
    for at, value in ((16, 0.0), (18, 0.0), (12, 0), (12, 99)):
        network = read(tmp_path / "five.cdf", text(branches=changed(BRANCHES, 2, at, value)))
        assert network.branches.regulated_bus[2] == ""
        assert network.branches.tap[2] == 0.975
        assert np.isnan(network.branches.tap_min[2])
    network = read(tmp_path / "five.cdf", text(branches=changed(changed(BRANCHES, 2, 19, 0.0), 2, 20, 0.0)))
    assert network.branches.v_target_pu[2] == 1.0


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (text(changed(BUSES, 0, 4, 2)), "five.cdf, slack: no bus has the type 3 (swing). Give exactly one"),
        (text(changed(BUSES, 1, 4, 3)), "five.cdf, slack: 2 buses have the type 3"),
        (text(changed(BUSES, 1, 4, 5)), "five.cdf, row 4, type: there is no bus type 5. Write 0, 1, 2 or 3."),
        (text(changed(BUSES, 1, 17, 3)), "row 4, remote bus: the unit holds the voltage of bus 3; a unit can hold"),
        (text(changed(BUSES, 2, 7, "9x.0")), "row 5, load MW: '9x.0' is not a number (columns 41 to 49)."),
        (text(changed(BUSES, 2, 0, "2")), "row 5, bus: the bus '2' stands twice (also in row 4)."),
        (text(branches=changed(BRANCHES, 3, 1, 8)), "row 13, to_bus: there is no bus '8'."),
        (text(branches=changed(BRANCHES, 3, 7, 0.0)), "row 13, x_pu: the branch has neither resistance nor"),
        (text(branches=changed(BRANCHES, 3, 5, 7)), "row 13, type: there is no branch type 7."),
        (text().replace("100.0  2020", "0.0    2020"), "row 1: the MVA base in columns 32 to 37 is not a positive"),
    ],
)
def test_faults_name_line_and_item(tmp_path: Path, content: str, words: str) -> None:
    """Each wrong item is a fault with its line and a remedy."""
    with pytest.raises(InputError, match="in the input") as caught:
        read(tmp_path / "five.cdf", content)
    assert words in str(caught.value.faults[0])
    assert caught.value.faults[0].remedy


def test_other_files_are_refused(tmp_path: Path) -> None:
    """A file without the sections of the format is refused with a remedy."""
    with pytest.raises(InputError, match="there is no line 'BUS DATA FOLLOWS'"):
        read(tmp_path / "other.txt", "bus,kv\n1,110\n")


# Largest difference [pu, degrees] to the solved state that the file itself prints, which is rounded to 0.001 pu
# and 0.01 degrees; the buses named print a value that does not fit the file's own network.
PUBLISHED = {
    "ieee14cdf.txt": (0.0006, 0.018, {"4": 0.0014}),
    "ieee30cdf.txt": (0.0007, 0.43, {}),
    "ieee57cdf.txt": (0.0010, 0.06, {"46": 0.0100}),
}


@pytest.mark.parametrize("name", PUBLISHED)
def test_the_published_solutions_come_out(name: str, shared: Callable[[str], Path]) -> None:
    """A power flow of the tables gives the voltages that the published files print as solved."""
    network = read_cdf(shared(f"data/ieee_cdf/{name}"))
    most, most_angle, odd = PUBLISHED[name]
    v, _ = solve(network)
    for bus, size, printed, angle, printed_angle in zip(
        network.buses.bus,
        np.abs(v),
        network.buses.v_pu,
        np.degrees(np.angle(v)),
        network.buses.angle_deg,
        strict=True,
    ):
        assert abs(size - printed) < odd.get(bus, most), bus
        assert abs(angle - printed_angle) < (1.0 if bus in odd else most_angle), bus


def test_the_fourteen_bus_system_is_the_known_one(shared: Callable[[str], Path]) -> None:
    """259 MW and 73.5 Mvar of load, and bus 14 at 1.036 pu and -16.04 degrees (published)."""
    network = read_network(shared("data/ieee_cdf/ieee14cdf.txt"))
    assert network.loads.p_mw.sum() == pytest.approx(259.0)
    assert network.loads.q_mvar.sum() == pytest.approx(73.5)
    v, _ = solve(network)
    assert abs(v[13]) == pytest.approx(1.036, abs=5e-4)
    assert math.degrees(np.angle(v[13])) == pytest.approx(-16.04, abs=0.01)
