"""The guarantee itself: how often limits and breaches are EVER wrong, under drift and with a look after every label."""

from __future__ import annotations

import math

import numpy as np
import pytest
from bounds import streams
from scipy.stats import binom

import watcher
from watcher.bounds.designs import UNIFORM
from watcher.bounds.evidence import evidence
from watcher.bounds.mixture import LIFE, RESTART
from watcher.bounds.windows import restarts, totals

RISK = 0.05
SIGNIFICANCE = 0.001
"""Counts are compared with the 99.9% quantile of the binomial distribution at exactly the risk."""


def always(n, k):
    return watcher.confidence_bounds(n, k, RISK)


def possible(n, k, mean):
    """No mixture gives more evidence than the ceiling: below the threshold the mean cannot lie outside the limits."""
    rows = np.stack([n, k], axis=-1)
    above, below = UNIFORM.ceiling(rows, mean, "above"), UNIFORM.ceiling(rows, mean, "below")
    return np.maximum(above, below) >= math.log(2 / RISK)


@pytest.mark.parametrize("kind", streams.KINDS)
def test_running_means_stay_inside_the_limits(kind):
    """2,000 streams x 5,000 labels, risk 0.05: the streams ever wrong are not more than the risk allows."""
    rng, wrong = np.random.default_rng(20), 0
    for _ in range(10):
        wrong += streams.ever_wrong(*streams.KINDS[kind](200, 5000, rng), always, possible)

    assert wrong <= binom.ppf(1 - SIGNIFICANCE, 2000, RISK)


@pytest.mark.parametrize("kind", streams.KINDS)
def test_leaving_out_what_cannot_be_wrong_changes_nothing(kind):
    """Stream by stream the count is the same as with every limit computed."""
    rng = np.random.default_rng(22)
    for _ in range(60):
        p, x = streams.KINDS[kind](1, 1500, rng)

        assert streams.ever_wrong(p, x, always) == streams.ever_wrong(p, x, always, possible)


def test_the_same_test_refutes_the_uncorrected_exact_interval():
    """Proof that the test can fail: already in the first 1,000 looks the exact interval is wrong far too often."""
    p, x = streams.constant(2000, 5000, np.random.default_rng(20))
    allowed = binom.ppf(1 - SIGNIFICANCE, 2000, RISK)

    wrong = streams.ever_wrong(p[:, :1000], x[:, :1000], lambda n, k: watcher.exact_bounds(n, k, RISK))

    assert wrong > 3 * allowed


DAY = 86400
LIFE_DAYS = 364
RESTARTS = restarts(LIFE_DAYS * DAY, DAY)


def lives(number, seed):
    rng = np.random.default_rng(seed)
    for _ in range(number):
        n = rng.poisson(70, LIFE_DAYS)
        yield np.stack([n, rng.binomial(n, 0.03)], axis=-1)


def test_whole_lives_spent_exactly_at_the_tolerance():
    """1,000 lives of 364 days at 0.03, risk 0.05: false breaches are not more than the risk allows."""
    threshold = math.log(1 / RISK)

    false = sum(bool((totals(life, 0.03, RESTARTS) >= threshold).any()) for life in lives(1000, 21))

    assert false <= binom.ppf(1 - SIGNIFICANCE, 1000, RISK)


def test_windows_that_do_not_share_the_risk_are_refuted():
    """Proof that the test can fail: if every window had the whole risk, far more lives would end in a false breach."""
    threshold, false = math.log(1 / RISK), 0
    for life in lives(200, 21):
        lived = np.cumsum(life, axis=0)
        starts = np.vstack([[0, 0], lived[2:-1:3]])
        windows = lived[2::3][:, None] - starts[:121][None]
        started = np.tril(np.ones((121, 121), dtype=bool))
        most = evidence(windows[started], 0.03, "above", mixture=RESTART)
        false += bool((most >= threshold).any() or (evidence(lived, 0.03, "above", mixture=LIFE) >= threshold).any())

    assert false > binom.ppf(1 - SIGNIFICANCE, 200, RISK)
