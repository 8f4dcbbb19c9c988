"""Parts of a promise's risk for the whole and for its slices, exact fractions (method.md section 8)."""

from __future__ import annotations

from collections.abc import Sequence
from decimal import Decimal, InvalidOperation
from fractions import Fraction
from typing import Final

WHOLE: Final = Fraction(1, 2)
DECLARED: Final = Fraction(2, 5)
DISCOVERED: Final = Fraction(1, 10)


def part_of_whole(has_slices: bool) -> Fraction:
    """All of the risk without slices, half of it with slices."""
    return WHOLE if has_slices else Fraction(1)


def declared_parts(weights: Sequence[str]) -> tuple[Fraction, ...]:
    """0.4 split over ALL declared values of all slice columns in proportion to their weights (decimal text, > 0).

    They sum to exactly 2/5. Raises ValueError for a weight that is no positive decimal number.
    """
    numbers = [_positive(text) for text in weights]
    everything = sum(numbers, Fraction(0))
    return tuple(DECLARED * number / everything for number in numbers)


def discovered_part(order: int) -> Fraction:
    """The part 1/(10 i (i + 1)) of the i-th value discovered later; over all i it sums to 1/10."""
    if order < 1:
        raise ValueError(f"order = {order}: discovered values are numbered from 1")
    return DISCOVERED / (order * (order + 1))


def _positive(text: str) -> Fraction:
    try:
        number = Decimal(text)
    except InvalidOperation as error:
        raise ValueError(f"weight = {text!r}: a positive decimal number is needed") from error
    if not number.is_finite() or number <= 0:
        raise ValueError(f"weight = {text!r}: a positive decimal number is needed")
    return Fraction(number)
