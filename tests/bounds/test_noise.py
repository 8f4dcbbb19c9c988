"""Known label noise: rates to test against, and limits turned back into true rates."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from scipy.stats import binomtest

from watcher.bounds.evidence import evidence
from watcher.bounds.noise import breach_rate, support_rate, true_limits


def test_without_noise_nothing_changes() -> None:
    """No declared noise: both rates are the tolerance, limits stay as they are."""
    assert breach_rate(0.03, None) == support_rate(0.03, None) == 0.03
    assert true_limits(0.01, 0.05, None) == (0.01, 0.05)
    assert true_limits(0.01, 0.05, (0.0, 0.0)) == pytest.approx((0.01, 0.05), rel=1e-14)


@pytest.mark.parametrize("noise", [(0.0, 0.01), (0.01, 0.02), (0.1, 0.3), (0.2, 0.2)])
def test_rates_are_the_formulas_rounded_outward(noise: tuple[float, float]) -> None:
    """eps*(1-a-b) + b rounded up and eps*(1-a-b) + a rounded down, by exact arithmetic."""
    a, b = (Fraction(value) for value in noise)
    seen = Fraction(0.03) * (1 - a - b)

    assert Fraction(breach_rate(0.03, noise)) >= seen + b > Fraction(math.nextafter(breach_rate(0.03, noise), 0))
    assert Fraction(support_rate(0.03, noise)) <= seen + a < Fraction(math.nextafter(support_rate(0.03, noise), 1))


@pytest.mark.parametrize("noise", [(0.0, 0.01), (0.01, 0.02), (0.1, 0.3)])
def test_rates_bracket_everything_the_noise_can_show(noise: tuple[float, float]) -> None:
    """At the tolerance, any flip chances within [a, b] show a rate between the two."""
    flips = np.linspace(*noise, 11)
    seen = 0.03 * (1 - flips[:, None]) + 0.97 * flips

    assert seen.max() <= breach_rate(0.03, noise) * (1 + 1e-12)
    assert seen.min() >= support_rate(0.03, noise) * (1 - 1e-12)


def test_limits_contain_what_the_exact_formula_gives() -> None:
    """(L - b)/(1-a-b) and (U - a)/(1-a-b), rounded outward, cut to [0, 1]; arrays and numbers alike."""
    a, b = 0.01, 0.03
    lower, upper = np.array([0.0, 0.05, 0.4, 0.9]), np.array([0.02, 0.06, 0.99, 1.0])
    low, high = true_limits(lower, upper, (a, b))
    scale = 1 - Fraction(a) - Fraction(b)

    for i in range(4):
        assert Fraction(low[i]) <= max((Fraction(lower[i]) - Fraction(b)) / scale, 0)
        assert Fraction(high[i]) >= min((Fraction(upper[i]) - Fraction(a)) / scale, 1)
        assert true_limits(float(lower[i]), float(upper[i]), (a, b)) == (low[i], high[i])
    assert low[0] == 0.0
    assert high[-1] == 1.0
    assert low[1] == pytest.approx(0.02 / 0.96, rel=1e-12)


def test_a_breach_at_the_limit_of_the_limits_is_consistent() -> None:
    """The tolerance turned into a seen rate and back stays on its own side."""
    for noise in ((0.0, 0.01), (0.013, 0.027)):
        assert true_limits(breach_rate(0.03, noise), 1.0, noise)[0] <= 0.03
        assert true_limits(0.0, support_rate(0.03, noise), noise)[1] >= 0.03


@pytest.mark.parametrize("noise", [(-0.1, 0.1), (0.2, 0.1), (0.5, 0.5), (0.1, 0.95), (math.nan, 0.1)])
def test_impossible_noise_is_refused(noise: tuple[float, float]) -> None:
    """The message names label_noise."""
    with pytest.raises(ValueError, match="label_noise"):
        breach_rate(0.03, noise)


@pytest.mark.parametrize("tolerance", [0.0, 1.0, math.nan])
def test_impossible_tolerance_is_refused(tolerance: float) -> None:
    """The message names tolerance."""
    with pytest.raises(ValueError, match="tolerance"):
        support_rate(tolerance, (0.0, 0.1))


def test_noise_at_its_worst_keeps_the_risk_and_ignoring_it_does_not() -> None:
    """True rate at the tolerance, flips 2% each way: false breaches within 5% at risk 5%; naive ones far above; sig. 1e-4."""
    rng = np.random.default_rng(51)
    runs, looks = 500, 50 * np.arange(1, 101)
    errors = rng.binomial(50, 0.03 * 0.98 + 0.97 * 0.02, (runs, 100)).cumsum(axis=1)
    statistics = np.stack(np.broadcast_arrays(looks, errors), axis=-1)
    ours = (evidence(statistics, breach_rate(0.03, (0.0, 0.02)), "above") >= math.log(20)).any(axis=1)
    naive = (evidence(statistics, 0.03, "above") >= math.log(20)).any(axis=1)

    assert binomtest(int(ours.sum()), runs, 0.05, alternative="greater").pvalue > 1e-4
    assert naive.mean() > 0.9
