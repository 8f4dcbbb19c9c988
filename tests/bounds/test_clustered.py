"""Clustered labels: the formula, its edges, validity under correlation where independence breaks, power."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
from scipy.stats import binomtest

from watcher.bounds import windows
from watcher.bounds.clustered import Clustered
from watcher.bounds.evidence import evidence, lower_limit, upper_limit
from watcher.bounds.mixture import LIFE, RESTART

TWENTY = Clustered(20)


@pytest.mark.parametrize("side", ["above", "below"])
def test_evidence_is_the_formula(side: str) -> None:
    """log sum_g w_g prod_c (1 + f (k_c - m n_c)), computed here cluster by cluster."""
    design, m = Clustered(4), 0.2
    clusters = [(1, 0), (1, 1), (3, 2), (4, 4), (4, 0), (4, 0), (2, 1)]
    statistic = [clusters.count(pair) for pair in design.pairs]
    parts = []
    for shift, weight in zip(LIFE.shifts, LIFE.weights, strict=True):
        c = math.expm1(shift if side == "above" else -shift)
        f = c / ((1 + c * m) * 4)
        parts.append(weight * math.prod(1 + f * (k - m * n) for n, k in clusters))

    found = evidence(np.array(statistic), m, side, design=design)

    assert float(found) == pytest.approx(math.log(math.fsum(parts)), rel=1e-12)


@pytest.mark.parametrize("side", ["above", "below"])
def test_clusters_of_one_are_the_plain_rule(side: str) -> None:
    """n_max = 1 gives the evidence and the limits of section 1."""
    counts = np.array([[400, 12], [10, 0], [0, 0], [7, 7]])
    pairs = np.stack([counts[:, 0] - counts[:, 1], counts[:, 1]], axis=-1)
    one = Clustered(1)

    assert one.pairs == ((1, 0), (1, 1))
    assert evidence(pairs, 0.03, side, design=one) == pytest.approx(evidence(counts, 0.03, side), abs=1e-12)
    for limit in (lower_limit, upper_limit):
        assert limit(pairs, 5.0, design=one) == pytest.approx(limit(counts, 5.0), abs=1e-12)


def test_pairs_are_all_possible_clusters_in_order() -> None:
    """Sizes 1 to n_max, every count of errors, by size and then by errors."""
    assert Clustered(2).pairs == ((1, 0), (1, 1), (2, 0), (2, 1), (2, 2))
    assert Clustered(50).dimension == 50 * 53 // 2


@pytest.mark.parametrize("n_max", [0, -3, 2.5, 201, None])
def test_impossible_sizes_are_refused(n_max: object) -> None:
    """The message names n_max."""
    with pytest.raises(ValueError, match="n_max"):
        Clustered(n_max)


@pytest.mark.parametrize("side", ["above", "below"])
def test_slope_is_the_derivative_and_evidence_is_monotone(side: str) -> None:
    """The slope agrees with a central difference; evidence above falls, evidence below grows with the rate."""
    design, step = Clustered(3), 1e-6
    statistics, rate = np.array([[5, 1, 9, 2, 1, 20, 3, 0, 1]]), np.array([0.15])
    values = [
        (statistics[..., None] * design.coefficients(rate + d, side, RESTART.shifts)).sum(axis=-2)
        for d in (-step, step)
    ]
    rates = np.linspace(0.001, 0.999, 200)
    steps = np.diff(evidence(statistics, rates, side, design=design))

    found = design.slope(statistics, rate, side, RESTART.shifts)

    assert found == pytest.approx((values[1] - values[0]) / (2 * step), rel=1e-6, abs=1e-6)
    assert ((steps < 0) if side == "above" else (steps > 0)).all()


@pytest.mark.parametrize("side", ["above", "below"])
def test_ceiling_is_never_below_the_evidence(side: str) -> None:
    """Random tables: the ceiling bounds the evidence of both mixtures, the empty table included."""
    rng = np.random.default_rng(41)
    design = Clustered(4)
    statistics = rng.poisson(3, (200, design.dimension)) * rng.integers(0, 2, (200, design.dimension))
    statistics[0] = 0
    for rate in (0.001, 0.1, 0.6, 0.999):
        for mixture in (LIFE, RESTART):
            found = evidence(statistics, rate, side, design=design, mixture=mixture)
            assert (found <= design.ceiling(statistics, rate, side)).all()


def _tables(
    rng: np.random.Generator, runs: int, looks: int, clusters: int, rate: float, correlation: float
) -> np.ndarray:
    """Cumulative tables (runs, looks, D): clusters of 1 to 20 labels, beta-binomial errors of that intra-class correlation."""
    sizes = rng.integers(1, 21, (runs, looks, clusters))
    spread = 1 / correlation - 1
    errors = rng.binomial(sizes, rng.beta(rate * spread, (1 - rate) * spread, sizes.shape))
    place = sizes * (sizes + 1) // 2 - 1 + errors
    flat = place + TWENTY.dimension * np.arange(runs * looks).reshape(runs, looks, 1)
    counts = np.bincount(flat.reshape(-1), minlength=runs * looks * TWENTY.dimension)
    return counts.reshape(runs, looks, TWENTY.dimension).cumsum(axis=1)


def _as_independent(tables: np.ndarray) -> np.ndarray:
    pairs = np.array(TWENTY.pairs)
    return tables @ pairs


@pytest.fixture(scope="module")
def correlated() -> np.ndarray:
    """600 runs exactly at 0.05, intra-class correlation 0.3, 30 looks at 20 clusters each (6300 labels)."""
    return _tables(np.random.default_rng(42), 600, 30, 20, 0.05, 0.3)


@pytest.mark.parametrize("side", ["above", "below"])
def test_clusters_keep_the_risk(correlated: np.ndarray, side: str) -> None:
    """At the tolerance a verdict is ever false in at most 5% of runs at risk 5%; significance 1e-4."""
    found = evidence(correlated, 0.05, side, design=TWENTY)
    wrong = int((found >= math.log(20)).any(axis=1).sum())

    assert binomtest(wrong, 600, 0.05, alternative="greater").pvalue > 1e-4


def test_treating_clusters_as_independent_breaks(correlated: np.ndarray) -> None:
    """The plain rule on the same labels raises a false breach in over a fifth of the runs at risk 5% (method.md: .36)."""
    found = evidence(_as_independent(correlated), 0.05, "above")

    assert (found >= math.log(20)).any(axis=1).mean() > 0.2


def test_cluster_means_answer_another_question() -> None:
    """If large clusters err more, the mean over clusters misses a per-label rate over the tolerance; this does not."""
    rng = np.random.default_rng(43)
    sizes = rng.choice([1, 20], (60, 1500), p=[0.8, 0.2])
    errors = rng.binomial(sizes, np.where(sizes == 20, 0.10, 0.01))
    place = sizes * (sizes + 1) // 2 - 1 + errors
    tables = np.stack([np.bincount(row, minlength=TWENTY.dimension) for row in place])
    means = (errors / sizes).mean(axis=1)

    assert (evidence(tables, 0.05, "above", design=TWENTY) >= math.log(20)).mean() > 0.95
    assert (means < 0.05).all()


def test_a_real_rise_is_noticed() -> None:
    """Power: at twice the tolerance and the same correlation every run breaches within 6300 labels (method.md: 1.0)."""
    tables = _tables(np.random.default_rng(44), 100, 30, 20, 0.10, 0.3)
    found = evidence(tables, 0.05, "above", design=TWENTY)

    assert (found >= math.log(20)).any(axis=1).mean() == 1.0


def test_limits_by_inversion_hold_for_a_constant_rate() -> None:
    """Both limits include a constant rate in at least 95% of runs a side; 120 runs, significance 1e-4."""
    tables = _tables(np.random.default_rng(45), 120, 1, 200, 0.08, 0.3)[:, -1]
    lower, upper = lower_limit(tables, math.log(20), design=TWENTY), upper_limit(tables, math.log(20), design=TWENTY)

    for wrong in (lower > 0.08, upper < 0.08):
        assert binomtest(int(wrong.sum()), 120, 0.05, alternative="greater").pvalue > 1e-4
    assert (lower > 0.0).mean() > 0.9
    assert (upper < 0.5).mean() > 0.9


def test_large_clusters_stay_affordable() -> None:
    """A year of daily buckets with n_max = 50 (1325 components) goes through the windows in seconds."""
    rng = np.random.default_rng(46)
    design = Clustered(50)
    buckets = rng.poisson(0.005, (364, design.dimension))
    begin = time.perf_counter()

    totals = windows.totals(buckets, 0.6, 363, design=design)

    assert totals.shape == (364,)
    assert time.perf_counter() - begin < 20.0
