"""Selection with known chances: the formula, a textbook example, missing labels, validity and what breaks it."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binomtest

from watcher.bounds.evidence import evidence, lower_limit, upper_limit
from watcher.bounds.horvitz import HorvitzThompson
from watcher.bounds.mixture import LIFE, RESTART

DESIGN = HorvitzThompson(("0.05", "0.5"))


@pytest.mark.parametrize("side", ["above", "below"])
def test_evidence_is_the_formula(side: str) -> None:
    """log sum_g w_g exp(sum_q k_q log(1 + c/q) - N log(1 + c m)); missing labels count as errors below only."""
    n, errors, missing, m = 900, (2, 5), (3, 4), 0.04
    parts = []
    for shift, weight in zip(LIFE.shifts, LIFE.weights, strict=True):
        c = math.expm1(shift if side == "above" else -shift) * 0.05
        counted = errors if side == "above" else tuple(k + u for k, u in zip(errors, missing, strict=True))
        gain = sum(k * math.log1p(c / q) for k, q in zip(counted, (0.05, 0.5), strict=True))
        parts.append(weight * math.exp(gain - n * math.log1p(c * m)))

    found = evidence(np.array([n, *errors, *missing]), m, side, design=DESIGN)

    assert float(found) == pytest.approx(math.log(math.fsum(parts)), rel=1e-9)


@pytest.mark.parametrize("side", ["above", "below"])
def test_labelling_everything_is_the_plain_rule(side: str) -> None:
    """q = 1 for all and nothing missing gives the evidence of uniform samples."""
    counts = np.array([[400, 12], [10, 0], [0, 0]])
    design = HorvitzThompson(("1",))
    with_missing = np.concatenate([counts, np.zeros((3, 1), dtype=int)], axis=1)

    assert evidence(with_missing, 0.03, side, design=design) == pytest.approx(evidence(counts, 0.03, side), abs=1e-12)


def test_totals_of_a_textbook() -> None:
    """y = 3, 10, 7 of 10 units give 64.03 (Horvitz-Thompson) and 56.667 (Hansen-Hurwitz; the copy read prints 56.57).

    Thompson, Sampling, chapter 6, examples 1 and 2 (read second-hand, recomputed): inclusion chances .1694 .4880 .2710 to four places, and
    three draws with chances .06 .20 .10.
    """
    totals = []
    for levels in (("0.169416", "0.488", "0.271"), ("0.18", "0.60", "0.30")):
        statistic = np.array([1000, 3, 10, 7, 0, 0, 0])
        labels, errors = HorvitzThompson(levels).equivalent(statistic, "above")
        totals.append(float(errors / labels) * 1000)

    assert totals == pytest.approx([64.02995, 56.6666667], abs=1e-5)


@pytest.mark.parametrize("levels", [(), ("0",), ("1.2",), ("0.1", "0.10"), ("a",)])
def test_impossible_levels_are_refused(levels: tuple[str, ...]) -> None:
    """Levels must be distinct decimals in (0, 1]; the message names labelling_probabilities."""
    with pytest.raises(ValueError, match="labelling_probabilities"):
        HorvitzThompson(levels)


@pytest.mark.parametrize("side", ["above", "below"])
def test_ceiling_is_never_below_the_evidence(side: str) -> None:
    """Random statistics: the ceiling bounds the evidence of both mixtures."""
    rng = np.random.default_rng(31)
    counts = rng.binomial(30, [0.1, 0.3, 0.05, 0.1], (300, 4)) * rng.integers(0, 2, (300, 4))
    statistics = np.concatenate([counts.sum(axis=1, keepdims=True) + rng.integers(0, 3000, (300, 1)), counts], axis=1)
    for rate in (0.001, 0.03, 0.5, 0.99):
        for mixture in (LIFE, RESTART):
            found = evidence(statistics, rate, side, design=DESIGN, mixture=mixture)
            assert (found <= DESIGN.ceiling(statistics, rate, side)).all()


def test_missing_labels_move_each_limit_the_safe_way() -> None:
    """Labels that never come leave the lower limit where it is and raise the upper one."""
    complete, missing = np.array([5000, 5, 40, 0, 0]), np.array([5000, 5, 40, 10, 30])
    lower = [float(lower_limit(row, 3.0, design=DESIGN)) for row in (complete, missing)]
    upper = [float(upper_limit(row, 3.0, design=DESIGN)) for row in (complete, missing)]

    assert lower[0] == lower[1] > 0.0
    assert upper[0] < upper[1] <= 1.0


class Missing:
    """Predictions with known selection; errors are hard cases selected more often, and labels go missing."""

    def __init__(self, seed: int, rate: float, error_lost: float, correct_lost: float) -> None:
        rng = np.random.default_rng(seed)
        self.runs, self.predictions, self.every = 300, 24_000, 300
        statistics = np.zeros((self.runs, self.predictions // self.every, 5), dtype=np.int64)
        # Suspicious predictions (a tenth, q = .5) hold half of the errors; the others have q = .05.
        chances = [0.9 * (1 - 0.5 * rate / 0.9), 0.5 * rate, 0.1 * (1 - 5 * rate), 0.5 * rate]
        kinds = rng.multinomial(self.every, np.array(chances) / sum(chances), statistics.shape[:2])
        statistics[..., 0] = self.every
        for level, q, (correct, wrong) in ((0, 0.05, (0, 1)), (1, 0.5, (2, 3))):
            picked = rng.binomial(kinds[..., [correct, wrong]], q)
            lost = rng.binomial(picked, [correct_lost, error_lost])
            statistics[..., 1 + level] = picked[..., 1] - lost[..., 1]
            statistics[..., 3 + level] = lost.sum(axis=-1)
        self.labelled = statistics[..., 1:3].sum(axis=-1).cumsum(axis=1)
        self.statistics = statistics.cumsum(axis=1)
        self.counted = (kinds[..., :2].sum(axis=-1), kinds[..., 2:].sum(axis=-1))


@pytest.mark.parametrize(
    ("side", "error_lost", "correct_lost"),
    [("above", 0.0, 0.4), ("above", 0.3, 0.3), ("below", 0.4, 0.0), ("below", 0.1, 0.1)],
)
def test_selected_samples_whose_labels_never_come(side: str, error_lost: float, correct_lost: float) -> None:
    """At the tolerance neither verdict is false in more than 5% of runs at risk 5%, whatever goes missing; sig. 1e-4."""
    world = Missing(32, 0.05, error_lost, correct_lost)
    found = evidence(world.statistics, 0.05, side, design=DESIGN)
    wrong = int((found >= math.log(20)).any(axis=1).sum())

    assert binomtest(wrong, world.runs, 0.05, alternative="greater").pvalue > 1e-4


def test_dropping_missing_labels_breaks() -> None:
    """Leaving missing labels out, as if they had never been selected, supports a broken promise almost surely."""
    world = Missing(33, 0.06, 0.5, 0.0)
    dropped = world.statistics.copy()
    dropped[..., 3:] = 0
    naive = evidence(dropped, 0.05, "below", design=DESIGN)
    ours = evidence(world.statistics, 0.05, "below", design=DESIGN)

    assert (naive >= math.log(20)).any(axis=1).mean() > 0.9
    assert (ours >= math.log(20)).any(axis=1).mean() <= 0.05


def test_ignoring_the_selection_breaks() -> None:
    """Counting the labelled as if they were drawn uniformly raises a false breach in every run."""
    world = Missing(34, 0.03, 0.0, 0.0)
    rng = np.random.default_rng(35)
    labels = (rng.binomial(world.counted[0], 0.05) + rng.binomial(world.counted[1], 0.5)).cumsum(axis=1)
    naive = evidence(np.stack([np.maximum(labels, world.labelled), world.labelled], axis=-1), 0.05, "above")

    assert (naive >= math.log(20)).any(axis=1).mean() == 1.0


def test_selection_tells_a_breach() -> None:
    """Power: at twice the tolerance every run breaches, at half of it every run is supported (labels all come)."""
    broken, sound = Missing(36, 0.10, 0.0, 0.0), Missing(37, 0.025, 0.0, 0.0)

    assert (evidence(broken.statistics[:, -1], 0.05, "above", design=DESIGN) >= math.log(1000)).all()
    assert (evidence(sound.statistics[:, -1], 0.05, "below", design=DESIGN) >= math.log(20)).mean() > 0.95
