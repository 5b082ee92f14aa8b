"""What every table of a study rests on, in words."""

from __future__ import annotations

from compsize.study.records import Requirement, Study


def _pickup(study: Study) -> str:
    words = {
        "proportional": "each unit but the slack by its output today; the slack takes the remainder and the losses",
        "slack": "the slack unit takes all added load and losses",
        "headroom": "units share the added load by their headroom; the slack takes the losses",
        "table": "units share the added load as the pickup column says; the slack takes the losses",
    }[study.growth.pickup]
    return words + ("; a unit stops at its maximum" if study.growth.pickup_limits else "; no active limits")


def requirement_words(requirement: Requirement) -> str:
    """A requirement as a reviewer would say it."""
    parts = []
    if requirement.margin_mw is not None:
        parts.append(f"{requirement.margin_mw:g} MW")
    if requirement.margin_pct is not None:
        parts.append(f"{requirement.margin_pct:g} % of {requirement.of} load")
    return f"{requirement.cases}: {' and '.join(parts)}"


def basis_of(study: Study) -> tuple[tuple[str, str], ...]:
    """Pairs of a name and words, for the foot of every table."""
    growth = study.growth
    limits = "held within their limits, both ways" if growth.generator_limits else "not limited"
    if growth.generator_limits:
        limits += ", the slack unit too" if growth.slack_limits else "; the slack unit not limited"
    events = study.contingencies.events
    shares = study.network.loads
    mixed = bool((shares.z_share_pct > 0).any() or (shares.i_share_pct > 0).any())
    return (
        ("Load direction", f"{growth.description}; {growth.base_mw:g} MW of it today"),
        ("Power factor of the added load", growth.power_factor),
        ("Generation pick-up", _pickup(study)),
        ("Reactive limits of units", limits),
        ("Tap changers", growth.taps),
        ("Load model", "mixed constant power, current and impedance as tabled" if mixed else "constant power"),
        ("Requirement", "; ".join(requirement_words(r) for r in study.requirements)),
        (
            "Cases",
            f"intact and {len(events)} listed outages; loss of installed equipment: {study.contingencies.bank_outage}",
        ),
    )
