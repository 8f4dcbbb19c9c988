"""Weekly limits: their risks sum to the budget, and they are those of section 1 at that risk."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binom

from watcher.bounds.evidence import lower_limit, upper_limit
from watcher.bounds.weekly import week_limits, week_risk, weeks_of_life


def test_weeks_of_a_life():
    """W = ceil(service_life/7d) + 1."""
    assert [weeks_of_life(days * 86400) for days in (364, 365, 1, 7, 8)] == [53, 54, 2, 2, 3]


def test_risks_are_the_method_s_and_sum_to_the_budget():
    """0.95*risk/(2W) a side, then 0.025*risk*W/((W+i-1)(W+i)); both sides of all weeks together: the risk."""
    first, last, next_, later = week_risk([1, 53, 54, 55], 53, 0.001)

    assert first == last == pytest.approx(0.95 * 0.001 / 106)
    assert (next_, later) == pytest.approx((0.025e-3 * 53 / (53 * 54), 0.025e-3 * 53 / (54 * 55)))
    for count in (53, 54, 1000, 100_000):
        spent = 2 * week_risk(np.arange(1, count + 1), 53, 0.001).sum()
        left = 2 * 0.025e-3 * 53 / count
        assert spent + (left if count > 53 else 0.05e-3) == pytest.approx(0.001, rel=1e-9)


def test_limits_are_those_of_a_window_at_that_risk():
    """One broadcasting call gives every week's limits; [0, 1] for a week without labels."""
    rows = np.array([[490, 9], [0, 0], [510, 12]])
    lower, upper = week_limits(rows, [1, 2, 60], 53, 0.001)

    goal = -np.log(week_risk([1, 2, 60], 53, 0.001))
    assert lower.tolist() == lower_limit(rows, goal).tolist()
    assert upper.tolist() == upper_limit(rows, goal).tolist()
    assert (lower[1], upper[1]) == (0.0, 1.0)


def test_all_weeks_of_a_life_hold_at_once():
    """1,000 lives of 52 drifting weeks at risk 0.05: lives with a wrong week are within the 99.9% binomial quantile."""
    rng = np.random.default_rng(41)
    rate = np.clip(0.03 + 0.02 * np.sin(np.arange(52) / 5) + rng.normal(0, 0.003, (1000, 52)), 0.001, 1)
    n = rng.poisson(490, (1000, 52))
    lower, upper = week_limits(np.stack([n, rng.binomial(n, rate)], axis=-1), np.arange(1, 53), 53, 0.05)

    wrong = ((rate < lower) | (rate > upper)).any(axis=1).sum()

    assert wrong <= binom.ppf(0.999, 1000, 0.05)


def test_weeks_are_numbered_from_one():
    """Week 0 is refused."""
    with pytest.raises(ValueError, match="numbered from 1"):
        week_risk(0, 53, 0.001)
