"""Studies for tests of margins: a network, its outages, and what they must keep."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from verify_networks import everything

from compsize.study.records import (
    Candidate,
    Contingencies,
    Event,
    Growth,
    Limits,
    NetworkTables,
    ReportText,
    Requirement,
    Study,
    VoltageLimits,
)


def study_of(
    net: NetworkTables,
    events: Sequence[Event] = (),
    growth: Growth | None = None,
    requirements: Sequence[Requirement] = (),
    candidates: Sequence[Candidate] = (),
    *,
    bank_outage: Any = "none",
) -> Study:
    """A study without a folder; all loads grow, if nothing else is said."""
    return Study(
        folder=Path(),
        title="",
        network=net,
        growth=growth or everything(net),
        requirements=tuple(requirements),
        contingencies=Contingencies(tuple(events), (), bank_outage),
        voltage=VoltageLimits(),
        candidates=tuple(candidates),
        limits=Limits(),
        stages=None,
        report=ReportText(),
        hash="",
    )


def single(kind: str, element: str) -> Event:
    """The loss of one element."""
    return Event(f"{kind}:{element}", kind, ((kind, element),))
