"""A small invented CGMES set, written as XML, for the tests."""

from __future__ import annotations

from pathlib import Path

CIM = "http://iec.ch/TC57/2013/CIM-schema-cim16#"
HEAD = (
    '<?xml version="1.0" encoding="utf-8"?>\n<rdf:RDF xmlns:cim="' + CIM + '" '
    'xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#">\n'
)

# class, identifier, attributes; a value that starts with # is a reference, with * a choice; indented lines go on
EQUIPMENT = """
BaseVoltage bv220 BaseVoltage.nominalVoltage=220
BaseVoltage bv110 BaseVoltage.nominalVoltage=110
SubGeographicalRegion reg name=Highlands
Substation sub name=Mill Substation.Region=#reg
VoltageLevel vl220 name=220 VoltageLevel.BaseVoltage=#bv220 VoltageLevel.Substation=#sub
  VoltageLevel.lowVoltageLimit=209 VoltageLevel.highVoltageLimit=242
VoltageLevel vl110 name=110 VoltageLevel.BaseVoltage=#bv110 VoltageLevel.Substation=#sub
ACLineSegment l1 name=Line ACLineSegment.r=4.84 ACLineSegment.x=48.4 ACLineSegment.bch=0.0002
  ACLineSegment.gch=0.00001
ACLineSegment l2 name=Line ACLineSegment.r=4.84 ACLineSegment.x=48.4 ACLineSegment.bch=0.0002
PowerTransformer t1 name=Mill_T1
PowerTransformerEnd e1 TransformerEnd.endNumber=1 PowerTransformerEnd.PowerTransformer=#t1
  TransformerEnd.Terminal=#xt1a PowerTransformerEnd.ratedU=220 PowerTransformerEnd.r=0.484
  PowerTransformerEnd.x=24.2 PowerTransformerEnd.b=-0.00002 PowerTransformerEnd.g=0.000001
PowerTransformerEnd e2 TransformerEnd.endNumber=2 PowerTransformerEnd.PowerTransformer=#t1
  TransformerEnd.Terminal=#xt1b PowerTransformerEnd.ratedU=115 PowerTransformerEnd.r=0 PowerTransformerEnd.x=0
RatioTapChanger r1 TapChanger.lowStep=-8 TapChanger.highStep=8 TapChanger.neutralStep=0
  TapChanger.neutralU=220 RatioTapChanger.stepVoltageIncrement=1.25 RatioTapChanger.TransformerEnd=#e1
  TapChanger.TapChangerControl=#tc1
TapChangerControl tc1 RegulatingControl.mode=*RegulatingControlModeKind.voltage RegulatingControl.Terminal=#xt1b
SynchronousMachine g1 name=Plant RegulatingCondEq.RegulatingControl=#rc1 SynchronousMachine.minQ=-60
  SynchronousMachine.maxQ=90 RotatingMachine.GeneratingUnit=#u1
GeneratingUnit u1 GeneratingUnit.maxOperatingP=250 GeneratingUnit.normalPF=2
RegulatingControl rc1 RegulatingControl.mode=*RegulatingControlModeKind.voltage RegulatingControl.Terminal=#xg1
SynchronousMachine g2 name=Weir SynchronousMachine.InitialReactiveCapabilityCurve=#cc
  RegulatingCondEq.RegulatingControl=#rc2
ReactiveCapabilityCurve cc
CurveData c0 CurveData.Curve=#cc CurveData.xvalue=0 CurveData.y1value=-20 CurveData.y2value=20
CurveData c1 CurveData.Curve=#cc CurveData.xvalue=40 CurveData.y1value=-10 CurveData.y2value=16
RegulatingControl rc2 RegulatingControl.mode=*RegulatingControlModeKind.voltage RegulatingControl.Terminal=#xg2
EnergyConsumer d1 name=Town EnergyConsumer.LoadResponse=#lr
LoadResponseCharacteristic lr LoadResponseCharacteristic.exponentModel=true
  LoadResponseCharacteristic.pVoltageExponent=1 LoadResponseCharacteristic.qVoltageExponent=1.5
LinearShuntCompensator s1 name=Bank LinearShuntCompensator.bPerSection=0.001
  ShuntCompensator.maximumSections=3 ShuntCompensator.normalSections=2
StaticVarCompensator v1 name=Svc StaticVarCompensator.capacitiveRating=242
  StaticVarCompensator.inductiveRating=-605 StaticVarCompensator.slope=0.044
  StaticVarCompensator.sVCControlMode=*SVCControlMode.voltage StaticVarCompensator.voltageSetPoint=112.2
Breaker k1 name=Coupler Switch.normalOpen=false
ACLineSegment l3 name=Stub ACLineSegment.r=1 ACLineSegment.x=10
CurrentLimit cl OperationalLimit.OperationalLimitSet=#ls OperationalLimit.OperationalLimitType=#lt
  CurrentLimit.value=1000
OperationalLimitSet ls OperationalLimitSet.Terminal=#xl1a
OperationalLimitType lt OperationalLimitType.limitType=*LimitTypeKind.patl
"""
NODES = {"A": "220", "B": "220", "B2": "220", "C": "110", "D": "110"}
TERMINALS = {  # terminal: equipment, sequence number, node
    "xl1a": ("l1", 1, "A"),
    "xl1b": ("l1", 2, "B"),
    "xl2a": ("l2", 1, "A"),
    "xl2b": ("l2", 2, "B2"),
    "xk1a": ("k1", 1, "B"),
    "xk1b": ("k1", 2, "B2"),
    "xt1a": ("t1", 1, "B2"),
    "xt1b": ("t1", 2, "C"),
    "xg1": ("g1", 1, "A"),
    "xg2": ("g2", 1, "B"),
    "xd1": ("d1", 1, "C"),
    "xs1": ("s1", 1, "C"),
    "xv1": ("v1", 1, "C"),
    "xl3a": ("l3", 1, "C"),
    "xl3b": ("l3", 2, "D"),
}
HYPOTHESIS = """
SynchronousMachine g1 RotatingMachine.p=-100 RotatingMachine.q=-10 RegulatingCondEq.controlEnabled=true
  SynchronousMachine.referencePriority=1
SynchronousMachine g2 RotatingMachine.p=-20 RotatingMachine.q=-5 RegulatingCondEq.controlEnabled=true
  SynchronousMachine.referencePriority=0
RegulatingControl rc1 RegulatingControl.enabled=true RegulatingControl.targetValue=226.6
RegulatingControl rc2 RegulatingControl.enabled=true RegulatingControl.targetValue=222.2
TapChangerControl tc1 RegulatingControl.enabled=true RegulatingControl.targetValue=111.1
RatioTapChanger r1 TapChanger.step=-2 TapChanger.controlEnabled=true
EnergyConsumer d1 EnergyConsumer.p=110 EnergyConsumer.q=40
LinearShuntCompensator s1 ShuntCompensator.sections=2
StaticVarCompensator v1 RegulatingCondEq.controlEnabled=true StaticVarCompensator.q=0
Breaker k1 Switch.open=false
"""
SOLVED = """
SvVoltage sv1 SvVoltage.TopologicalNode=#nA SvVoltage.v=226.6 SvVoltage.angle=0
SvVoltage sv2 SvVoltage.TopologicalNode=#nB SvVoltage.v=222.2 SvVoltage.angle=-5
SvVoltage sv3 SvVoltage.TopologicalNode=#nC SvVoltage.v=112.2 SvVoltage.angle=-9
SvTapStep st1 SvTapStep.TapChanger=#r1 SvTapStep.position=-3
SvPowerFlow sp1 SvPowerFlow.Terminal=#xg1 SvPowerFlow.p=-93.5 SvPowerFlow.q=-7
"""


def _file(rows: list[str], attribute: str) -> str:
    lines = [HEAD]
    for row in rows:
        kind, identifier, *cells = row.split()
        lines.append(f'<cim:{kind} rdf:{attribute}="{"#" if attribute == "about" else ""}_{identifier}">\n')
        for cell in cells:
            key, value = cell.split("=", 1)
            key = "IdentifiedObject.name" if key == "name" else key
            if value.startswith("#"):
                lines.append(f'  <cim:{key} rdf:resource="#_{value[1:]}"/>\n')
            elif value.startswith("*"):
                lines.append(f'  <cim:{key} rdf:resource="{CIM}{value[1:]}"/>\n')
            else:
                lines.append(f"  <cim:{key}>{value}</cim:{key}>\n")
        lines.append(f"</cim:{kind}>\n")
    return "".join([*lines, "</rdf:RDF>\n"])


def write_set(
    folder: Path, *changes: tuple[str, str], open_terminals: tuple[str, ...] = ("xl3b",), solved: bool = False
) -> Path:
    """Writes EQ, TP, SSH and, where ``solved``, SV; each (old, new) is replaced in EQ, SSH and SV."""
    folder.mkdir()
    parts = {"EQ": EQUIPMENT, "SSH": HYPOTHESIS, "SV": SOLVED}
    parts = {name: part.replace("\n  ", " ") for name, part in parts.items()}
    for old, new in changes:
        assert any(old in part for part in parts.values()), old
        parts = {name: part.replace(old, new) for name, part in parts.items()}
    rows = {name: [row for row in part.splitlines() if row] for name, part in parts.items()}
    rows["EQ"] += [
        f"Terminal {name} Terminal.ConductingEquipment=#{equipment} ACDCTerminal.sequenceNumber={number}"
        for name, (equipment, number, _) in TERMINALS.items()
    ]
    rows["SSH"] += [
        f"Terminal {name} ACDCTerminal.connected={'false' if name in open_terminals else 'true'}" for name in TERMINALS
    ]
    rows["TP"] = [
        f"TopologicalNode n{name} name={name} TopologicalNode.BaseVoltage=#bv{kv} "
        f"TopologicalNode.ConnectivityNodeContainer=#vl{kv}"
        for name, kv in NODES.items()
    ] + [f"Terminal {name} Terminal.TopologicalNode=#n{node}" for name, (_, _, node) in TERMINALS.items()]
    for name, part in rows.items():
        if name != "SV" or solved:
            attribute = "about" if name == "SSH" else "ID"
            (folder / f"invented_{name}.xml").write_text(_file(part, attribute), encoding="utf-8")
    return folder
