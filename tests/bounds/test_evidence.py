"""The kernel: its formula, its edges, and that no number depends on the rows beside it."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from watcher.bounds.designs import LOSS, UNIFORM
from watcher.bounds.evidence import evidence
from watcher.bounds.mixture import LIFE, RESTART

SIDES = ("above", "below")
counts = st.integers(0, 20_000).flatmap(lambda n: st.tuples(st.just(n), st.integers(0, n)))
rates = st.floats(1e-6, 1 - 1e-6)


def some_rows(number, seed=1):
    rng = np.random.default_rng(seed)
    n = rng.integers(0, 100_001, number)
    return np.stack([n, rng.binomial(n, 0.03)], axis=-1)


def by_hand(n, k, m, side, mixture):
    """The formula of method.md section 1, term by term with exact sums of floats."""
    sign = 1.0 if side == "above" else -1.0
    exponents = [
        math.log(w) + sign * lam * k - n * math.log1p(m * math.expm1(sign * lam))
        for lam, w in zip(mixture.shifts.tolist(), mixture.weights.tolist(), strict=True)
    ]
    top = max(exponents)
    return top + math.log(math.fsum(math.exp(x - top) for x in exponents))


def test_mixtures_are_as_the_method_states():
    """LIFE has 64 geometric shifts weighted by their square root; RESTART adds 28 even ones with 0.8 of the weight."""
    assert (LIFE.shifts.size, RESTART.shifts.size) == (64, 92)
    assert pytest.approx([LIFE.shifts[0], LIFE.shifts[-1]]) == [0.001, 3.0]
    assert np.ptp(np.diff(np.log(LIFE.shifts))) < 1e-12
    assert np.ptp(LIFE.weights / np.sqrt(LIFE.shifts)) < 1e-12
    assert pytest.approx([LIFE.weights.sum(), RESTART.weights.sum()]) == [1.0, 1.0]
    assert pytest.approx(RESTART.weights[64:].sum()) == 0.8
    assert np.linspace(0.25, 1.6, 28) == pytest.approx(RESTART.shifts[64:])


@settings(max_examples=200, deadline=None)
@given(counts, rates, st.sampled_from(SIDES), st.sampled_from([LIFE, RESTART]))
def test_evidence_is_the_formula(pair, rate, side, mixture):
    """The kernel equals the formula written out term by term, to rounding."""
    n, k = pair

    expected = by_hand(n, k, rate, side, mixture)

    assert expected == pytest.approx(float(evidence([n, k], rate, side, mixture=mixture)), rel=1e-11, abs=1e-9)


def test_mean_of_exponentiated_evidence_is_one():
    """At the true rate exp(evidence) averages exactly 1 over the binomial distribution: it is a fair bet."""
    n = 60
    for p in (Fraction(1, 100), Fraction(3, 100), Fraction(1, 2), Fraction(9, 10)):
        chances = [float(math.comb(n, k) * p**k * (1 - p) ** (n - k)) for k in range(n + 1)]
        for side in SIDES:
            wealth = np.exp(evidence([(n, k) for k in range(n + 1)], float(p), side))

            assert pytest.approx(math.fsum((wealth * chances).tolist()), rel=1e-12) == 1.0


def test_mean_is_at_most_one_while_the_rate_drifts():
    """With unequal p_i, exp(evidence) at their mean averages at most 1 (Jensen), and less the more they differ."""
    means = []
    for spread in (0.0, 0.1, 0.19):
        p = np.r_[np.full(20, 0.2 - spread), np.full(20, 0.2 + spread)]
        chances = np.ones(1)
        for rate in p:
            chances = np.convolve(chances, [1 - rate, rate])
        means.append(float(chances @ np.exp(evidence([(40, k) for k in range(41)], 0.2, "above"))))

    assert pytest.approx(means[0], rel=1e-12) == 1.0
    assert means[0] > means[1] > means[2]


def test_a_window_without_labels_has_exactly_no_evidence():
    """n = 0 gives 0.0, not a rounding error."""
    for side in SIDES:
        assert evidence([[0, 0], [0, 0]], [0.03, 0.5], side).tolist() == [0.0, 0.0]


@pytest.mark.parametrize("side", SIDES)
@pytest.mark.parametrize("mixture", [LIFE, RESTART])
@pytest.mark.parametrize("several_rates", [False, True])
def test_one_batch_equals_many_batches_of_one(side, mixture, several_rates):
    """1,000 rows at once and one by one, scalars, reversed, sliced or in other memory order agree bit for bit."""
    rows = some_rows(1000)
    rate = np.random.default_rng(2).uniform(0.001, 0.2, 1000) if several_rates else np.full(1000, 0.03)
    given_rate = rate if several_rates else 0.03

    def run(part, m):
        return evidence(part, m, side, mixture=mixture)

    whole = run(rows, given_rate)

    assert whole.tolist() == [float(run(row, m)) for row, m in zip(rows.tolist(), rate.tolist(), strict=True)]
    assert whole.tolist() == run(rows, rate).tolist()
    assert whole.tolist() == run(np.asfortranarray(rows), given_rate).tolist()
    assert whole.tolist() == run(rows[::-1], given_rate[::-1] if several_rates else 0.03)[::-1].tolist()
    assert whole.tolist() == run(rows.reshape(10, 100, 2), rate.reshape(10, 100)).reshape(-1).tolist()
    assert whole.tolist() == run(np.repeat(rows, 3, axis=1)[:, 1:5:3], given_rate).tolist()
    for size in (2, 3, 7, 64, 333):
        assert whole[:size].tolist() == run(rows[:size], rate[:size]).tolist()
        assert whole[-size:].tolist() == run(rows[-size:], rate[-size:]).tolist()


def test_the_memory_order_of_a_design_changes_no_number():
    """A design that lays its coefficients out row by row gives the same bits."""

    class RowByRow(type(UNIFORM)):
        def coefficients(self, rate, side, shifts):
            return np.ascontiguousarray(super().coefficients(rate, side, shifts))

    rows, rate = some_rows(500), np.random.default_rng(3).uniform(0.001, 0.2, 500)

    assert evidence(rows, rate, "above").tolist() == evidence(rows, rate, "above", design=RowByRow()).tolist()


def test_evidence_adds_up_over_buckets_only_through_the_counts():
    """The order of labels within a window does not matter: only the summed statistic enters."""
    rows = some_rows(50)

    assert float(evidence(rows.sum(axis=0), 0.03, "above")) == float(evidence(rows[::-1].sum(axis=0), 0.03, "above"))


def test_evidence_is_monotone():
    """More errors: more evidence above, less below. A higher rate: less above, more below."""
    k = np.arange(301)
    rows = np.stack([np.full(301, 300), k], axis=-1)
    grid = np.linspace(1e-6, 1 - 1e-6, 500)

    assert (np.diff(evidence(rows, 0.03, "above")) > 0).all()
    assert (np.diff(evidence(rows, 0.03, "below")) < 0).all()
    assert (np.diff(evidence([300, 30], grid, "above")) < 0).all()
    assert (np.diff(evidence([300, 30], grid, "below")) > 0).all()


def test_counting_the_right_ones_mirrors_the_sides():
    """Evidence that the error lies above m is evidence that the accuracy lies below 1 - m."""
    rows = some_rows(200)
    mirrored = np.stack([rows[:, 0], rows[:, 0] - rows[:, 1]], axis=-1)

    expected = evidence(rows, 0.03, "above")

    assert expected == pytest.approx(evidence(mirrored, 0.97, "below"), rel=1e-9, abs=1e-7)


@pytest.mark.parametrize(
    ("n", "k", "rate"),
    [
        (10**9, 3 * 10**7, 0.03),
        (10**9, 0, 1e-6),
        (10**9, 10**9, 1e-6),
        (1, 1, 1e-6),
        (10**9, 1000, 1e-6),
        (5, 0, 0.999999),
    ],
)
def test_extremes_stay_finite(n, k, rate):
    """Up to 1e9 labels and down to a tolerance of 1e-6 the evidence is a finite number close to the formula."""
    for side in SIDES:
        found = float(evidence([n, k], rate, side))

        assert math.isfinite(found)
        assert by_hand(n, k, rate, side, LIFE) == pytest.approx(found, rel=1e-9, abs=1e-6)


def test_loss_of_zeros_and_ones_is_the_error():
    """A loss that is 0 or 1 gives the evidence of the error counts."""
    rows = some_rows(300)
    losses = np.stack([rows[:, 0], rows[:, 1] * 10**6, rows[:, 1] * 10**6], axis=-1)

    for side in SIDES:
        expected = evidence(rows, 0.03, side)

        assert expected == pytest.approx(evidence(losses, 0.03, side, design=LOSS), rel=1e-9, abs=1e-7)


def test_loss_is_rounded_against_the_claim():
    """Above uses the sum rounded down, below the one rounded up."""
    exact, rounded = (100, 5_000_000, 5_000_000), (100, 5_000_000, 5_000_060)

    assert float(evidence(exact, 0.02, "above", design=LOSS)) == float(evidence(rounded, 0.02, "above", design=LOSS))
    assert float(evidence(exact, 0.08, "below", design=LOSS)) > float(evidence(rounded, 0.08, "below", design=LOSS))


@settings(max_examples=300, deadline=None)
@given(counts, rates, st.sampled_from(SIDES), st.sampled_from([LIFE, RESTART]))
def test_no_evidence_exceeds_its_ceiling(pair, rate, side, mixture):
    """The cheap bound that lets windows be skipped is never below the computed evidence."""
    row = np.array([pair])

    assert UNIFORM.ceiling(row, rate, side)[0] >= evidence(row, rate, side, mixture=mixture)[0]


def test_a_statistic_of_the_wrong_length_is_refused():
    """The message says how many components the design has."""
    with pytest.raises(ValueError, match="must hold 2 components"):
        evidence([1, 2, 3], 0.03, "above")
