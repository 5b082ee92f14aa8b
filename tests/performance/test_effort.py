"""Counters of effort, with the right answers asserted beside them."""

from __future__ import annotations

import pytest
from effort import folder_of, ready

INTACT = {
    "ieee14": (0.7140997143, "fold", 30),
    "ieee30": (0.5701621442, "fold", 30),
    "ieee118": (0.8582389197, "limit", 60),
    "pegase2869": (0.1581142357, "fold", 60),
    "pegase9241": (0.0561093234, "fold", 60),
}
"""Added load over base load and kind (path following and a general programme agree; regression above 118 buses),
and the factorisations allowed."""


@pytest.mark.parametrize("name", INTACT)
def test_factorisations_of_a_nose(name: str) -> None:
    """The nose with limits from the operating point takes no more factorisations than allowed."""
    folder = folder_of(name)
    if folder is None:
        pytest.skip(f"the open dataset's {name} is not beside the repository")
    made = ready(folder)
    expected, kind, allowed = INTACT[name]
    assert made.nose.loading == pytest.approx(expected, abs=1e-8)
    assert made.nose.kind == kind
    assert made.nose.factorisations <= allowed


def test_factorisations_over_outages() -> None:
    """Over all single outages of 118 buses a traced nose takes fewer than 60 factorisations on average."""
    folder = folder_of("ieee118")
    assert folder is not None
    made = ready(folder)
    noses = [made.engine.nose(model, made.nose.base) for model in made.outages()]
    assert all(nose.kind for nose in noses)
    assert sum(nose.factorisations for nose in noses) / len(noses) < 60


def test_factorisations_of_a_near_nose() -> None:
    """With 10 Mvar more at a load bus the nose beside the known one takes few factorisations, and is the same."""
    folder = folder_of("ieee118")
    assert folder is not None
    made = ready(folder)
    spent = []
    for bus in sorted({int(b) for b in made.grid.load_bus})[::8]:
        model = made.with_step(made.intact, bus, 0.1)
        near = made.engine.nose_near(model, made.nose)
        exact = made.engine.nose(model, made.nose.base)
        if near is not None:
            spent.append(near.factorisations)
            assert near.loading == pytest.approx(exact.loading, rel=1e-8)
            assert near.kind == exact.kind
    assert len(spent) >= 10
    assert sum(spent) / len(spent) <= 10
