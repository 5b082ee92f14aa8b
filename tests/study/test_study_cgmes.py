"""Reading CGMES 2.4.15."""

from __future__ import annotations

import io
import zipfile
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from cgmes_set import write_set
from powerflow import solve
from study_helpers import same

from compsize.errors import InputError
from compsize.study.cgmes import read_cgmes
from compsize.study.new import write_network
from compsize.study.read_network import read_network
from compsize.study.records import NetworkTables

# Largest difference [pu, degrees] to the SV file of the set. In the second set one susceptance of a transformer of
# three windings enters the published state with the other sign, which makes 6e-5 pu; with that sign it is 1e-5.
SETS = {"MiniGrid_BC_BusBranch": (1e-5, 1e-4), "MicroGrid_BC_Assembled": (7e-5, 7e-4)}


@pytest.mark.parametrize("name", SETS)
def test_the_published_state_comes_out(name: str, shared: Callable[[str], Path]) -> None:
    """A power flow of the tables gives the voltages and angles of the set's own solved state (SV)."""
    network = read_cgmes(shared(f"data/cgmes/{name}"))
    v, _ = solve(network, q_limits=False)  # the published states do not hold the units' limits
    real = network.buses.monitored  # all but the star points, which no SV file knows
    assert real.sum() == {"MiniGrid_BC_BusBranch": 11, "MicroGrid_BC_Assembled": 15}[name]
    most, most_angle = SETS[name]
    assert np.abs(np.abs(v) - network.buses.v_pu)[real].max() < most
    assert np.abs(np.degrees(np.angle(v)) - network.buses.angle_deg)[real].max() < most_angle


@pytest.mark.parametrize("name", SETS)
def test_a_published_set_reads_from_a_zip_too(name: str, tmp_path: Path, shared: Callable[[str], Path]) -> None:
    """A zip of the files, and a zip of zips, read as the folder does; the tables round trip."""
    folder = shared(f"data/cgmes/{name}")
    network = read_network(folder)
    with zipfile.ZipFile(tmp_path / "flat.zip", "w") as flat, zipfile.ZipFile(tmp_path / "deep.zip", "w") as deep:
        for file in sorted(folder.glob("*.xml")):
            flat.write(file, f"sub/{file.name}")
            inner = io.BytesIO()
            with zipfile.ZipFile(inner, "w", zipfile.ZIP_DEFLATED) as bundle:
                bundle.write(file, file.name)
            deep.writestr(f"{file.stem}.zip", inner.getvalue())
    for zipped in ("flat.zip", "deep.zip"):
        for table in ("buses", "loads", "branches", "generators", "shunts"):
            found, wanted = getattr(read_network(tmp_path / zipped), table), getattr(network, table)
            assert all(
                np.array_equal(
                    getattr(found, column),
                    values,
                    equal_nan=isinstance(values, np.ndarray) and values.dtype == np.float64,
                )
                for column, values in vars(wanted).items()
            )
    same(read_network(write_network(network, tmp_path / "n")), network)


def row(network: NetworkTables, table: str, at: int) -> dict[str, object]:
    """One row of a table."""
    return {column: values[at] for column, values in vars(getattr(network, table)).items()}


def test_buses_of_an_invented_set(tmp_path: Path) -> None:
    """Nodes on both sides of a closed switch are one bus; the dead end of an open line is left out."""
    network = read_network(write_set(tmp_path / "set"))
    assert network.buses.bus == ("A", "B", "C")
    assert network.buses.kv.tolist() == [220.0, 220.0, 110.0]
    assert network.buses.area == ("Highlands",) * 3
    assert network.buses.v_min_pu.tolist() == [0.95, 0.95, 0.95]
    assert network.buses.v_max_pu.tolist() == [1.1, 1.1, 1.05]
    assert (network.base_mva, network.frequency_hz) == (100.0, 50.0)


def test_branches_of_an_invented_set(tmp_path: Path) -> None:
    """Ohms and siemens become per unit, the tap changer its ratio and range; names that are taken are extended."""
    network = read_network(write_set(tmp_path / "set"))
    assert network.branches.branch == ("Line", "Line l2", "Mill_T1")
    line = row(network, "branches", 0)
    assert line["r_pu"] == pytest.approx(4.84 * 100 / 220**2)
    assert line["x_pu"] == pytest.approx(0.1)
    assert line["b_pu"] == pytest.approx(0.0002 * 220**2 / 100)
    assert line["rating_mva"] == pytest.approx(np.sqrt(3) * 220 * 1000 / 1e3)
    transformer = row(network, "branches", 2)
    assert (transformer["from_bus"], transformer["to_bus"]) == ("B", "C")
    # 24.2 ohm at 220 kV is 0.05 pu there; seen from the to side, rated 115 kV on a bus of 110 kV
    assert transformer["x_pu"] == pytest.approx(0.05 * (115 / 110) ** 2)
    assert transformer["tap"] == pytest.approx((1 - 2 * 0.0125) / (115 / 110))
    assert transformer["tap_min"] == pytest.approx(0.9 / (115 / 110))
    assert transformer["tap_max"] == pytest.approx(1.1 / (115 / 110))
    assert (transformer["regulated_bus"], transformer["tap_steps"]) == ("C", 16.0)
    assert transformer["v_target_pu"] == pytest.approx(1.01)
    conductance = dict(zip(network.shunts.shunt, network.shunts.g_mw, strict=True))
    assert conductance["Line conductance at A"] == pytest.approx(0.00001 / 2 * 220**2)
    # half of 1e-6 S at 220 kV behind the ratio 0.975
    assert conductance["Mill_T1 conductance at B"] == pytest.approx(0.5e-6 * 220**2 / 0.975**2)


def test_units_loads_and_devices_of_an_invented_set(tmp_path: Path) -> None:
    """Units hold their targets within limits or curve, loads split by their response, ratings become Mvar."""
    network = read_network(write_set(tmp_path / "set"))
    plant, weir = row(network, "generators", 0), row(network, "generators", 1)
    assert (plant["p_mw"], plant["slack"], plant["p_max_mw"], plant["pickup"]) == (100.0, True, 250.0, 2.0)
    assert plant["v_set_pu"] == pytest.approx(1.03)
    assert (plant["q_min_mvar"], plant["q_max_mvar"]) == (-60.0, 90.0)
    assert (weir["p_mw"], weir["slack"]) == (20.0, False)
    assert (weir["q_min_mvar"], weir["q_max_mvar"]) == (-15.0, 18.0)
    assert network.loads.load == ("Town", "Town Mvar")
    assert network.loads.p_mw.tolist() == [110.0, 0.0]
    assert network.loads.q_mvar.tolist() == [0.0, 40.0]
    assert network.loads.i_share_pct.tolist() == [100.0, 50.0]
    assert network.loads.z_share_pct.tolist() == [0.0, 50.0]
    bank = network.shunts.shunt.index("Bank")
    assert network.shunts.b_mvar[bank] == pytest.approx(0.002 * 110**2)
    svc = row(network, "svcs", 0)
    assert (svc["kind"], svc["q_max_mvar"], svc["q_min_mvar"]) == ("svc", pytest.approx(50.0), pytest.approx(-20.0))
    assert svc["v_ref_pu"] == pytest.approx(1.02)
    assert svc["slope_pct"] == pytest.approx(2.0)  # 0.044 kV per Mvar on 50 Mvar at 110 kV


def test_a_solved_state_sets_positions_starts_and_slack(tmp_path: Path) -> None:
    """SV gives the tap position, the starting voltages and the power of the slack."""
    network = read_network(write_set(tmp_path / "set", solved=True))
    assert network.branches.tap[2] == pytest.approx((1 - 3 * 0.0125) / (115 / 110))
    assert network.buses.v_pu.tolist() == pytest.approx([1.03, 1.01, 1.02])
    assert network.buses.angle_deg.tolist() == [0.0, -5.0, -9.0]
    assert network.generators.p_mw.tolist() == [93.5, 20.0]


def test_control_that_is_off_or_elsewhere(tmp_path: Path) -> None:
    """A unit without control keeps its Mvar; one that holds another bus needs the solved state of its own."""
    network = read_network(
        write_set(
            tmp_path / "a",
            (
                "RotatingMachine.q=-5 RegulatingCondEq.controlEnabled=true",
                "RotatingMachine.q=-5 RegulatingCondEq.controlEnabled=false",
            ),
        )
    )
    assert (network.generators.q_min_mvar[1], network.generators.q_max_mvar[1]) == (5.0, 5.0)
    remote = (
        "RegulatingControlModeKind.voltage RegulatingControl.Terminal=#xg2",
        "RegulatingControlModeKind.voltage RegulatingControl.Terminal=#xd1",
    )
    assert read_network(write_set(tmp_path / "b", remote, solved=True)).generators.v_set_pu[1] == pytest.approx(1.01)
    with pytest.raises(InputError, match=r"SynchronousMachine 'Weir': the unit holds the voltage of bus 'C'.*Add the"):
        read_network(write_set(tmp_path / "c", remote))
    fixed = read_network(
        write_set(tmp_path / "d", ("TapChanger.controlEnabled=true", "TapChanger.controlEnabled=false"))
    )
    assert fixed.branches.regulated_bus == ("", "", "")


def test_an_open_end_takes_a_branch_out(tmp_path: Path) -> None:
    """A line open at one end is out of service, an open switch parts its nodes, an empty bank is off."""
    network = read_network(write_set(tmp_path / "a", open_terminals=("xl3b", "xl1a")))
    assert network.branches.status.tolist() == [False, True, True]
    network = read_network(write_set(tmp_path / "b", ("Switch.open=false", "Switch.open=true")))
    assert network.buses.bus == ("A", "B", "B2", "C")
    network = read_network(write_set(tmp_path / "c", ("ShuntCompensator.sections=2", "ShuntCompensator.sections=0")))
    bank = network.shunts.shunt.index("Bank")
    assert not network.shunts.status[bank]
    assert network.shunts.b_mvar[bank] == pytest.approx(0.003 * 110**2)


THREE = (
    (
        "PowerTransformerEnd.ratedU=115 PowerTransformerEnd.r=0 PowerTransformerEnd.x=0",
        "PowerTransformerEnd.ratedU=115 PowerTransformerEnd.r=0 PowerTransformerEnd.x=1\n"
        "PowerTransformerEnd e3 TransformerEnd.endNumber=3 PowerTransformerEnd.PowerTransformer=#t1 "
        "TransformerEnd.Terminal=#xl3a PowerTransformerEnd.ratedU=115 PowerTransformerEnd.r=0 PowerTransformerEnd.x=2",
    ),
)


def test_three_windings_meet_in_a_star(tmp_path: Path) -> None:
    """A transformer of three windings becomes three branches to an unmonitored bus of its first rated voltage."""
    network = read_network(write_set(tmp_path / "set", *THREE))
    assert network.buses.bus[-1] == "Mill_T1 star"
    assert not network.buses.monitored[-1]
    assert network.buses.kv[-1] == 220.0
    names = dict(zip(network.branches.branch, network.branches.x_pu, strict=True))
    assert names["Mill_T1 w1"] == pytest.approx(0.05)
    assert names["Mill_T1 w2"] == pytest.approx(1 * 100 / 115**2)
    assert names["Mill_T1 w3"] == pytest.approx(2 * 100 / 115**2)


@pytest.mark.parametrize(
    ("changer", "tap", "shift"),
    [  # two steps from neutral; published formulas of IEC 61970-301
        ("PhaseTapChangerLinear p1 PhaseTapChangerLinear.stepPhaseShiftIncrement=1.5", 1.0, 3.0),
        (
            "PhaseTapChangerSymmetrical p1 PhaseTapChangerNonLinear.voltageStepIncrement=2",
            1.0,
            2 * np.degrees(np.arctan(0.02)),
        ),
        (
            "PhaseTapChangerAsymmetrical p1 PhaseTapChangerNonLinear.voltageStepIncrement=2 "
            "PhaseTapChangerAsymmetrical.windingConnectionAngle=60",
            abs(1 + 0.04 * np.exp(1j * np.pi / 3)),
            np.degrees(np.angle(1 + 0.04 * np.exp(1j * np.pi / 3))),
        ),
    ],
)
def test_phase_shifters(tmp_path: Path, changer: str, tap: float, shift: float) -> None:
    """Each kind of phase tap changer has the ratio and angle of its formula."""
    old = "RatioTapChanger r1 TapChanger.lowStep"
    text = f"{changer} TapChanger.neutralStep=0 TapChanger.step=2 TapChanger.TransformerEnd=#e1"
    network = read_network(
        write_set(
            tmp_path / "set",
            (old, f"{text} TapChanger.lowStep=-8 TapChanger.highStep=8\nUnused r1 TapChanger.lowStep"),
            ("RatioTapChanger r1 TapChanger.step=-2", "Unused r1 TapChanger.step=-2"),
        )
    )
    assert network.branches.tap[2] == pytest.approx(tap / (115 / 110))
    assert network.branches.shift_deg[2] == pytest.approx(shift)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (("ACLineSegment.x=10", "ACLineSegment.x=ten"), "ACLineSegment 'Stub': x is 'ten', which is not a number."),
        (("SynchronousMachine.referencePriority=1", "SynchronousMachine.referencePriority=0"), "no machine in service"),
        (("TransformerEnd.Terminal=#xt1b", "TransformerEnd.Terminal=#gone"), "'e2': the winding has no terminal. Add"),
        (("EnergyConsumer d1", "Unknown d9"), "1 terminals belong to equipment that is not in the set. Add the"),
        (("PowerTransformerEnd.ratedU=115", "PowerTransformerEnd.ratedU=0"), "the winding has no rated voltage"),
        (("LinearShuntCompensator", "FrequencyConverter"), "equipment of this kind is not read. Leave it out"),
        (
            ("SynchronousMachine.minQ=-60", "SynchronousMachine.minQ=95"),
            "generator 'Plant', q_min_mvar: q_min_mvar is above",
        ),
        (("RegulatingControl.targetValue=226.6", "RegulatingControl.targetValue=226600"), "v_set_pu: 1030.0 is out of"),
        (("nominalVoltage=110", "nominalVoltage=0"), "TopologicalNode 'C': there is no base voltage."),
    ],
)
def test_faults_name_the_object(tmp_path: Path, change: tuple[str, str], words: str) -> None:
    """What is wrong in a set is a fault that names set, class and object."""
    with pytest.raises(InputError, match="in the input") as caught:
        read_network(write_set(tmp_path / "set", change))
    assert words in str(caught.value)
    assert caught.value.faults[0].file.startswith("set")


def test_incomplete_and_foreign_files_are_refused(tmp_path: Path) -> None:
    """Missing profiles, broken XML, other XML and broken zips are faults with a remedy."""
    folder = write_set(tmp_path / "set")
    (folder / "invented_TP.xml").rename(tmp_path / "TP.xml")
    with pytest.raises(InputError, match=r"none of the 2 XML files holds topology \(TP\)\. Give the EQ, SSH and TP"):
        read_network(folder)
    text = (tmp_path / "TP.xml").read_text()
    (folder / "invented_TP.xml").write_text(text.replace('rdf:resource="#_nC"', 'rdf:resource="#_nX"'))
    with pytest.raises(
        InputError, match=r"EnergyConsumer 'Town': a terminal is connected to no topological node\. Add"
    ):
        read_network(folder)
    (folder / "invented_TP.xml").write_text(text)
    (folder / "invented_SSH.xml").rename(tmp_path / "SSH.xml")
    with pytest.raises(InputError, match=r"no file holds the steady-state hypothesis \(SSH\)"):
        read_network(folder)
    (folder / "broken.xml").write_text("<a>\n<b></a>")
    with pytest.raises(InputError, match=r"broken\.xml, row 2: the XML syntax is wrong"):
        read_network(folder)
    (folder / "broken.xml").write_text("<a/>")
    with pytest.raises(InputError, match=r"broken\.xml: this is not a CGMES 2\.4\.15 file"):
        read_network(folder)
    (tmp_path / "n.zip").write_bytes(b"PK no zip")
    with pytest.raises(InputError, match=r"n\.zip: the zip cannot be read"):
        read_network(tmp_path / "n.zip")
