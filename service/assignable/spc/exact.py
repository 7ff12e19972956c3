"""Decimal arithmetic on numbers as they were written, for comparison with a specification [astm-e29].

A double stands for the shortest decimal that gives it: 2.675 is 2.675, and not the binary number a little below.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import ROUND_05UP, ROUND_HALF_EVEN, ROUND_HALF_UP, Context, Decimal
from typing import Literal, TypeAlias

RoundingRule: TypeAlias = Literal["half-up", "half-even"]

# Sums of doubles need some 640 digits at most. ROUND_05UP never ends a quotient on the digits 0 or 5 that it does
# not have, so that rounding it again is as good as rounding the exact one.
_EXACT = Context(prec=700, rounding=ROUND_05UP, Emin=-999_999, Emax=999_999)
_ROUNDING = {"half-up": ROUND_HALF_UP, "half-even": ROUND_HALF_EVEN}
_ZERO = Decimal(0)


@dataclass(frozen=True, slots=True)
class Rounding:
    """How values are rounded before they are compared.

    decimals: places kept, negative for tens (-1) and so on. rule: what becomes of a value halfway between two:
    ``half-up`` goes to the one of greater magnitude, ``half-even`` to the one with an even last digit
    [astm-e29], [iso-80000-1].
    """

    decimals: int
    rule: RoundingRule


def written(value: float) -> Decimal:
    """A double as the shortest decimal that gives it."""
    return Decimal(repr(value))


def rounded(value: Decimal, rounding: Rounding) -> Decimal:
    """The value to so many decimals, exactly by the rule stated."""
    step = Decimal((0, (1,), -rounding.decimals))
    found = value.quantize(step, _ROUNDING[rounding.rule], _EXACT)
    return found if found else abs(found)  # no negative zero


def average(values: Sequence[Decimal]) -> Decimal:
    """The mean of one value or more, exact for every comparison and rounding that follows."""
    total = _ZERO
    for value in values:
        total = _EXACT.add(total, value)
    return _EXACT.divide(total, Decimal(len(values)))


def plus(a: Decimal, b: Decimal) -> Decimal:
    """The sum, exactly."""
    return _EXACT.add(a, b)


def less(a: Decimal, b: Decimal) -> Decimal:
    """The difference, exactly."""
    return _EXACT.subtract(a, b)


def shown(value: Decimal, unit: str | None) -> str:
    """For a sentence: with the digits it has, where they are not too many."""
    text = format(value, "f")
    if len(text) > 18:
        text = f"{float(value):.10g}"
    return f"{text} {unit}" if unit else text
