"""The list of the budgets' parts: exact sums, and the very shares that decide."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from watcher.bounds import windows
from watcher.bounds.budgets import BUDGETS, portions, shares
from watcher.bounds.parts import declared_parts, discovered_part
from watcher.bounds.weekly import week_risk


@pytest.mark.parametrize("budget", BUDGETS)
@pytest.mark.parametrize(("restarts", "weeks"), [(1, 2), (363, 53), (8735, 53)])
def test_the_parts_of_a_budget_sum_to_one(budget: str, restarts: int, weeks: int) -> None:
    """As fractions, exactly; finite parts are count times each."""
    found = shares(budget, restarts, weeks)  # type: ignore[arg-type]

    assert sum(share.sum for share in found) == 1
    assert all(share.count is None or share.count * share.each == share.sum for share in found)


@pytest.mark.parametrize(("name", "budget"), [("breach", windows.BREACH), ("support", windows.SUPPORT)])
def test_the_parts_are_those_that_decide(name: str, budget: windows.Budget) -> None:
    """Window 0, restarts 1..J and J + 1 have the shares of `windows`, which verdicts use."""
    release, life, after = shares(name, 363, 53)  # type: ignore[arg-type]
    used = budget.shares(363, 365)

    assert float(release.each) == pytest.approx(used[0], rel=1e-15)
    assert [float(life.each)] * 363 == pytest.approx(used[1:364].tolist(), rel=1e-14)
    assert float(after.each) == pytest.approx(used[364], rel=1e-14)
    assert float(after.sum) == pytest.approx(budget.remainder(363, 364), rel=1e-14)


def test_the_weeks_are_those_that_are_shown() -> None:
    """Each side of weeks 1..W, and of the first week after."""
    life, after = shares("weekly", 363, 53)

    assert [float(life.each)] * 53 == pytest.approx(week_risk(np.arange(1, 54), 53, 1.0).tolist(), rel=1e-14)
    assert float(after.each) == pytest.approx(float(week_risk(54, 53, 1.0)), rel=1e-14)


def test_portions_name_what_is_kept() -> None:
    """Whole, declared, two discovered: 1/10 * (1 - 1/2 - 1/6) is kept for values still unseen."""
    parts = declared_parts(("2", "1"))
    cells = [("whole", Fraction(1, 2), 0), ("a", parts[0], 0), ("b", parts[1], 0)]
    cells += [(name, discovered_part(i), i) for i, name in enumerate("cd", start=1)]
    found = portions(Fraction(1, 1000), cells, has_slices=True, declared=True)

    assert sum(portion.risk for portion in found) == Fraction(1, 1000)
    assert found[-1].risk == Fraction(1, 1000) * Fraction(1, 30)
    assert found[-1].kept
    alone = portions(Fraction(1, 1000), [("whole", Fraction(1), 0)], has_slices=False, declared=False)
    assert [portion.risk for portion in alone] == [Fraction(1, 1000)]
    none = portions(Fraction(1, 1000), [("whole", Fraction(1, 2), 0)], has_slices=True, declared=False)
    assert [portion.risk * 1000 for portion in none] == [Fraction(1, 2), Fraction(1, 10), Fraction(2, 5)]


def test_parts_that_do_not_add_up_are_refused() -> None:
    """A list that hides a part of the risk is no list."""
    with pytest.raises(ValueError, match="sum to"):
        portions(Fraction(1, 1000), [("whole", Fraction(1, 3), 0)], has_slices=False, declared=False)
    with pytest.raises(ValueError, match="weeks = 0"):
        shares("weekly", 1, 0)
