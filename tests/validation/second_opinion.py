"""Pairs of noses: the engine's, and those of other methods; shared by the tests and by the page of validation."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cache
from typing import Any

import numpy as np
from general_nlp import Answer, solve
from margin_studies import single, study_of
from nose_cases import Added, Case, find
from sharp import Chain, Load, corner, fold, fold_of_held
from verify_networks import everything, network, read

from compsize.api import margins
from compsize.plan.records import CaseMargin

OUTAGES = {"ieee14": ("6", "10", "20"), "ieee30": ("5", "15", "36")}
"""Branches whose loss the general programme judges, by network."""
NOT_LOCATED = ("ieee14", "2")
"""A branch whose loss has a nose without limits that the engine does not locate."""


@dataclass(frozen=True)
class Pair:
    """A case of a network: the engine's row and the answer of the general programme."""

    network: str
    lost: str
    limits: bool
    ours: CaseMargin
    theirs: Answer

    @property
    def loading(self) -> float:
        """Added over base load at the engine's nose."""
        assert self.ours.margin_mw is not None, self.ours.status
        return self.ours.margin_mw / self.ours.base_mw


@cache
def answer(name: str, limits: bool, lost: str) -> Answer:
    """The general programme on a network of the tests."""
    return solve(read(name), limits, (lost,) if lost else ())


def pairs(name: str, lost: tuple[str, ...] = ()) -> Iterator[Pair]:
    """Intact and each outage of ``lost``, with and without reactive limits, on a network of the tests."""
    net = read(name)
    for limits in (False, True):
        growth = everything(net, generator_limits=limits)
        events = [single("branch", branch) for branch in lost]
        rows = margins(study_of(net, events, growth), workers=1).cases
        for branch, row in zip(("", *lost), rows, strict=True):
            yield Pair(name, branch, limits, row, answer(name, limits, branch))


@dataclass(frozen=True)
class SharpCase:
    """A source and one or two buses behind it; a unit or an SVC may stand on the first of them."""

    name: str
    kind: str
    chain: Chain
    unit: dict[str, Any] | None = None
    """Unit at the first bus: p_mw, v_set_pu, q_min_mvar, q_max_mvar."""
    svc: Added | None = None


_TWO = Chain(e=1.02, z=(complex(0.03, 0.3),), y=(0.4,), ratio=0.25)
_THREE = Chain(e=1.04, z=(complex(0.02, 0.2), complex(0.03, 0.25)), y=(0.1, 0.3), ratio=0.25)

SHARP = (
    SharpCase("two buses with resistance and a capacitor", "fold", _TWO),
    SharpCase(
        "two buses, SVC of 1.5 pu at its limit",
        "limit",
        replace(_TWO, y=(1.9,)),
        svc=Added("B1", 150.0, "svc", v_ref=1.0),
    ),
    SharpCase(
        "two buses, SVC of 0.3 pu beyond its limit",
        "fold",
        replace(_TWO, y=(0.7,)),
        svc=Added("B1", 30.0, "svc", v_ref=1.0),
    ),
    SharpCase("three buses with resistance and capacitors", "fold", _THREE),
    SharpCase(
        "three buses, a unit at its limit between",
        "fold",
        replace(_THREE, injected=(complex(0.3, 0.15), 0j)),
        unit={"p_mw": 30.0, "v_set_pu": 1.01, "q_min_mvar": -20.0, "q_max_mvar": 15.0},
    ),
    SharpCase(
        "three buses, a unit that holds its voltage between",
        "held",
        replace(_THREE, injected=(complex(0.3, 0.0), 0j)),
        unit={"p_mw": 30.0, "v_set_pu": 1.01, "q_min_mvar": -np.inf, "q_max_mvar": np.inf},
    ),
    SharpCase(
        "three buses, a unit that reaches its limit between",
        "limit",
        replace(_THREE, injected=(complex(0.3, 1.05), 0j)),
        unit={"p_mw": 30.0, "v_set_pu": 1.01, "q_min_mvar": -20.0, "q_max_mvar": 105.0},
    ),
)
"""``chain.y`` and ``chain.injected`` hold what a device gives at its limit. ``held`` is a fold too."""


def of_engine(item: SharpCase) -> Case:
    """The engine's nose of a case; the slack picks up."""
    chain, n = item.chain, item.chain.n
    names = ["S", *(f"B{k + 1}" for k in range(n))]
    extra = 0.01 * item.svc.mvar if item.svc is not None else 0.0
    units = [{"generator": "A", "bus": "S", "p_mw": 10.0, "v_set_pu": chain.e, "slack": True}]
    if item.unit is not None:
        units.append({"generator": "B", "bus": "B1"} | item.unit)
    net = network(
        buses=[{"bus": name} for name in names],
        loads=[{"load": "D", "bus": names[-1], "p_mw": 50.0, "q_mvar": 50.0 * chain.ratio}],
        branches=[
            {"branch": str(k + 1), "from_bus": names[k], "to_bus": names[k + 1], "r_pu": z.real, "x_pu": z.imag}
            for k, z in enumerate(chain.z)
        ],
        generators=units,
        shunts=[
            {"shunt": name, "bus": name, "b_mvar": 100.0 * (y - (extra if name == "B1" else 0.0))}
            for name, y in zip(names[1:], chain.y, strict=True)
        ],
    )
    return find(net, everything(net, pickup="slack"), added=(item.svc,) if item.svc is not None else ())


def of_sharp(item: SharpCase, near: Case) -> Load:
    """The nose of the same equations with 50 digits, sought from ``near``."""
    v = near.complex_v()[1:] * np.exp(-1j * np.angle(near.complex_v()[0]))
    start = [*np.angle(v).tolist(), *np.abs(v).tolist(), near.nose_mw / 100.0]
    if item.kind == "fold":
        return fold(item.chain, start)
    if item.kind == "held":
        return fold_of_held(item.chain, 0, item.unit["v_set_pu"] if item.unit else 1.0, [*start, 1.0])
    return corner(item.chain, 0, item.unit["v_set_pu"] if item.unit else 1.0, start)
