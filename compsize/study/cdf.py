"""Reading the IEEE Common Data Format for solved load flow data.

The columns are those of the format's published description (Working Group on a Common Format for the
Exchange of Solved Load Flow Data, IEEE Trans. Power Apparatus and Systems PAS-92, 1973, pp. 1916-1925,
doi:10.1109/TPAS.1973.293571). What the format leaves open is decided here:

- Ids are the bus numbers; a branch is named TAP-Z-CIRCUIT. Names are not unique in the format and stay out.
- A base kV of 0 becomes 1 kV, and the frequency, which the format does not carry, 60 Hz. Neither enters
  a power flow.
- The swing unit is the slack without reactive limits. A unit of type 2 holds its desired voltage; two
  limits of 0 mean that none are given. Generation at a bus of type 0 or 1 becomes a unit that is held at
  its Mvar by equal limits; the voltage limits of type 1 are not used.
- A bus that controls another bus has no counterpart in the tables and is a fault.
- The tap side is the from side, a ratio of 0 means 1. A variable tap for voltage control (type 2) with
  usable limits, step and controlled bus becomes a tap changer that holds the middle of its voltage limits
  or, without these, the solved voltage. Every other ratio and angle is fixed at its final value.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from compsize.study.build_network import MadeTables, NetworkDraft, draft_from_raw
from compsize.study.check_network import check_network
from compsize.study.columns import as_number
from compsize.study.files import Faults, FileReader
from compsize.study.records import NetworkTables

__all__ = ["draft_cdf", "read_cdf"]

FREQUENCY_HZ = 60.0
MOST_TAP_STEPS = 1000

# First and last column of each item, counted from 1, in the order of the card.
_BUS_ITEMS = {
    "bus number": (1, 4),
    "area": (19, 20),
    "zone": (21, 23),
    "type": (25, 26),
    "final voltage": (28, 33),
    "final angle": (34, 40),
    "load MW": (41, 49),
    "load Mvar": (50, 59),
    "generation MW": (60, 67),
    "generation Mvar": (68, 75),
    "base kV": (77, 83),
    "desired voltage": (85, 90),
    "maximum Mvar": (91, 98),
    "minimum Mvar": (99, 106),
    "shunt conductance": (107, 114),
    "shunt susceptance": (115, 122),
    "remote bus": (124, 127),
}
_BRANCH_ITEMS = {
    "tap bus": (1, 4),
    "Z bus": (6, 9),
    "area": (11, 12),
    "zone": (13, 14),
    "circuit": (17, 17),
    "type": (19, 19),
    "resistance": (20, 29),
    "reactance": (30, 40),
    "charging": (41, 50),
    "rating": (51, 55),
    "rating 2": (57, 61),
    "rating 3": (63, 67),
    "control bus": (69, 72),
    "side": (74, 74),
    "ratio": (77, 82),
    "angle": (84, 90),
    "minimum tap": (91, 97),
    "maximum tap": (98, 104),
    "step": (106, 111),
    "minimum voltage": (113, 119),
    "maximum voltage": (120, 126),
}


def read_cdf(path: str | os.PathLike[str]) -> NetworkTables:
    """Reads and checks a network in the IEEE Common Data Format.

    :raises InputError: with every fault of the file at once, by line and item.
    """
    place = Path(path)
    faults = Faults()
    draft = draft_cdf(place, place.name, FileReader(faults))
    faults.raise_if_any()
    assert draft is not None
    return draft.tables


def draft_cdf(path: Path, name: str, reader: FileReader) -> NetworkDraft | None:
    """Reads a network, noting faults in ``reader.faults``; None where the file is not of the format."""
    content = reader.bytes_of(path, name)
    if content is None:
        return None
    # Only digits are used of the cards; names may be in any encoding of one byte a letter.
    lines = content.decode("latin-1").splitlines()
    cards = _sections(lines)
    for section in ("BUS", "BRANCH"):
        if section not in cards:
            remedy = "Name an IEEE CDF file, a folder of tables, an .xlsx, or a CGMES folder or zip."
            reader.faults.add(name, f"there is no line '{section} DATA FOLLOWS', as IEEE CDF asks.", remedy)
    if not {"BUS", "BRANCH"} <= cards.keys():
        return None
    base = as_number(lines[0][30:37].strip()) or 0.0
    if base <= 0:
        reader.faults.add(name, "the MVA base in columns 32 to 37 is not a positive number.", "Write it there.", row=1)
        base = 100.0
    buses = list(_cards(cards["BUS"], _BUS_ITEMS, 17, name, reader.faults))
    branches = list(_cards(cards["BRANCH"], _BRANCH_ITEMS, 0, name, reader.faults))
    made = MadeTables(name)
    _add_buses(made, buses, base, reader.faults)
    _add_branches(made, branches, {card.whole("bus number"): card for card in buses}, reader.faults)
    title = lines[0][45:73].strip()
    draft = draft_from_raw(
        made.raw(),
        name,
        reader.faults,
        base_mva=base,
        frequency_hz=FREQUENCY_HZ,
        title="".join(letter for letter in title if letter.isprintable()),
        source=f"IEEE CDF file {path.name}",
    )
    check_network(draft, reader.faults)
    return draft


@dataclass(frozen=True)
class _Card:
    """One line as numbers by item; a blank item is 0, as the format asks, and so is a faulty one."""

    row: int
    values: dict[str, float]

    def __getitem__(self, item: str) -> float:
        return self.values[item]

    def whole(self, item: str) -> str:
        """A whole number as text."""
        return str(int(self.values[item]))


def _sections(lines: list[str]) -> dict[str, list[tuple[int, str]]]:
    """Lines with their numbers by the first word of the section's header."""
    found: dict[str, list[tuple[int, str]]] = {}
    current: list[tuple[int, str]] | None = None
    for row, line in enumerate(lines, 1):
        words = line.split()
        if "FOLLOWS" in line or (words[1:2] == ["DATA"] and words[0].isalpha()):
            current = found.setdefault(words[0].upper(), [])
        elif line.startswith("-9") or line.startswith("END OF DATA"):
            current = None
        elif current is not None and words:
            current.append((row, line))
    return found


def _cards(
    lines: list[tuple[int, str]], items: dict[str, tuple[int, int]], name_end: int, file: str, faults: Faults
) -> Iterator[_Card]:
    """Cards as numbers. Files in use keep the order of the items better than their columns, so the columns
    only count where the items after the name are not all there, apart from each other."""
    for row, line in lines:
        texts = [line[first - 1 : last].strip() for first, last in items.values()]
        words = ([texts[0]] if name_end else []) + line[name_end:].split()
        if len(words) == len(items):
            texts = words
        values: dict[str, float] = {}
        for (item, (first, last)), text in zip(items.items(), texts, strict=True):
            value = as_number(text) if text else 0.0
            if value is None:
                message = f"'{text}' is not a number (columns {first} to {last})."
                faults.add(file, message, "Every item stands in its own columns.", row=row, column=item)
                value = 0.0
            elif item.endswith(("bus", "bus number", "type", "area")) and value != int(value):
                faults.add(file, f"'{text}' is not a whole number.", "Write a whole number.", row=row, column=item)
                value = 0.0
            values[item] = value
        yield _Card(row, values)


def _add_buses(made: MadeTables, cards: list[_Card], base: float, faults: Faults) -> None:
    swings = 0
    for card in cards:
        bus = card.whole("bus number")
        if card["bus number"] <= 0:
            faults.add(made.file, "the bus has no number.", "Write it in columns 1 to 4.", card.row, "bus number")
        start = {"v_pu": card["final voltage"], "angle_deg": card["final angle"]} if card["final voltage"] > 0 else {}
        area = card.whole("area") if card["area"] else ""
        made.add("buses", card.row, bus=bus, kv=card["base kV"] or 1.0, area=area, **start)
        if card["load MW"] or card["load Mvar"]:
            made.add("loads", card.row, load=bus, bus=bus, p_mw=card["load MW"], q_mvar=card["load Mvar"])
        if card["shunt conductance"] or card["shunt susceptance"]:
            b, g = card["shunt susceptance"] * base, card["shunt conductance"] * base
            made.add("shunts", card.row, shunt=bus, bus=bus, b_mvar=b, g_mw=g)
        kind = card["type"]
        if kind not in (0, 1, 2, 3):
            faults.add(made.file, f"there is no bus type {kind:g}.", "Write 0, 1, 2 or 3.", row=card.row, column="type")
        if kind == 3:
            swings += 1
        _add_unit(made, card, bus, faults)
    if swings != 1:
        message = f"{swings or 'no'} buses have the type 3 (swing)." if swings else "no bus has the type 3 (swing)."
        faults.add(made.file, message, "Give exactly one bus the type 3.", column="slack")


def _add_unit(made: MadeTables, card: _Card, bus: str, faults: Faults) -> None:
    kind = card["type"]
    generates = card["generation MW"] != 0 or card["generation Mvar"] != 0
    if kind in (2, 3):
        if card["remote bus"] and card.whole("remote bus") != bus:
            message = f"the unit holds the voltage of bus {card.whole('remote bus')}; a unit can hold its own bus only."
            remedy = "Write 0 as remote bus and the unit's final voltage as desired voltage."
            faults.add(made.file, message, remedy, row=card.row, column="remote bus")
        v_set = card["desired voltage"] if card["desired voltage"] > 0 else card["final voltage"]
        limits: dict[str, float] = {}
        if kind == 2 and (card["minimum Mvar"] or card["maximum Mvar"]):
            limits = {"q_min_mvar": card["minimum Mvar"], "q_max_mvar": card["maximum Mvar"]}
    elif generates:
        v_set = card["final voltage"] if card["final voltage"] > 0 else 1.0
        limits = {"q_min_mvar": card["generation Mvar"], "q_max_mvar": card["generation Mvar"]}
    else:
        return
    slack = "yes" if kind == 3 else "no"
    p_mw = card["generation MW"]
    made.add("generators", card.row, generator=bus, bus=bus, p_mw=p_mw, v_set_pu=v_set, slack=slack, **limits)


def _add_branches(made: MadeTables, cards: list[_Card], buses: dict[str, _Card], faults: Faults) -> None:
    used: set[str] = set()
    for card in cards:
        start, end = card.whole("tap bus"), card.whole("Z bus")
        circuit = int(card["circuit"]) or 1
        while f"{start}-{end}-{circuit}" in used:  # some files give parallel branches one circuit number
            circuit += 1
        used.add(f"{start}-{end}-{circuit}")
        cells: dict[str, float | str] = {
            "branch": f"{start}-{end}-{circuit}",
            "from_bus": start,
            "to_bus": end,
            "r_pu": card["resistance"],
            "x_pu": card["reactance"],
            "b_pu": card["charging"],
            "tap": card["ratio"] or 1.0,
            "shift_deg": card["angle"],
        }
        if card["rating"] > 0:
            cells["rating_mva"] = card["rating"]
        if card["type"] not in (0, 1, 2, 3, 4):
            message = f"there is no branch type {card['type']:g}."
            faults.add(made.file, message, "Write 0, 1, 2, 3 or 4.", row=card.row, column="type")
        if card["type"] == 2:
            cells |= _tap_changer(card, buses)
        made.add("branches", card.row, **cells)


def _tap_changer(card: _Card, buses: dict[str, _Card]) -> dict[str, float | str]:
    """The cells of a tap changer; empty where limits, step or controlled bus are not usable."""
    low, high, step, tap = card["minimum tap"], card["maximum tap"], card["step"], card["ratio"] or 1.0
    held = card.whole("control bus")
    if (
        held not in buses
        or not 0 < low < high
        or step < (high - low) / MOST_TAP_STEPS
        or not low - 1e-6 <= tap <= high + 1e-6
    ):
        return {}
    least, most = card["minimum voltage"], card["maximum voltage"]
    target = (least + most) / 2 if 0 < least <= most else buses[held]["final voltage"]
    if not 0 < target <= 2:
        return {}
    steps = max(1, round((high - low) / step))
    low, high = min(low, tap), max(high, tap)
    return {"regulated_bus": held, "v_target_pu": target, "tap_min": low, "tap_max": high, "tap_steps": steps}
