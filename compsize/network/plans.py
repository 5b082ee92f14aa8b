"""Steps of candidate equipment as added devices."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from compsize.network.cases import Addition
from compsize.network.devices import compensator
from compsize.network.grid import Grid
from compsize.study.records import Candidate

Steps = tuple[int, ...]


@dataclass(frozen=True)
class Choice:
    """A candidate row in per unit: what one step of an equipment at a site supplies."""

    candidate: Candidate
    bus: int
    step_pu: float
    """Capacitive step at 1 pu of the bus kv."""
    absorb_pu: float
    v_ref: float
    """Set-point of an SVC or STATCOM [pu]; NaN for a bank."""

    @property
    def name(self) -> str:
        return f"{self.candidate.site}:{self.candidate.equipment.equipment}"

    @property
    def switched(self) -> bool:
        """Whether single steps may stay off as the load grows (mechanically switched banks)."""
        return self.candidate.equipment.kind == "bank" and self.candidate.equipment.switched

    @property
    def existing(self) -> int:
        return self.candidate.existing_steps

    @property
    def most_new(self) -> int:
        return self.candidate.max_steps - self.candidate.existing_steps


def build_choices(grid: Grid, candidates: Sequence[Candidate], v_intact: NDArray[np.float64]) -> tuple[Choice, ...]:
    """Choices in candidate order; ``v_intact`` [pu per bus] serves blank set-points."""
    choices = []
    for candidate in candidates:
        equipment = candidate.equipment
        bus = grid.bus_index[candidate.site]
        rated = equipment.kv if equipment.kv is not None else float(grid.tables.buses.kv[bus])
        ratio = (float(grid.tables.buses.kv[bus]) / rated) ** 2
        v_ref = float("nan")
        if equipment.kind != "bank":
            v_ref = equipment.v_ref_pu if equipment.v_ref_pu is not None else float(v_intact[bus])
        choices.append(
            Choice(
                candidate,
                bus,
                equipment.step_mvar * ratio / grid.tables.base_mva,
                equipment.q_absorb_mvar * ratio / grid.tables.base_mva,
                v_ref,
            )
        )
    return tuple(choices)


def additions(choices: Sequence[Choice], new: Sequence[int]) -> list[Addition]:
    """What is in service with ``new`` steps per choice beside the existing ones (a negative number takes away)."""
    found = []
    for choice, steps in zip(choices, new, strict=True):
        total = steps + choice.existing
        if total <= 0:
            continue
        equipment = choice.candidate.equipment
        if equipment.kind == "bank":
            found.append(Addition(choice.bus, b_pu=total * choice.step_pu))
        else:
            device = compensator(
                choice.name,
                equipment.kind,
                -total * choice.absorb_pu,
                total * choice.step_pu,
                choice.v_ref,
                equipment.slope_pct / 100.0,
            )
            found.append(Addition(choice.bus, devices=(device,)))
    return found
