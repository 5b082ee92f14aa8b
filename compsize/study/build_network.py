"""From the typed columns of the six tables to ``NetworkTables``."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from compsize.study.columns import Columns, References, read_columns
from compsize.study.files import Faults
from compsize.study.records import Branches, Buses, Generators, Loads, NetworkTables, Shunts, Svcs
from compsize.study.schema import Table
from compsize.study.schema_tables import NETWORK_TABLES
from compsize.study.tables import RawTable

__all__ = ["MadeTables", "NetworkDraft", "build_network", "draft_from_raw", "empty_columns"]


@dataclass(frozen=True)
class NetworkDraft:
    """A network that may still have faults: its tables, where each stands, and which are not to be relied on."""

    tables: NetworkTables
    columns: Mapping[str, Columns]
    unreadable: frozenset[str]

    def ids(self, table: str) -> tuple[str, ...] | None:
        """The ids of a table, None where it is unreadable and no reference to it can be judged."""
        if table in self.unreadable:
            return None
        return self.columns[table].texts[NETWORK_TABLES[table].key.name]


def empty_columns(table: Table, file: str) -> Columns:
    """The columns of a table without rows."""
    raw = RawTable(file, table.names, (), ())
    return read_columns(raw, _relaxed(table), References(), Faults())


def _relaxed(table: Table) -> Table:
    return Table(table.name, table.meaning, table.columns, may_be_empty=True)


def build_network(
    columns: Mapping[str, Columns], base_mva: float, frequency_hz: float, title: str, source: str
) -> NetworkTables:
    """Makes the records; ``columns`` has an entry for every table of ``NETWORK_TABLES``."""
    bus, load, branch = columns["buses"], columns["loads"], columns["branches"]
    unit, shunt, svc = columns["generators"], columns["shunts"], columns["svcs"]
    buses = Buses(
        bus=bus.texts["bus"],
        kv=bus.numbers["kv"],
        v_min_pu=bus.numbers["v_min_pu"],
        v_max_pu=bus.numbers["v_max_pu"],
        area=bus.texts["area"],
        monitored=bus.flags["monitored"],
        v_pu=bus.numbers["v_pu"],
        angle_deg=bus.numbers["angle_deg"],
        fault_mva=bus.numbers["fault_mva"],
    )
    loads = Loads(
        load=load.texts["load"],
        bus=load.texts["bus"],
        p_mw=load.numbers["p_mw"],
        q_mvar=load.numbers["q_mvar"],
        z_share_pct=load.numbers["z_share_pct"],
        i_share_pct=load.numbers["i_share_pct"],
        group=load.texts["group"],
        status=load.flags["status"],
    )
    branches = Branches(
        branch=branch.texts["branch"],
        from_bus=branch.texts["from_bus"],
        to_bus=branch.texts["to_bus"],
        r_pu=branch.numbers["r_pu"],
        x_pu=branch.numbers["x_pu"],
        b_pu=branch.numbers["b_pu"],
        tap=branch.numbers["tap"],
        shift_deg=branch.numbers["shift_deg"],
        rating_mva=branch.numbers["rating_mva"],
        status=branch.flags["status"],
        regulated_bus=branch.texts["regulated_bus"],
        v_target_pu=branch.numbers["v_target_pu"],
        tap_min=branch.numbers["tap_min"],
        tap_max=branch.numbers["tap_max"],
        tap_steps=branch.numbers["tap_steps"],
    )
    generators = Generators(
        generator=unit.texts["generator"],
        bus=unit.texts["bus"],
        p_mw=unit.numbers["p_mw"],
        v_set_pu=unit.numbers["v_set_pu"],
        q_min_mvar=unit.numbers["q_min_mvar"],
        q_max_mvar=unit.numbers["q_max_mvar"],
        p_max_mw=unit.numbers["p_max_mw"],
        pickup=unit.numbers["pickup"],
        slack=unit.flags["slack"],
        status=unit.flags["status"],
    )
    shunts = Shunts(
        shunt=shunt.texts["shunt"],
        bus=shunt.texts["bus"],
        b_mvar=shunt.numbers["b_mvar"],
        g_mw=shunt.numbers["g_mw"],
        status=shunt.flags["status"],
    )
    svcs = Svcs(
        svc=svc.texts["svc"],
        bus=svc.texts["bus"],
        kind=svc.texts["kind"],
        q_min_mvar=svc.numbers["q_min_mvar"],
        q_max_mvar=svc.numbers["q_max_mvar"],
        v_ref_pu=svc.numbers["v_ref_pu"],
        slope_pct=svc.numbers["slope_pct"],
        status=svc.flags["status"],
    )
    return NetworkTables(base_mva, frequency_hz, title, source, buses, loads, branches, generators, shunts, svcs)


@dataclass
class MadeTables:
    """Rows of tables made from another format, with the numbers of the lines they come from (None: no lines)."""

    file: str
    rows: dict[str, list[dict[str, str]]] = field(default_factory=dict)
    numbers: dict[str, list[int]] = field(default_factory=dict)

    def add(self, table: str, row: int | None, **cells: float | str) -> None:
        """Adds a row; numbers keep every digit."""
        texts = {name: cell if isinstance(cell, str) else repr(float(cell)) for name, cell in cells.items()}
        self.rows.setdefault(table, []).append(texts)
        if row is not None:
            self.numbers.setdefault(table, []).append(row)

    def raw(self) -> dict[str, RawTable]:
        """The tables as rows of text, blank where a row lacks a column."""
        tables: dict[str, RawTable] = {}
        for table, rows in self.rows.items():
            if not rows:
                continue
            header = tuple(dict.fromkeys(name for row in rows for name in row))
            cells = tuple(tuple(row.get(name, "") for name in header) for row in rows)
            tables[table] = RawTable(
                self.file, header, cells, tuple(self.numbers[table]) if table in self.numbers else None
            )
        return tables


def draft_from_raw(
    raw: Mapping[str, RawTable],
    file: str,
    faults: Faults,
    *,
    base_mva: float,
    frequency_hz: float,
    title: str,
    source: str,
) -> NetworkDraft:
    """Types tables that were made from another format; absent tables are empty, ``file`` names them all."""
    references = References()
    columns: dict[str, Columns] = {}
    for name, table in NETWORK_TABLES.items():  # buses come first, the others refer to them
        there = raw.get(name) or RawTable(file, table.names, (), ())
        columns[name] = read_columns(there, table, references, faults)
        references.ids[name] = frozenset(columns[name].texts[table.key.name]) - {""}
    tables = build_network(columns, base_mva, frequency_hz, title, source)
    return NetworkDraft(tables, columns, frozenset())
