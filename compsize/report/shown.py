"""How numbers look in a report. Rounding never changes what a number says.

A value that misses its limit is never shown as one that reaches it, a bound is never shown better than
it is, and a gap that is not zero is never shown as zero.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Context, Decimal
from typing import Literal

__all__ = [
    "decimals_for",
    "shown",
    "shown_bound",
    "shown_gap",
    "shown_margin",
    "shown_money",
    "shown_pair",
    "shown_row",
]

MOST_DECIMALS = 12
SAME = 1e-9
"""Relative difference below which a bound is the cost: the two were summed in another order."""
MINUS = "\N{MINUS SIGN}"
WIDE = Context(prec=400)  # the digits of any float, with any number of places used here
Sense = Literal["at least", "at most"]


def shown(value: float | None, decimals: int) -> str:
    """``value`` rounded to ``decimals`` places, with commas and a true minus; blank where there is none."""
    return "" if value is None else _text(_round(value, decimals, ROUND_HALF_EVEN))


def shown_margin(value: float | None, required: float | None, decimals: int = 2) -> str:
    """A margin [MW or %], rounded down, or with more places, where it would else seem to reach ``required``.

    ``required`` is None where the case has no requirement.
    """
    return shown_pair(value, required, None, decimals)[0]


def shown_pair(
    value: float | None,
    limit: float | None,
    met: bool | None,
    decimals: int = 2,
    sense: Sense = "at least",
) -> tuple[str, str]:
    """``value`` and ``limit`` so that comparing the two texts gives the verdict; see :func:`shown_row`."""
    texts, limit_text = shown_row([(value, met)], limit, decimals, sense)
    return texts[0], limit_text


def shown_row(
    values: Sequence[tuple[float | None, bool | None]],
    limit: float | None,
    decimals: int = 2,
    sense: Sense = "at least",
) -> tuple[list[str], str]:
    """Several values against one limit, each so that comparing its text with the limit's gives its verdict.

    A value comes with its verdict; None: compare the unrounded numbers. All get as many places as that
    takes, at least ``decimals``. Where a verdict rests on more than the two numbers (a tolerance smaller
    than any place, a case that misses for another reason) the value is rounded plainly.
    """
    if limit is None:
        return [shown(value, decimals) for value, _ in values], ""
    sign = 1 if sense == "at least" else -1
    judged = [_judged(value, met, limit, sign) for value, met in values if value is not None]
    strict = [item for item in judged if (sign * item.value >= sign * limit) == item.met]
    tolerated = [item for item in judged if item.met and sign * item.value < sign * limit]
    for kept in (strict + tolerated, strict):
        for places in range(decimals, MOST_DECIMALS + 1):
            bound = _round(limit, places, ROUND_HALF_EVEN)
            if all((sign * item.at(places, bound, sign) >= sign * bound) == item.met for item in kept):
                found = iter(judged)
                return [
                    "" if value is None else _text(next(found).at(places, bound, sign)) for value, _ in values
                ], _text(bound)
    return [shown(value, decimals) for value, _ in values], shown(limit, decimals)


def shown_bound(bound: float | None, cost: float | None, decimals: int) -> str:
    """A lower bound on the cost: rounded down unless it is the cost itself."""
    if bound is None:
        return ""
    if cost is not None and bound >= cost - SAME * abs(cost):
        return shown(bound, decimals)
    return _text(_round(bound, decimals, ROUND_FLOOR))


def shown_gap(gap_pct: float | None) -> str:
    """A gap [%] with two places, rounded up."""
    if gap_pct is None:
        return ""
    return _text(_round(gap_pct if abs(gap_pct) > 100 * SAME else 0.0, 2, ROUND_CEILING))


def shown_money(value: float | None, decimals: int, currency: str = "") -> str:
    """A cost with its currency in front, where one is stated."""
    text = shown(value, decimals)
    return f"{currency}\N{NO-BREAK SPACE}{text}" if text and currency else text


def decimals_for(values: Iterable[float | None], fewest: int = 0, most: int = 2) -> int:
    """``fewest`` places where they lose nothing worth a hundredth, otherwise ``most``."""
    whole = all(value is None or abs(value - round(value, fewest)) < 0.005 for value in values)
    return fewest if whole else most


@dataclass(frozen=True)
class _Judged:
    value: float
    met: bool
    falls_short: bool
    """Not met because of the number itself."""

    def at(self, places: int, bound: Decimal, sign: int) -> Decimal:
        """Rounded to the nearest, but away from the bound where a miss would reach it."""
        number = _round(self.value, places, ROUND_HALF_EVEN)
        if self.falls_short and sign * number >= sign * bound:
            number = _round(self.value, places, ROUND_FLOOR if sign > 0 else ROUND_CEILING)
        return number


def _judged(value: float, met: bool | None, limit: float, sign: int) -> _Judged:
    reaches = sign * value >= sign * limit
    return _Judged(value, reaches if met is None else met, not reaches and not met)


def _round(value: float, decimals: int, way: str) -> Decimal:
    # The shortest text that stands for the float is what the files show; its digits are what is rounded.
    return Decimal(repr(float(value))).quantize(Decimal(1).scaleb(-decimals), rounding=way, context=WIDE)


def _text(number: Decimal) -> str:
    text = f"{abs(number):,f}"
    return MINUS + text if number < 0 else text
