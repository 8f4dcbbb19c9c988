"""What is shown beside a verdict: shares, tipping point, over-dispersion, mean weight, error by lag."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binomtest, chi2, chi2_contingency

from watcher.bounds.diagnostics import error_by_lag, labelled_share, mean_weight, over_dispersion, tipping_point


def test_labelled_share() -> None:
    """labels/predictions, NaN where nothing was predicted; more labels than predictions are refused."""
    found = labelled_share([3, 0, 0], [4, 7, 0])

    assert found[:2].tolist() == [0.75, 0.0]
    assert math.isnan(found[2])
    with pytest.raises(ValueError, match="labels"):
        labelled_share(5, 4)


def test_tipping_point() -> None:
    """(eps N - u n)/(N - n): 0.055 in the worked case; NaN when all is labelled; below 0 and above 1 mean what they say."""
    found = tipping_point([500, 1000, 900, 20], [0.005, 0.02, 0.5, 0.0], 1000, [0.03, 0.03, 0.03, 0.99])

    assert found[0] == pytest.approx((0.03 * 1000 - 0.005 * 500) / 500)
    assert math.isnan(found[1])
    assert found[2] < 0.0
    assert found[3] > 1.0
    with pytest.raises(ValueError, match="labels"):
        tipping_point(2, 0.1, 1, 0.03)


def test_chi_square_of_well_filled_buckets_is_the_textbooks() -> None:
    """With enough errors in every bucket the statistic is Pearson's of the 2xB table (scipy's contingency test)."""
    labels, errors = np.array([400, 500, 300]), np.array([20, 31, 9])
    found = over_dispersion(labels, errors)
    expected = chi2_contingency(np.stack([errors, labels - errors]), correction=False)

    assert found.statistic == pytest.approx(expected.statistic)
    assert found.degrees == 2
    assert found.chance == pytest.approx(expected.pvalue)
    assert found.ratio == pytest.approx(expected.statistic / 2)


@pytest.mark.parametrize(("volume", "rate"), [(20, 0.02), (70, 0.02), (70, 0.005), (500, 0.02)])
def test_independent_labels_are_rarely_flagged(volume: int, rate: float) -> None:
    """Over 28 buckets the chance falls below 1% in at most about 1.3% of 2000 runs; significance 1e-4."""
    rng = np.random.default_rng(71)
    low = sum(over_dispersion(np.full(28, volume), k).chance < 0.01 for k in rng.binomial(volume, rate, (2000, 28)))

    assert binomtest(int(low), 2000, 0.013, alternative="greater").pvalue > 1e-4


def test_sparse_chi_square_would_cry_wolf() -> None:
    """Without merging, 0.4 expected errors a bucket exceed the 1 - 1e-4 quantile over three times too often."""
    rng = np.random.default_rng(72)
    errors = rng.binomial(20, 0.02, (200_000, 28))
    errors = errors[errors.any(axis=1)]
    p = errors.mean(axis=1, keepdims=True) / 20
    statistic = ((errors - 20 * p) ** 2 / (20 * p * (1 - p))).sum(axis=1)

    assert (statistic > chi2.isf(1e-4, 27)).mean() > 3e-4


def test_clusters_are_flagged() -> None:
    """Clusters of 10 with correlation 0.3 are flagged in over 90% of runs at 200 labels a day, ratio near 1 + 9*0.3."""
    rng = np.random.default_rng(73)
    shared = rng.beta(0.05 * 7 / 3, 0.95 * 7 / 3, (200, 28, 20))
    errors = rng.binomial(10, shared).sum(axis=-1)
    found = [over_dispersion(np.full(28, 200), row) for row in errors]

    assert np.mean([one.clustered for one in found]) > 0.9
    assert np.mean([one.ratio for one in found]) == pytest.approx(3.7, abs=0.5)


def test_bunching_within_buckets_is_told_from_days_that_differ() -> None:
    """Days of different rates are over-dispersed between, not within, buckets; parts of different rates the other way round."""
    rng = np.random.default_rng(74)
    days = rng.binomial(200, np.where(np.arange(28) % 2, 0.02, 0.10), (3, 28))
    parts = rng.binomial(200, np.array([[0.02], [0.06], [0.10]]), (3, 28))
    labels = np.full((3, 28), 200)

    assert over_dispersion(labels.sum(axis=0), days.sum(axis=0)).clustered
    assert over_dispersion(labels, days).chance > 1e-3
    assert over_dispersion(labels, parts).clustered
    assert over_dispersion(labels.sum(axis=0), parts.sum(axis=0)).chance > 1e-3


def test_over_dispersion_without_enough_errors() -> None:
    """Too few errors for two groups: no degrees of freedom, no flag, a NaN ratio."""
    for labels, errors in (
        (np.zeros(28), np.zeros(28)),
        (np.full(28, 5), np.eye(28)[0]),
        (np.full(28, 50), np.full(28, 50)),
    ):
        found = over_dispersion(labels, errors)
        assert found.degrees == 0
        assert math.isnan(found.ratio)
        assert not found.clustered
    with pytest.raises(ValueError, match="errors"):
        over_dispersion([1], [2])
    with pytest.raises(ValueError, match="labels"):
        over_dispersion(np.ones((1, 1, 1)), np.ones((1, 1, 1)))


def test_mean_weight_as_planned_is_not_flagged() -> None:
    """Weights drawn as planned, tested every fourth week of a year at 1%: flagged ever in at most 1% of 200 runs; significance 1e-4."""
    rng = np.random.default_rng(75)
    weeks = rng.binomial(490, 0.9, (200, 52)).cumsum(axis=1)
    n = 490 * np.arange(1, 53)
    flags = [
        any(
            mean_weight([hard, all_ - hard], ["0.111111", "9"], 1e-2).off
            for hard, all_ in zip(run[::4], n[::4], strict=True)
        )
        for run in weeks
    ]

    assert binomtest(sum(flags), 200, 1e-2, alternative="greater").pvalue > 1e-4


def test_wrong_weights_are_flagged() -> None:
    """Weights 25% too large are flagged within a few hundred labels; the mean is shown; 25% too small ones as well."""
    large = mean_weight([500, 500], ["0.25", "2.25"])
    small = mean_weight([500, 500], ["0.15", "1.35"])

    assert large.mean == pytest.approx(1.25)
    assert large.off
    assert large.evidence_above > math.log(2e4) > large.evidence_below
    assert small.mean == pytest.approx(0.75)
    assert small.off
    assert small.evidence_below > math.log(2e4) > small.evidence_above


def test_mean_weight_edges() -> None:
    """No labels: NaN and no flag; weight 1 alone never; wrong shapes and levels are named."""
    none, ones = mean_weight([0, 0], ["0.5", "1.5"]), mean_weight([10**6], ["1"])

    assert math.isnan(none.mean)
    assert not none.off
    assert ones.mean == 1.0
    assert not ones.off
    with pytest.raises(ValueError, match="labels"):
        mean_weight([1], ["0.5", "1.5"])
    with pytest.raises(ValueError, match="level"):
        mean_weight([1], ["1"], 0.0)
    with pytest.raises(ValueError, match="weight_levels"):
        mean_weight([1], ["0"])


def test_error_by_lag() -> None:
    """Rates of early and late labels over all buckets; NaN where there are none."""
    found = error_by_lag([10, 30], [4, 4], [0, 0], [0, 0])

    assert (found.early, found.early_labels) == (0.2, 40)
    assert math.isnan(found.late)
    with pytest.raises(ValueError, match="early_errors"):
        error_by_lag([1], [2], [0], [0])
