"""Rounding for a reader never turns a miss into a pass, nor a pass into a miss."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from compsize.report.shown import (
    decimals_for,
    shown,
    shown_bound,
    shown_gap,
    shown_margin,
    shown_money,
    shown_pair,
    shown_row,
)

MARGIN = st.floats(-1e4, 1e4, allow_nan=False)


def number(text: str) -> float:
    return float(text.replace(",", "").replace("\N{MINUS SIGN}", "-"))


@pytest.mark.parametrize(
    ("value", "required", "text"),
    [
        (39.9999999, 40.0, "39.99"),
        (39.996, 40.0, "39.99"),
        (40.0, 40.0, "40.00"),
        (40.0001, 40.0, "40.00"),
        (12.345, 40.0, "12.34"),
        (12.3456, None, "12.35"),
        (-0.0001, 0.0, "\N{MINUS SIGN}0.01"),
        (40.001, 40.004, "40.001"),
        (None, 40.0, ""),
    ],
)
def test_margin_just_below_the_requirement(value: float | None, required: float | None, text: str) -> None:
    """A margin just below its requirement is shown below it; others are rounded to the nearest."""
    assert shown_margin(value, required) == text


@given(MARGIN, st.one_of(MARGIN, st.none()), st.floats(-1e-3, 1e-3), st.integers(0, 3))
def test_texts_give_the_verdict(value: float, limit: float | None, near: float, decimals: int) -> None:
    """Comparing the two texts gives the verdict of the unrounded numbers, far apart or very close."""
    bound = value + near if limit is None else limit
    for sense, met in (("at least", value >= bound), ("at most", value <= bound)):
        left, right = shown_pair(value, bound, None, decimals, sense)  # type: ignore[arg-type]
        if abs(value - bound) > 1e-11 or value == bound:
            passes = number(left) >= number(right) if sense == "at least" else number(left) <= number(right)
            assert passes == met
        assert abs(number(left) - value) <= 10**-decimals


@given(st.lists(MARGIN, min_size=2, max_size=2), MARGIN)
def test_two_values_share_one_limit(values: list[float], limit: float) -> None:
    """Before and after are shown with the same text of the limit, and both read as their verdicts."""
    texts, bound = shown_row([(value, None) for value in values], limit)
    for text, value in zip(texts, values, strict=True):
        if abs(value - limit) > 1e-11:
            assert (number(text) >= number(bound)) == (value >= limit)


def test_tolerated_pass_reads_as_a_pass() -> None:
    """A margin short by less than the tolerance counts as met and is shown so."""
    assert shown_pair(39.99999995, 40.0, True) == ("40.00", "40.00")
    assert shown_pair(39.99495, 39.995, True) == ("39.995", "39.995")


def test_miss_for_another_reason_is_rounded_plainly() -> None:
    """A case that misses although its number reaches the limit is not given twelve places."""
    assert shown_pair(45.678, 40.0, False) == ("45.68", "40.00")


def test_bound_and_gap_are_never_flattered() -> None:
    """A bound below the cost is rounded down, a gap that is not zero is not shown as zero."""
    assert shown_bound(4_429_999.6, 4_430_000.0, 0) == "4,429,999"
    assert shown_bound(4_430_000.0 * (1 - 1e-13), 4_430_000.0, 0) == "4,430,000"
    assert shown_bound(None, None, 0) == ""
    assert (shown_gap(0.0), shown_gap(1e-12), shown_gap(0.0001), shown_gap(None)) == ("0.00", "0.00", "0.01", "")


def test_plain_numbers() -> None:
    """Thousands have commas, minus is a minus sign, minus zero is zero and blank stays blank."""
    assert shown(1234567.891, 1) == "1,234,567.9"
    assert shown(-1234.5, 0) == "\N{MINUS SIGN}1,234"
    assert shown(-0.001, 2) == "0.00"
    assert shown(None, 2) == ""
    assert shown(1e300, 2).startswith("1,000,000")
    assert shown_money(12.5, 2, "EUR") == "EUR\N{NO-BREAK SPACE}12.50"
    assert shown_money(None, 2, "EUR") == ""


def test_places_only_where_they_say_something() -> None:
    """Whole costs have no places, others two."""
    assert decimals_for([1.0, None, 20_000.0]) == 0
    assert decimals_for([1.0, 2.5]) == 2
