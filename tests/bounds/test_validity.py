"""The guarantee itself: how often limits and breaches are EVER wrong, under drift and with a look after every label."""

from __future__ import annotations

import math

import numpy as np
import pytest
from bounds import streams
from scipy.stats import binom

import watcher
from watcher.bounds.evidence import evidence
from watcher.bounds.mixture import LIFE, RESTART
from watcher.bounds.windows import restarts, totals

RISK = 0.05
SIGNIFICANCE = 0.001
"""Counts are compared with the 99.9% quantile of the binomial distribution at exactly the risk."""


@pytest.mark.parametrize("kind", streams.KINDS)
def test_running_means_stay_inside_the_limits(kind):
    """2,000 streams x 5,000 labels, risk 0.05: the streams ever wrong are not more than the risk allows."""
    p, x = streams.KINDS[kind](2000, 5000, np.random.default_rng(20))
    allowed = binom.ppf(1 - SIGNIFICANCE, 2000, RISK)

    wrong = streams.ever_wrong(p, x, lambda n, k: watcher.confidence_bounds(n, k, RISK))

    assert wrong <= allowed


def test_the_same_test_refutes_the_uncorrected_exact_interval():
    """Proof that the test can fail: the exact interval, looked at after every label, is wrong far too often."""
    p, x = streams.constant(2000, 5000, np.random.default_rng(20))
    allowed = binom.ppf(1 - SIGNIFICANCE, 2000, RISK)

    wrong = streams.ever_wrong(p, x, lambda n, k: watcher.exact_bounds(n, k, RISK))

    assert wrong > 5 * allowed


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
        starts = np.vstack([[0, 0], lived[:-1:7]])
        windows = lived[6::7][:, None] - starts[:52][None]
        started = np.tril(np.ones((52, 52), dtype=bool))
        most = evidence(windows[started], 0.03, "above", mixture=RESTART)
        false += bool((most >= threshold).any() or (evidence(lived, 0.03, "above", mixture=LIFE) >= threshold).any())

    assert false > 2 * binom.ppf(1 - SIGNIFICANCE, 200, RISK)
