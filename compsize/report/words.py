"""Fixed words of a report: what a status, a proof, a condition or a nose is called, and the cautions."""

from __future__ import annotations

from typing import Final

__all__ = ["CAUTIONS", "CONDITIONS", "DEVICES", "NOSES", "PROOFS", "STATUSES", "amount"]

STATUSES: Final = {
    "optimal": "Least-cost plan, proved",
    "feasible": "Plan found, least cost not proved",
    "unreachable": "The requirement cannot be met",
    "limit": "Stopped before a plan was found",
}

PROOFS: Final = {
    "full": (
        "complete",
        "Every plan that would cost less was examined on its own, and each fails a case whose nose was located. "
        "This assumes nothing beyond those noses.",
    ),
    "relaxation": (
        "by relaxation",
        "A convex problem that contains every operating point was shown to have no solution for any cheaper plan. "
        "The certificates were computed again with a stated error margin.",
    ),
    "covers": (
        "by covers",
        "Groups of cheaper plans were excluded together, each because the largest plan of its group fails a case. "
        "This assumes that fewer steps never raise the margin inside a group, which was tested on samples.",
    ),
    "mixed": (
        "by several means",
        "Cheaper plans were excluded by more than one means. The table says how many rest on which, "
        "and what each assumes.",
    ),
    "none": ("none", "It was not proved that nothing cheaper works."),
}
"""Kind of proof to a short name and what it means."""

CONDITIONS: Final = {
    "intact_min_pu": "Lowest voltage, intact network",
    "intact_max_pu": "Highest voltage, intact network",
    "post_outage_min_pu": "Lowest voltage after an outage",
    "post_outage_max_pu": "Highest voltage after an outage",
    "post_outage_change_max_pct": "Change of voltage by an outage",
    "switching_step_max_pct": "Voltage step on switching, intact network",
    "switching_step_outage_max_pct": "Voltage step on switching, weakest listed outage",
    "light_load_pct": "Voltage at light load",
}

DEVICES: Final = {"bank": "capacitor bank", "svc": "SVC", "statcom": "STATCOM"}

NOSES: Final = {
    "fold": "fold",
    "limit": "a device reaches its limit",
    "none": "no turn in the range searched",
    "": "not located",
}

CAUTIONS: Final = (
    (
        "Steady state only.",
        "These figures screen static voltage stability. Stalling motors, slow voltage recovery after a fault, "
        "electromagnetic transients, harmonics, protection and unbalance, insulation and arc flash each need a "
        "study of their own.",
    ),
    (
        "Stored charge kills.",
        "A capacitor keeps its charge when it is switched off, and some of it can come back after draining. Isolate, "
        "wait five minutes or more, test, earth, and short-circuit every single unit before touching it. A built-in "
        "discharge resistor is no proof of safety; more than ten joules can be fatal.",
    ),
    (
        "Switching transients.",
        "Energising one bank beside another draws a high inrush current; restrikes and discharge into a nearby "
        "fault can be worse. Settle the breaker's capacitive duty, the series reactor and the lock-out "
        "time before re-closing.",
    ),
    (
        "Harmonic resonance.",
        "Each number of steps in service, in each state of the network, moves the resonance between capacitors and "
        "system. Have a harmonic study made (for example to IEEE Std 519), and rate capacitors for the filter duty and "
        "for the voltage rise across any detuning reactor.",
    ),
    (
        "Ferroresonance and self-excitation.",
        "Capacitors left connected to transformers that are lightly loaded or not energised, or to motors and "
        "generators running down, can raise the voltage dangerously. So can a sudden loss of load.",
    ),
    (
        "Light load and falling voltage.",
        "Capacitors lift the voltage when load is light and lose output with the square of the voltage when support is "
        "needed, so they are no dynamic reserve. The more a network is compensated, the closer the nose lies "
        "to normal voltage: a healthy voltage reading is then a poor warning.",
    ),
    (
        "Only what was modelled.",
        "The margins hold for the given data, forecast, load model, direction of growth and list of outages, and for "
        "nothing else. Check that the loss of the new equipment itself is on that list.",
    ),
    (
        "Costs are early estimates.",
        "Unit costs at this stage carry the uncertainty of a class 4 or 5 estimate. Put quotations in their place "
        "before money is committed.",
    ),
    (
        "An engineer decides.",
        "A licensed engineer must review this study. The owner's criteria, the grid and safety codes and the "
        "manufacturer's limits come before it, and it carries no warranty.",
    ),
)
"""What every report says about its own limits: a few words and their explanation."""


def amount(number: int, one: str, many: str = "") -> str:
    """``1 step``, ``2 steps``, ``1,430 cases``."""
    return f"{number:,} {one if number == 1 else many or one + 's'}"
