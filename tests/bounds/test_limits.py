"""Limits: where the evidence reaches a threshold, rounded to the side that keeps the guarantee."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

import watcher
from watcher.bounds.designs import LOSS
from watcher.bounds.evidence import evidence, lower_limit, upper_limit
from watcher.bounds.mixture import LIFE, RESTART

THRESHOLD = math.log(2 / 0.001)
ENDS = [(lower_limit, "above", -1), (upper_limit, "below", 1)]
counts = st.integers(0, 200_000).flatmap(lambda n: st.tuples(st.just(n), st.integers(0, n)))


@settings(max_examples=300, deadline=None)
@given(counts, st.floats(0.7, 60.0), st.sampled_from(ENDS), st.sampled_from([LIFE, RESTART]))
def test_limits_are_rounded_outward_and_tight(pair, threshold, end, mixture):
    """At the limit the computed evidence reaches the threshold, by at most 1e-7 nats too much."""
    limit, side, _ = end
    row = np.array(pair)

    found = float(limit(row, threshold, mixture=mixture))

    if found in (0.0, 1.0):
        edge = 0.0 if side == "above" else 1.0
        assert found == edge
        assert float(evidence(row, edge, side, mixture=mixture)) <= threshold + 1.1e-7
    else:
        assert threshold <= float(evidence(row, found, side, mixture=mixture)) <= threshold + 1.1e-7


@pytest.mark.parametrize(("limit", "side", "outward"), ENDS)
def test_limits_agree_with_a_library_root_finder(limit, side, outward):
    """scipy's brentq finds the same roots."""
    rng = np.random.default_rng(5)
    for _ in range(40):
        n = int(rng.integers(50, 50_000))
        row = np.array([n, rng.binomial(n, rng.uniform(0.05, 0.9))])
        p = row[1] / n

        def excess(m, row=row):
            return float(evidence(row, m, side)) - THRESHOLD

        expected = brentq(excess, 1e-9, p, xtol=1e-15) if side == "above" else brentq(excess, p, 1 - 1e-12, xtol=1e-15)

        assert expected == pytest.approx(float(limit(row, THRESHOLD)), rel=2e-6)


@pytest.mark.parametrize(("limit", "side", "outward"), ENDS)
def test_one_batch_of_limits_equals_many_batches_of_one(limit, side, outward):
    """A limit does not depend on the limits beside it, bit for bit."""
    rng = np.random.default_rng(6)
    n = rng.integers(0, 100_001, 1000)
    rows = np.stack([n, rng.binomial(n, rng.uniform(0, 1, 1000) ** 3)], axis=-1)
    thresholds = rng.uniform(1, 30, 1000)

    whole = limit(rows, thresholds)

    assert whole.tolist() == [float(limit(row, t)) for row, t in zip(rows, thresholds.tolist(), strict=True)]
    assert whole.tolist() == limit(np.asfortranarray(rows), thresholds).tolist()
    assert whole[::-3].tolist() == limit(rows[::-3], thresholds[::-3]).tolist()


def test_edges_of_the_counts():
    """No labels: [0, 1]. No errors: lower 0. All errors: upper 1. Very few errors or correct labels: likewise."""
    for n in (1, 2, 10, 1000, 10**9):
        none, all_ = watcher.confidence_bounds(n, 0, 0.001), watcher.confidence_bounds(n, n, 0.001)
        assert none.lower == 0.0
        assert all_.upper == 1.0
        assert none.upper == pytest.approx(1.0 - all_.lower, abs=1e-9)
    nothing = watcher.confidence_bounds(0, 0, 0.001)
    assert (nothing.lower, nothing.upper) == (0.0, 1.0)
    # 3 errors bring at most 9 nats less the price of the weight: not the log(2e12) = 28.3 that are needed.
    assert watcher.confidence_bounds(1000, 3, 1e-12).lower == 0.0
    assert watcher.confidence_bounds(1000, 997, 1e-12).upper == 1.0
    assert 0.0 < watcher.confidence_bounds(1000, 30, 1e-12).lower < 0.03


def test_extreme_sizes_and_risks():
    """1e9 labels, an estimate of 1e-6 and a risk of 1e-12 give ordered limits around the estimate."""
    bounds = watcher.confidence_bounds([10**9, 10**9, 10**9, 10**6], [10**3, 1, 10**9 - 1000, 30], 1e-12)
    estimate = np.array([1e-6, 1e-9, 1 - 1e-6, 3e-5])

    assert (bounds.lower < estimate).all()
    assert (estimate < bounds.upper).all()
    assert bounds.upper[0] < 2e-6
    assert bounds.lower[0] > 5e-7


def test_limits_widen_with_less_risk_and_narrow_with_more_labels():
    """Both are monotone."""
    by_risk = watcher.confidence_bounds(2000, 60, [0.2, 0.05, 0.01, 1e-3, 1e-6, 1e-12])
    by_size = watcher.confidence_bounds(100 * 2 ** np.arange(16), 4 * 2 ** np.arange(16), 0.01)

    assert (np.diff(by_risk.upper - by_risk.lower) > 0).all()
    assert (np.diff(by_size.upper - by_size.lower) < 0).all()


def test_width_against_the_exact_interval_of_one_look():
    """The price of looking at any time: at most 1.45 times the exact interval's width, risk 0.001, n 200 to 1e6."""
    n = np.array([200, 500, 1000, 3000, 10**4, 10**5, 10**6])
    for p in (0.005, 0.02):
        k = np.rint(n * p).astype(int)
        always, once = watcher.confidence_bounds(n, k, 0.001), watcher.exact_bounds(n, k, 0.001)

        ratio = (always.upper - always.lower) / (once.upper - once.lower)

        assert (ratio <= 1.45).all()
        assert (ratio > 1.1).all()
        assert ((always.lower <= once.lower) & (once.upper <= always.upper)).all()


def test_width_is_what_the_method_states():
    """method.md section 1: 1.23, 1.28, 1.34, 1.39, 1.43, 1.51 at p = 0.02, risk 0.001 (measured on a prototype)."""
    n = np.array([200, 1000, 10**4, 10**5, 10**6, 10**8])
    k = np.rint(0.02 * n).astype(int)
    always, once = watcher.confidence_bounds(n, k, 0.001), watcher.exact_bounds(n, k, 0.001)

    expected = [1.23, 1.28, 1.34, 1.39, 1.43, 1.51]

    assert expected == pytest.approx((always.upper - always.lower) / (once.upper - once.lower), abs=0.006)


def test_limits_of_a_loss_contain_those_of_its_exact_sum():
    """Rounding the summed loss outward by 1e-6 widens the interval a trifle, never narrows it."""
    exact, rounded = (500, 10_000_000, 10_000_000), (500, 9_999_700, 10_000_300)

    assert lower_limit(rounded, THRESHOLD, design=LOSS) < lower_limit(exact, THRESHOLD, design=LOSS)
    assert upper_limit(rounded, THRESHOLD, design=LOSS) > upper_limit(exact, THRESHOLD, design=LOSS)
    assert lower_limit(exact, THRESHOLD, design=LOSS) == pytest.approx(lower_limit((500, 10), THRESHOLD), rel=2e-6)


def test_a_design_that_is_not_convex_still_gets_tight_limits():
    """With a slope that is nonsense the bracket does the work: a limit never depends on the slope being right."""

    class Steep(type(LOSS)):
        def slope(self, statistics, rate, side, shifts):
            return 0.01 * super().slope(statistics, rate, side, shifts)

    row = (500, 10_000_000, 10_000_000)

    for limit in (lower_limit, upper_limit):
        expected = float(limit(row, THRESHOLD, design=LOSS))
        assert expected == pytest.approx(float(limit(row, THRESHOLD, design=Steep())), rel=2e-6)
