"""Every table of a network and of a study, column by column."""

from __future__ import annotations

import math

from compsize.study.schema import NOT_NEGATIVE, PER_CENT, POSITIVE, SET_POINT, Bounds, Column, Table

__all__ = ["CANDIDATES", "CONTINGENCIES", "EQUIPMENT", "GROWTH", "NETWORK_TABLES", "STAGES", "STUDY_TABLES"]

_BAND = Bounds(0.0, 10.0)


def _status(what: str) -> Column:
    return Column("status", "yes-no", f"whether the {what} is in service", default=True)


def _bus(what: str) -> Column:
    return Column("bus", "reference", f"bus of the {what}", required=True, refers="buses")


BUSES = Table(
    "buses",
    "the buses of the network",
    (
        Column("bus", "id", "name of the bus", required=True),
        Column("kv", "number", "nominal voltage", required=True, bounds=POSITIVE, unit="kV"),
        Column("v_min_pu", "number", "lowest permitted voltage", default=0.95, bounds=_BAND, unit="pu"),
        Column("v_max_pu", "number", "highest permitted voltage", default=1.05, bounds=_BAND, unit="pu"),
        Column("area", "text", "area the bus belongs to", default=""),
        Column("monitored", "yes-no", "whether voltages of the bus are judged and listed", default=True),
        Column("v_pu", "number", "starting point of the voltage, not a result", bounds=SET_POINT, unit="pu"),
        Column("angle_deg", "number", "starting point of the angle, not a result", unit="degrees"),
        Column("fault_mva", "number", "lowest three-phase fault level", bounds=POSITIVE, unit="MVA"),
    ),
    may_be_empty=False,
)
LOADS = Table(
    "loads",
    "the loads at 1 pu voltage",
    (
        Column("load", "id", "name of the load", required=True),
        _bus("load"),
        Column("p_mw", "number", "active power drawn at 1 pu", required=True, unit="MW"),
        Column("q_mvar", "number", "reactive power drawn at 1 pu", required=True, unit="Mvar"),
        Column("z_share_pct", "number", "constant-impedance share", default=0.0, bounds=PER_CENT, unit="%"),
        Column("i_share_pct", "number", "constant-current share", default=0.0, bounds=PER_CENT, unit="%"),
        Column("group", "text", "group that grows or is staged together", default=""),
        _status("load"),
    ),
    optional=True,
)
BRANCHES = Table(
    "branches",
    "lines and transformers, ratio and shift at the from side",
    (
        Column("branch", "id", "name of the branch", required=True),
        Column("from_bus", "reference", "bus of the ratio and shift", required=True, refers="buses"),
        Column("to_bus", "reference", "bus at the other end", required=True, refers="buses"),
        Column("r_pu", "number", "series resistance", required=True, unit="pu"),
        Column("x_pu", "number", "series reactance", required=True, unit="pu"),
        Column("b_pu", "number", "total charging susceptance", default=0.0, unit="pu"),
        Column("tap", "number", "off-nominal ratio", default=1.0, bounds=POSITIVE, unit="pu"),
        Column("shift_deg", "number", "phase shift", default=0.0, unit="degrees"),
        Column("rating_mva", "number", "thermal rating", bounds=NOT_NEGATIVE, unit="MVA"),
        _status("branch"),
        Column("regulated_bus", "reference", "bus whose voltage the tap changer holds", default="", refers="buses"),
        Column("v_target_pu", "number", "voltage the tap changer holds", bounds=SET_POINT, unit="pu"),
        Column("tap_min", "number", "lowest ratio", bounds=POSITIVE, unit="pu"),
        Column("tap_max", "number", "highest ratio", bounds=POSITIVE, unit="pu"),
        Column("tap_steps", "integer", "number of steps from lowest to highest ratio", bounds=Bounds(1.0)),
    ),
    may_be_empty=False,
)
GENERATORS = Table(
    "generators",
    "the generating units",
    (
        Column("generator", "id", "name of the unit", required=True),
        _bus("unit"),
        Column("p_mw", "number", "active power produced", required=True, unit="MW"),
        Column("v_set_pu", "number", "voltage held at its bus", required=True, bounds=SET_POINT, unit="pu"),
        Column("q_min_mvar", "number", "lowest reactive power; blank: unlimited", default=-math.inf, unit="Mvar"),
        Column("q_max_mvar", "number", "highest reactive power; blank: unlimited", default=math.inf, unit="Mvar"),
        Column("p_max_mw", "number", "highest active power; blank: unlimited", unit="MW"),
        Column("pickup", "number", 'share of the added load for pickup = "table"', bounds=NOT_NEGATIVE),
        Column("slack", "yes-no", "whether the unit balances the network", default=False),
        _status("unit"),
    ),
    may_be_empty=False,
)
SHUNTS = Table(
    "shunts",
    "fixed shunt capacitors and reactors at 1 pu voltage",
    (
        Column("shunt", "id", "name of the shunt", required=True),
        _bus("shunt"),
        Column("b_mvar", "number", "reactive power supplied at 1 pu", required=True, unit="Mvar"),
        Column("g_mw", "number", "active power drawn at 1 pu", default=0.0, unit="MW"),
        _status("shunt"),
    ),
    optional=True,
)
SVCS = Table(
    "svcs",
    "existing static var compensators and STATCOMs",
    (
        Column("svc", "id", "name of the device", required=True),
        _bus("device"),
        Column("kind", "choice", "constant susceptance or current at the limit", True, choices=("svc", "statcom")),
        Column("q_min_mvar", "number", "inductive limit at 1 pu (negative)", required=True, unit="Mvar"),
        Column("q_max_mvar", "number", "capacitive limit at 1 pu", required=True, unit="Mvar"),
        Column("v_ref_pu", "number", "voltage held at no output", required=True, bounds=SET_POINT, unit="pu"),
        Column("slope_pct", "number", "slope on the capacitive rating", default=0.0, bounds=PER_CENT, unit="%"),
        _status("device"),
    ),
    optional=True,
)
NETWORK_TABLES = {table.name: table for table in (BUSES, LOADS, BRANCHES, GENERATORS, SHUNTS, SVCS)}

CONTINGENCIES = Table(
    "contingencies",
    "what is lost; rows sharing a name are one event",
    (
        Column("contingency", "id", "name of the event", required=True),
        Column(
            "kind",
            "choice",
            "table of the element",
            required=True,
            choices=("branch", "generator", "load", "shunt", "svc"),
        ),
        Column("element", "reference", "what is lost", required=True),
        Column("class", "text", "class that requirements name; blank: the class of the event's other rows", default=""),
    ),
    unique=False,
)
GROWTH = Table(
    "growth",
    "the load direction",
    (
        Column("load", "id", "load that grows", required=True),
        Column("dp_mw", "number", "active part of the direction", required=True, unit="MW"),
        Column("dq_mvar", "number", "reactive part of the direction; blank: from power_factor", unit="Mvar"),
    ),
    may_be_empty=False,
)
CANDIDATES = Table(
    "candidates",
    "where what may be added",
    (
        Column("site", "reference", "bus where the equipment may be added", required=True, refers="buses"),
        Column("equipment", "reference", "equipment that may be added", required=True, refers="equipment"),
        Column("max_steps", "integer", "all steps there, existing ones included", required=True, bounds=NOT_NEGATIVE),
        Column(
            "site_cost",
            "number",
            "paid once per site with new steps; blank: as on the site's other rows",
            bounds=NOT_NEGATIVE,
            unit="currency",
        ),
        Column("exclusive_group", "text", "of the rows of a group at most one is used", default=""),
        Column("existing_steps", "integer", "steps in service today", default=0.0, bounds=NOT_NEGATIVE),
    ),
    unique=False,
)
EQUIPMENT = Table(
    "equipment",
    "what one step of the equipment is and costs",
    (
        Column("equipment", "id", "name of the equipment", required=True),
        Column("kind", "choice", "switched bank, SVC or STATCOM", required=True, choices=("bank", "svc", "statcom")),
        Column("step_mvar", "number", "output of a step at rated kv", required=True, bounds=POSITIVE, unit="Mvar"),
        Column(
            "cost_fixed",
            "number",
            "paid once per site and equipment with new steps",
            required=True,
            bounds=NOT_NEGATIVE,
            unit="currency",
        ),
        Column("cost_per_step", "number", "paid per new step", required=True, bounds=NOT_NEGATIVE, unit="currency"),
        Column("kv", "number", "rated voltage; blank: the kv of the bus", bounds=POSITIVE, unit="kV"),
        Column("switched", "yes-no", "whether steps of a bank can be switched in operation", default=True),
        Column(
            "q_absorb_mvar",
            "number",
            "inductive range of a step of an SVC or STATCOM",
            default=0.0,
            bounds=NOT_NEGATIVE,
            unit="Mvar",
        ),
        Column("slope_pct", "number", "slope of an SVC or STATCOM", default=0.0, bounds=PER_CENT, unit="%"),
        Column(
            "v_ref_pu",
            "number",
            "voltage held by an SVC or STATCOM; blank: the intact voltage without the plan",
            bounds=SET_POINT,
            unit="pu",
        ),
        Column(
            "annual_om_pct",
            "number",
            "yearly operation and maintenance, of the capital cost",
            default=0.0,
            bounds=PER_CENT,
            unit="%",
        ),
        Column("life_years", "number", "service life", bounds=POSITIVE, unit="years"),
        Column("extension_pays_fixed", "yes-no", "whether steps added to existing ones pay cost_fixed", default=False),
        Column("reactor_uh", "number", "inrush-limiting reactor per step", bounds=NOT_NEGATIVE, unit="microhenry"),
        Column("breaker_peak_ka", "number", "inrush current the breaker may make", bounds=POSITIVE, unit="kA peak"),
        Column("breaker_khz", "number", "inrush frequency the breaker may make", bounds=POSITIVE, unit="kHz"),
    ),
)
STAGES = Table(
    "stages",
    "load by year: one further column per load or group",
    (Column("year", "integer", "calendar year", required=True, bounds=Bounds(1900.0, 2200.0)),),
    may_be_empty=False,
    open_ended=True,
)
STUDY_TABLES = {table.name: table for table in (CONTINGENCIES, GROWTH, CANDIDATES, EQUIPMENT, STAGES)}
