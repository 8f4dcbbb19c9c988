"""Where the three budgets of risk go, part by part, as exact fractions that add up to the promise's risk.

A list to be read and added up by hand: what decides are `windows`, `weekly` and `parts`; a test holds this to them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Final, Literal

from watcher.bounds.parts import DECLARED, DISCOVERED, part_of_whole

Name = Literal["breach", "support", "weekly"]
BUDGETS: Final[tuple[Name, ...]] = ("breach", "support", "weekly")
_RELEASE: Final = {"breach": Fraction(1, 5), "support": Fraction(1, 2)}
_LIFE: Final = {"breach": Fraction(3, 4), "support": Fraction(9, 20)}
_AFTER: Final = Fraction(1, 20)
_WEEKS: Final = Fraction(19, 20)


@dataclass(frozen=True, slots=True)
class Share:
    """Equal parts of one cell's risk in one budget."""

    name: str
    count: int | None
    """None: endlessly many that get smaller and smaller; `each` is then the largest."""
    each: Fraction
    sum: Fraction
    """Of all of them."""


@dataclass(frozen=True, slots=True)
class Portion:
    """What one cell, or what is kept for others, has of every budget."""

    name: str
    risk: Fraction
    """Of the promise's risk; the same in every budget."""
    kept: bool = False
    """Kept for slice values that nobody has seen yet, or left unused: no windows rest on it now."""


def shares(budget: Name, restarts: int, weeks: int) -> tuple[Share, ...]:
    """The parts of one budget, as fractions of a cell's risk; they sum to exactly 1.

    `restarts` J >= 1 in the service life, `weeks` W >= 1 of it. Breach and support: windows by their restart (method.md
    sections 2, 4). Weekly: both sides of every week together (section 9).
    """
    if restarts < 1 or weeks < 1:
        raise ValueError(f"restarts = {restarts}, weeks = {weeks}: numbers from 1 on are allowed")
    if budget == "weekly":
        later = _AFTER * weeks / Fraction(weeks * (weeks + 1))
        return (
            Share("weeks of the service life, each side", 2 * weeks, _WEEKS / (2 * weeks), _WEEKS),
            Share("weeks after it, each side", None, later / 2, _AFTER),
        )
    later = _AFTER * restarts / Fraction(restarts * (restarts + 1))
    return (
        Share("window since the release", 1, _RELEASE[budget], _RELEASE[budget]),
        Share("windows since later buckets of the service life", restarts, _LIFE[budget] / restarts, _LIFE[budget]),
        Share("windows since buckets after it", None, later, _AFTER),
    )


def portions(
    risk: Fraction, cells: Sequence[tuple[str, Fraction, int]], *, has_slices: bool, declared: bool
) -> tuple[Portion, ...]:
    """Who has which part of a promise's risk; the portions sum to exactly `risk`.

    `cells`: name, part and order of discovery (0: the whole or declared) of every cell. What is kept for values not
    discovered yet is named, and what nobody can ever use because no value was declared. Raises ValueError when the parts
    are not those of `parts`.
    """
    found = [Portion(name, risk * part) for name, part, _ in cells]
    if has_slices:
        known = sum(1 for _, _, order in cells if order)
        found.append(Portion("slice values not discovered yet", risk * DISCOVERED / (known + 1), kept=True))
        if not declared:
            found.append(Portion("unused: no slice value is declared", risk * DECLARED, kept=True))
    spent = sum((portion.risk for portion in found), Fraction(0))
    if spent != risk:
        raise ValueError(
            f"cells: their parts sum to {spent / risk} of the risk with {part_of_whole(has_slices)} for the whole"
        )
    return tuple(found)
