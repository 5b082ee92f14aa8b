"""Every key of ``study.toml`` and ``network.toml``."""

from __future__ import annotations

from compsize.study.schema import NOT_NEGATIVE, PER_CENT, POSITIVE, SET_POINT, Bounds, Key, Section

__all__ = ["NETWORK_KEYS", "STUDY_SECTIONS"]

NETWORK_KEYS = Section(
    "",
    "what holds for the whole network",
    (
        Key("base_mva", "number", "power base of the per-unit values", required=True, bounds=POSITIVE, unit="MVA"),
        Key("frequency_hz", "number", "nominal frequency", required=True, bounds=POSITIVE, unit="Hz"),
        Key("title", "text", "name of the network", default=""),
        Key("source", "text", "where the data come from", default=""),
    ),
)

_CHANGE = PER_CENT
_TOP = Section(
    "",
    "the study",
    (
        Key("title", "text", "title of the study", default=""),
        Key("network", "path", "folder of tables, .xlsx, IEEE CDF file, CGMES folder or zip", required=True),
    ),
)
_GROWTH = Section(
    "growth",
    "the load direction; the margin is counted in nominal MW (at 1 pu) of the load that grows",
    (
        Key("loads", "loads", '"all", a list of load ids, { group = "..." } or { area = "..." }'),
        Key("table", "path", "table of the direction, instead of loads"),
        Key(
            "power_factor",
            "power factor",
            '"as base", or a power factor of the added part (lagging positive)',
            default="as base",
        ),
        Key(
            "pickup",
            "choice",
            "which units take up the added load",
            default="proportional",
            choices=("proportional", "slack", "headroom", "table"),
        ),
        Key("pickup_limits", "yes-no", "whether a unit stops at p_max_mw", default=False),
        Key("generator_limits", "yes-no", "whether reactive limits hold, except of the slack", default=True),
        Key("slack_limits", "yes-no", "whether they also hold for the slack", default=False),
        Key(
            "taps",
            "choice",
            "whether tap changers act while load grows",
            default="locked",
            choices=("locked", "moving"),
        ),
    ),
)
_REQUIREMENT = Section(
    "requirement",
    "a margin for a class of cases; with several entries the largest applies to a case",
    (
        Key("cases", "text", '"intact", "outages", "bank_outage" or a class of contingencies', required=True),
        Key("margin_mw", "number", "least margin", bounds=NOT_NEGATIVE, unit="MW"),
        Key("margin_pct", "number", "least margin in percent of what 'of' names", bounds=NOT_NEGATIVE, unit="%"),
        Key("of", "text", 'base of margin_pct: "growing", "total" or "area:NAME"', default="growing"),
    ),
    repeated=True,
)
_CONTINGENCIES = Section(
    "contingencies",
    "the cases besides the intact network",
    (
        Key("table", "path", "table of the events"),
        Key(
            "all_branches", "yes-no", "adds every single branch whose loss leaves the network connected", default=False
        ),
        Key(
            "bank_outage",
            "choice",
            "loss of what a plan adds: one step, all at the site, or nothing",
            default="step",
            choices=("step", "site", "none"),
        ),
    ),
)
_VOLTAGE = Section(
    "voltage",
    "voltage conditions; an absent key: the buses' own limits when intact, no check after outages",
    (
        Key("intact_min_pu", "number", "lowest voltage, intact", bounds=SET_POINT, unit="pu"),
        Key("intact_max_pu", "number", "highest voltage, intact", bounds=SET_POINT, unit="pu"),
        Key("post_outage_min_pu", "number", "lowest voltage after an outage", bounds=SET_POINT, unit="pu"),
        Key("post_outage_max_pu", "number", "highest voltage after an outage", bounds=SET_POINT, unit="pu"),
        Key("post_outage_change_max_pct", "number", "largest change by an outage", bounds=_CHANGE, unit="%"),
        Key("switching_step_max_pct", "number", "largest change by switching a step, intact", bounds=_CHANGE, unit="%"),
        Key("switching_step_outage_max_pct", "number", "the same, weakest listed outage", bounds=_CHANGE, unit="%"),
        Key("light_load_pct", "number", "light load, of base load", bounds=PER_CENT, unit="%"),
        Key(
            "existing_violations",
            "choice",
            "what a violation counts that exists without the plan and is not worsened",
            default="report",
            choices=("report", "enforce"),
        ),
    ),
)
_CANDIDATES = Section(
    "candidates",
    "what may be added where",
    (
        Key("table", "path", "table of sites and equipment", required=True),
        Key("equipment", "path", "table of equipment", required=True),
    ),
)
_LIMITS = Section(
    "limits",
    "limits on new work",
    (
        Key("budget", "number", "highest cost", bounds=NOT_NEGATIVE, unit="currency"),
        Key("max_sites", "integer", "most sites with new steps", bounds=NOT_NEGATIVE),
        Key(
            "min_fast_share_pct",
            "number",
            "least share of the added Mvar that is SVC or STATCOM",
            default=0.0,
            bounds=PER_CENT,
            unit="%",
        ),
    ),
)
_STAGES = Section(
    "stages",
    "growth over years",
    (
        Key("table", "path", "table of load by year", required=True),
        Key("discount_rate_pct", "number", "yearly discount rate", default=0.0, bounds=Bounds(-50.0, 100.0), unit="%"),
        Key("cost_escalation_pct", "number", "yearly rise of cost", default=0.0, bounds=Bounds(-50.0, 100.0), unit="%"),
    ),
)
_REPORT = Section(
    "report",
    "words for the report",
    tuple(
        Key(name, "text", meaning, default="")
        for name, meaning in (
            ("project", "name of the project"),
            ("author", "who made the study"),
            ("currency", "currency of all costs"),
            ("price_year", "year of the prices"),
            ("notes", "free text"),
        )
    ),
)
STUDY_SECTIONS = {
    section.name: section
    for section in (
        _TOP,
        _GROWTH,
        _REQUIREMENT,
        _CONTINGENCIES,
        _VOLTAGE,
        _CANDIDATES,
        _LIMITS,
        _STAGES,
        _REPORT,
    )
}
