"""The records that a study is made of: frozen, already checked, in the units of the files.

A table is a frozen dataclass of columns, all of one length. Identifiers are tuples of text, numbers
are read-only float64 arrays, yes/no columns are read-only bool arrays. A blank optional number that
has no default is NaN. Powers are in MW and Mvar, voltages in per unit of the bus ``kv``, angles in
degrees, impedances in per unit on ``base_mva`` and the bus ``kv``, costs in the study's currency.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ids = tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Buses:
    """``buses.csv``. ``v_pu`` and ``angle_deg`` are a starting point (NaN: none), never a result."""

    bus: Ids
    kv: Floats
    v_min_pu: Floats
    v_max_pu: Floats
    area: Ids
    monitored: Bools
    v_pu: Floats
    angle_deg: Floats
    fault_mva: Floats


@dataclass(frozen=True, eq=False)
class Loads:
    """``loads.csv``: MW and Mvar drawn at 1 pu voltage; shares in percent, the rest constant power."""

    load: Ids
    bus: Ids
    p_mw: Floats
    q_mvar: Floats
    z_share_pct: Floats
    i_share_pct: Floats
    group: Ids
    status: Bools


@dataclass(frozen=True, eq=False)
class Branches:
    """``branches.csv``: pi branches, ratio and shift at the from side.

    ``regulated_bus`` is empty where the ratio is fixed; then the four tap columns are NaN.
    """

    branch: Ids
    from_bus: Ids
    to_bus: Ids
    r_pu: Floats
    x_pu: Floats
    b_pu: Floats
    tap: Floats
    shift_deg: Floats
    rating_mva: Floats
    status: Bools
    regulated_bus: Ids
    v_target_pu: Floats
    tap_min: Floats
    tap_max: Floats
    tap_steps: Floats


@dataclass(frozen=True, eq=False)
class Generators:
    """``generators.csv``. Unlimited reactive power is -inf and +inf; ``pickup`` is a share (NaN: blank)."""

    generator: Ids
    bus: Ids
    p_mw: Floats
    v_set_pu: Floats
    q_min_mvar: Floats
    q_max_mvar: Floats
    p_max_mw: Floats
    pickup: Floats
    slack: Bools
    status: Bools


@dataclass(frozen=True, eq=False)
class Shunts:
    """``shunts.csv``: Mvar supplied and MW drawn at 1 pu."""

    shunt: Ids
    bus: Ids
    b_mvar: Floats
    g_mw: Floats
    status: Bools


@dataclass(frozen=True, eq=False)
class Svcs:
    """``svcs.csv``: ``kind`` is ``svc`` or ``statcom``; capacitive Mvar positive, at 1 pu."""

    svc: Ids
    bus: Ids
    kind: Ids
    q_min_mvar: Floats
    q_max_mvar: Floats
    v_ref_pu: Floats
    slope_pct: Floats
    status: Bools


@dataclass(frozen=True, eq=False)
class NetworkTables:
    """A network as its tables state it. Every bus named by a table exists; ids are unique per table."""

    base_mva: float
    frequency_hz: float
    title: str
    source: str
    buses: Buses
    loads: Loads
    branches: Branches
    generators: Generators
    shunts: Shunts
    svcs: Svcs


@dataclass(frozen=True)
class Growth:
    """Load direction and who picks it up.

    ``loads`` are the ids of the loads that grow, ``dp_mw`` and ``dq_mvar`` the direction; the margin
    is counted in MW along it, so only the proportions of the direction matter.
    ``base_mw`` is the nominal MW of these loads today.
    """

    loads: Ids
    dp_mw: tuple[float, ...]
    dq_mvar: tuple[float, ...]
    base_mw: float
    description: str
    power_factor: str
    pickup: Literal["proportional", "slack", "headroom", "table"] = "proportional"
    pickup_limits: bool = False
    generator_limits: bool = True
    slack_limits: bool = False
    taps: Literal["locked", "moving"] = "locked"


@dataclass(frozen=True)
class Requirement:
    """One ``[[requirement]]``: a margin for a class of cases, in MW and / or percent of ``of``."""

    cases: str
    margin_mw: float | None
    margin_pct: float | None
    of: str = "growing"


@dataclass(frozen=True)
class Event:
    """One contingency: everything that is lost together."""

    name: str
    klass: str
    elements: tuple[tuple[str, str], ...]
    """Pairs of kind (branch, generator, load, shunt, svc) and element id."""


@dataclass(frozen=True)
class Contingencies:
    """The listed events, in file order, then the single branches added by ``all_branches``."""

    events: tuple[Event, ...]
    left_out: Ids = ()
    """Branches that ``all_branches`` left out because their loss splits the network."""
    bank_outage: Literal["step", "site", "none"] = "step"


@dataclass(frozen=True)
class VoltageLimits:
    """``[voltage]``; None means the key is absent: the buses' own limits when intact, no check after outages."""

    intact_min_pu: float | None = None
    intact_max_pu: float | None = None
    post_outage_min_pu: float | None = None
    post_outage_max_pu: float | None = None
    post_outage_change_max_pct: float | None = None
    switching_step_max_pct: float | None = None
    switching_step_outage_max_pct: float | None = None
    light_load_pct: float | None = None
    existing_violations: Literal["report", "enforce"] = "report"
    given: bool = False
    """True where the study has a ``[voltage]`` table at all."""


@dataclass(frozen=True)
class Equipment:
    """One row of ``equipment.csv``."""

    equipment: str
    kind: Literal["bank", "svc", "statcom"]
    step_mvar: float
    cost_fixed: float
    cost_per_step: float
    kv: float | None = None
    switched: bool = True
    q_absorb_mvar: float = 0.0
    slope_pct: float = 0.0
    v_ref_pu: float | None = None
    annual_om_pct: float = 0.0
    life_years: float | None = None
    extension_pays_fixed: bool = False
    reactor_uh: float | None = None
    breaker_peak_ka: float | None = None
    breaker_khz: float | None = None


@dataclass(frozen=True)
class Candidate:
    """One row of ``candidates.csv``: what may be added at a bus."""

    site: str
    equipment: Equipment
    max_steps: int
    """All steps at the site and equipment, the existing ones included."""
    site_cost: float = 0.0
    exclusive_group: str = ""
    existing_steps: int = 0


@dataclass(frozen=True)
class Limits:
    """``[limits]``; None: not limited."""

    budget: float | None = None
    max_sites: int | None = None
    min_fast_share_pct: float = 0.0


@dataclass(frozen=True)
class Stages:
    """``[stages]``: MW per year of the loads or groups that the columns name (shape: years x columns)."""

    years: tuple[int, ...]
    columns: Ids
    mw: tuple[tuple[float, ...], ...]
    discount_rate_pct: float = 0.0
    cost_escalation_pct: float = 0.0


@dataclass(frozen=True)
class ReportText:
    """``[report]``: words for the title page."""

    project: str = ""
    author: str = ""
    currency: str = ""
    price_year: str = ""
    notes: str = ""


@dataclass(frozen=True, eq=False)
class Study:
    """A whole study, checked. ``hash`` is SHA-256 over the content of every file that was read."""

    folder: Path
    title: str
    network: NetworkTables
    growth: Growth
    requirements: tuple[Requirement, ...]
    contingencies: Contingencies
    voltage: VoltageLimits
    candidates: tuple[Candidate, ...]
    limits: Limits
    stages: Stages | None
    report: ReportText
    hash: str
    files: tuple[tuple[str, str], ...] = field(default=())
    """Name and SHA-256 of each file read, in reading order."""
