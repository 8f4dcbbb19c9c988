"""Weighted labels: the formula, its rounding, published sampling examples, betting bounds as yardstick, validity, power."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from bounds.betting import bets, log_capitals, martingale
from scipy.stats import binomtest

from watcher.bounds.designs import UNIFORM
from watcher.bounds.evidence import evidence, lower_limit, upper_limit
from watcher.bounds.mixture import LIFE, RESTART
from watcher.bounds.weighted import Weighted, decimals, rounded

PLAN = Weighted(("0.111111", "9"))
"""Hard tenth of the production oversampled 9:1: weights 0.1/0.9 (rounded down) and 0.9/0.1."""


@pytest.mark.parametrize("side", ["above", "below"])
def test_evidence_is_the_formula(side: str) -> None:
    """The kernel gives log sum_g w_g prod (1 + c w)/(1 + c m), computed here label by label."""
    weights, m = (0.25, 1.5, 4.0), 0.07
    design, statistic = Weighted(("0.25", "1.5", "4")), np.array([60, 3, 2, 1])
    parts = []
    for shift, weight in zip(LIFE.shifts, LIFE.weights, strict=True):
        c = math.expm1(shift) if side == "above" else math.expm1(-shift) / 4.0
        errors = sum(k * math.log1p(c * w) for k, w in zip((3, 2, 1), weights, strict=True))
        parts.append(weight * math.exp(errors - 60 * math.log1p(c * m)))

    found = evidence(statistic, m, side, design=design)

    assert float(found) == pytest.approx(math.log(math.fsum(parts)), rel=1e-12)


@pytest.mark.parametrize("side", ["above", "below"])
def test_weight_one_is_the_plain_rule(side: str) -> None:
    """With the single weight 1 evidence and limits are those of uniform samples."""
    statistics = np.array([[0, 0], [1, 1], [500, 9], [500, 0], [70, 70]])
    one = Weighted(("1",))

    assert evidence(statistics, 0.03, side, design=one) == pytest.approx(evidence(statistics, 0.03, side), abs=1e-12)
    for limit in (lower_limit, upper_limit):
        assert limit(statistics, 6.9, design=one) == pytest.approx(limit(statistics, 6.9, design=UNIFORM), abs=1e-12)


@pytest.mark.parametrize("text", ["0.1", "0.3", "1.7", "9", "0.25", "0.111111"])
def test_decimals_are_rounded_against_the_evidence(text: str) -> None:
    """A declared decimal becomes the next float down for "above" and up for "below", itself where it is exact."""
    exact = decimals([text], "weight_levels")[0]
    down, up = rounded(exact, "above"), rounded(exact, "below")

    assert Fraction(down) <= exact <= Fraction(up)
    assert up in (down, math.nextafter(down, math.inf))
    assert (down == up) == (Fraction(float(text)) == exact)


@pytest.mark.parametrize("side", ["above", "below"])
def test_ceiling_is_never_below_the_evidence(side: str) -> None:
    """Random statistics: the ceiling bounds the evidence of both mixtures, extremes included."""
    rng = np.random.default_rng(21)
    design = Weighted(("0.2", "1", "6"))
    errors = rng.binomial(40, [0.02, 0.3, 0.1], (300, 3)) * rng.integers(0, 2, (300, 3))
    statistics = np.concatenate([errors.sum(axis=1, keepdims=True) + rng.integers(0, 200, (300, 1)), errors], axis=1)
    for rate in (0.001, 0.03, 0.5, 0.999):
        ceiling = design.ceiling(statistics, rate, side)
        for mixture in (LIFE, RESTART):
            assert (evidence(statistics, rate, side, design=design, mixture=mixture) <= ceiling).all()
        assert np.isfinite(ceiling).mean() > 0.9


@pytest.mark.parametrize("side", ["above", "below"])
def test_slope_is_the_derivative(side: str) -> None:
    """The slope handed to the search agrees with a central difference."""
    statistics, rate, step = np.array([[90, 2, 1, 3]]), np.array([0.08]), 1e-6
    design = Weighted(("0.2", "1", "6"))
    values = [
        (statistics[..., None] * design.coefficients(rate + d, side, LIFE.shifts)).sum(axis=-2) for d in (-step, step)
    ]

    found = design.slope(statistics, rate, side, LIFE.shifts)

    assert found == pytest.approx((values[1] - values[0]) / (2 * step), rel=1e-6, abs=1e-6)


def test_limits_at_the_edges() -> None:
    """No label gives [0, 1]; no error gives lower 0; limits equal the threshold where they are inside; upper 1 without root."""
    design = Weighted(("0.5", "2"))
    statistics = np.array([[0, 0, 0], [500, 0, 0], [500, 5, 5], [3, 0, 3]])
    lower, upper = lower_limit(statistics, 3.0, design=design), upper_limit(statistics, 3.0, design=design)

    assert lower[:2].tolist() == [0.0, 0.0]
    assert upper[[0, 3]].tolist() == [1.0, 1.0]
    assert lower[2] < 12.5 / 500 < upper[2] < 1.0
    assert float(evidence(statistics[2], lower[2], "above", design=design)) == pytest.approx(3.0, abs=1e-7)
    assert float(evidence(statistics[2], upper[2], "below", design=design)) == pytest.approx(3.0, abs=1e-7)


@pytest.mark.parametrize(
    "levels", [(), ("0",), ("-1",), ("1", "1.0"), ("x",), ("nan",), ("inf",), tuple(str(i) for i in range(1, 18))]
)
def test_impossible_levels_are_refused(levels: tuple[str, ...]) -> None:
    """Levels must be 1 to 16 distinct positive decimals; the message names weight_levels."""
    with pytest.raises(ValueError, match="weight_levels"):
        Weighted(levels)


def test_stratified_proportion() -> None:
    """9/100, 24/50, 15/50 in strata of 4421, 755, 1018 schools estimate .17205199 (Lumley, R survey: api data; R run)."""
    sizes, sampled, errors = (4421, 755, 1018), (100, 50, 50), (9, 24, 15)
    weights = [Fraction(size, sum(sizes)) / Fraction(n, sum(sampled)) for size, n in zip(sizes, sampled, strict=True)]
    design = Weighted(tuple(f"{float(weight):.12f}" for weight in weights))
    labels, count = design.equivalent(np.array([200, *errors]), "above")

    assert float(count / labels) == pytest.approx(0.1720519858, abs=1e-9)


def test_yardstick_is_the_published_process() -> None:
    """The betting process reproduces stored values of confseq 0.0.11 (check values, section 5; run and recomputed)."""
    spaced = np.zeros(200)
    spaced[19::20] = 1
    longer = np.zeros(1000)
    longer[19::20] = 1
    squares = np.array([float(i * i % 7 == 1) for i in range(1, 301)])
    streams = {"A": spaced, "B": longer, "C": np.zeros(100), "D": squares}
    stored = {
        "A": (0.08988950687, 13.42930877, 549573.9461),
        "B": (0.02838493406, 27890.36656, 3.63251591e16),
        "C": (6.715386995, 111.4498759, 65196.19485),
        "D": (150555103.4, 682273.0028, 16.6960371),
    }

    for name, x in streams.items():
        found = [martingale(x, m)[-1] for m in (0.05, 0.1, 0.2)]
        assert found == pytest.approx(stored[name], rel=1e-8)
    first = martingale(np.array([0, 0, 1, 0, 1.0]), 0.05)
    assert first == pytest.approx([0.51315789, 0.52666205, 1.2310775, 1.076925, 3.368244], rel=1e-6)
    assert bets(np.array([0, 0, 1, 0, 1.0]), 0.025) == pytest.approx(
        [6.5249847, 4.6356965, 3.9547379, 2.5043516, 2.2396312], rel=1e-7
    )


def test_plain_limits_against_stored_betting_limits() -> None:
    """On the stored streams our 95% limits are about as tight as confseq's hedged betting sequence (grid of 0.001)."""
    statistics = np.array([[200, 10], [1000, 50], [100, 0], [300, 86]])
    stored = np.array([[0.010, 0.100], [0.027, 0.074], [0.0, 0.070], [0.198, 0.379]])
    lower, upper = lower_limit(statistics, math.log(40)), upper_limit(statistics, math.log(40))
    ratio = (upper - lower) / (stored[:, 1] - stored[:, 0])

    assert (ratio < 1.3).all()
    assert np.median(ratio) < 1.1


def _stream(
    rng: np.random.Generator, runs: int, n: int, hard: float, easy: float, share: float
) -> tuple[np.ndarray, np.ndarray]:
    """Kinds (True: hard) and errors of labels, a share of them drawn from the hard kind."""
    kind = rng.random((runs, n)) < share
    return kind, rng.random((runs, n)) < np.where(kind, hard, easy)


def _statistics(kind: np.ndarray, error: np.ndarray, every: int) -> np.ndarray:
    n = np.broadcast_to(np.arange(1, kind.shape[1] + 1), kind.shape)
    counts = [n, (kind & error).cumsum(axis=1), (~kind & error).cumsum(axis=1)]
    return np.stack(counts, axis=-1)[:, every - 1 :: every]


def test_weighted_limits_against_betting() -> None:
    """On an oversampled stream our limits are no wider than 1.15 times the hedged betting sequence, on average."""
    rng = np.random.default_rng(22)
    design, runs, n = Weighted(("0.2", "1.8")), 30, 2000
    kind, error = _stream(rng, runs, n, 0.3, 0.02, 0.5)
    last = _statistics(kind, error, n)[:, -1]
    ours = upper_limit(last, math.log(40), design=design) - lower_limit(last, math.log(40), design=design)
    x = np.where(error, np.where(kind, 0.2, 1.8), 0.0) / 1.8
    grid = np.linspace(0.0005, 0.1, 200)
    kept = np.array([np.maximum(*(k[:, -1] for k in log_capitals(x, m / 1.8))) < math.log(40) for m in grid])
    theirs = kept.sum(axis=0) * (grid[1] - grid[0])

    assert (ours / theirs).mean() < 1.15


@pytest.fixture(scope="module")
def oversampled() -> tuple[np.ndarray, np.ndarray]:
    """Nine labels in ten from the hard tenth; production error exactly 0.05 = 0.1*0.3 + 0.9*(0.02/0.9)."""
    return _stream(np.random.default_rng(23), 600, 4000, 0.3, 0.02 / 0.9, 0.9)


@pytest.mark.parametrize("side", ["above", "below"])
def test_oversampling_keeps_the_risk(oversampled: tuple[np.ndarray, np.ndarray], side: str) -> None:
    """At the tolerance a verdict is ever false in at most 5% of runs at risk 5%; 600 runs of 4000, significance 1e-4."""
    found = evidence(_statistics(*oversampled, 40), 0.05, side, design=PLAN)
    wrong = int((found >= math.log(20)).any(axis=1).sum())

    assert binomtest(wrong, 600, 0.05, alternative="greater").pvalue > 1e-4


def test_naive_treatments_of_oversampling_break(oversampled: tuple[np.ndarray, np.ndarray]) -> None:
    """Ignoring the weights raises a false breach in every run; dividing by the sample's mean weight breaks the risk, too."""
    kind, error = oversampled
    n = np.arange(1, 4001)
    ignoring = evidence(np.stack(np.broadcast_arrays(n, error.cumsum(axis=1)), axis=-1)[:, 39::40], 0.05, "above")
    weights = np.where(kind, 0.111111, 9.0)
    share = (weights * error).cumsum(axis=1) / weights.cumsum(axis=1)
    # The weighted share of errors taken for the share of that many uniform labels.
    normalised = evidence(np.stack(np.broadcast_arrays(n, np.round(n * share)), axis=-1)[:, 39::40], 0.05, "above")

    assert (ignoring >= math.log(20)).any(axis=1).mean() == 1.0
    assert (normalised >= math.log(20)).any(axis=1).mean() > 0.1


def test_wrong_weights_break_the_risk() -> None:
    """Weights 25% too large give many false breaches (the reason for the `weights-off` flag)."""
    rng = np.random.default_rng(24)
    kind, error = _stream(rng, 200, 6000, 0.3, 0.02 / 0.9, 0.5)
    found = evidence(_statistics(kind, error, 50), 0.05, "above", design=Weighted(("0.25", "2.25")))

    assert (found >= math.log(20)).any(axis=1).mean() > 0.3


def test_limits_cover_the_drifting_mean() -> None:
    """Both limits hold for the running mean of a drifting production rate at all looks; 5% a side, significance 1e-4."""
    rng = np.random.default_rng(25)
    runs, n, design = 300, 3000, Weighted(("0.2", "1.8"))
    wave = 1.0 + 0.9 * np.sin(np.arange(n) / 300)
    kind = rng.random((runs, n)) < 0.5
    error = rng.random((runs, n)) < np.where(kind, 0.3 * wave, 0.02 * wave)
    truth = ((0.1 * 0.3 + 0.9 * 0.02) * wave).cumsum() / np.arange(1, n + 1)
    statistics = _statistics(kind, error, 100)
    above = evidence(statistics, truth[99::100], "above", design=design)
    below = evidence(statistics, truth[99::100], "below", design=design)

    for found in (above, below):
        wrong = int((found >= math.log(20)).any(axis=1).sum())
        assert binomtest(wrong, runs, 0.05, alternative="greater").pvalue > 1e-4


def test_oversampling_the_hard_stratum_pays() -> None:
    """Half of the labels on a hard tenth breach earlier than uniform ones (method.md: 427 labels for 738).

    Overall 0.06 against 0.03: 0.33 on the hard tenth, 0.03 elsewhere.
    """
    rng = np.random.default_rng(26)
    kind, error = _stream(rng, 200, 4000, 0.33, 0.03, 0.5)
    weighted = evidence(_statistics(kind, error, 10), 0.03, "above", design=Weighted(("0.2", "1.8")))
    _, error = _stream(rng, 200, 4000, 0.33, 0.03, 0.1)
    plain = evidence(_statistics(np.zeros_like(error), error, 10)[..., [0, 2]], 0.03, "above")
    labels = [10 * (1 + (found >= math.log(1000)).argmax(axis=1)) for found in (weighted, plain)]

    assert all((found[:, -1] >= math.log(1000)).all() for found in (weighted, plain))
    assert np.mean(labels[0]) < 0.7 * np.mean(labels[1])
