"""The brute force itself, held against figures that others computed."""

from __future__ import annotations

import math

import numpy as np
import pytest
from real_input import flights, oracle
from scipy.special import bdtrc


@pytest.fixture(scope="module")
def later():
    """All flights that departed; the model has not seen them yet."""
    return flights.load()


def test_the_data_are_the_published_ones(later):
    """327,346 flights have both delays, 63,416 of them to fit on (check_values section 8, run with the same package)."""
    known = later[later["known"]]

    assert len(known) == 327_346
    assert known["training"].sum() == 63_416


@pytest.mark.parametrize(
    ("errors", "labels", "rate"), [(0, 20, 0.1), (3, 100, 0.05), (144, 701, 0.12), (689, 2391, 0.22)]
)
def test_the_exact_tail_is_the_binomial_one(errors, labels, rate):
    """The tail summed term by term equals scipy's incomplete beta function."""
    expected = 1.0 if errors == 0 else bdtrc(errors - 1, labels, rate)

    assert math.isclose(math.exp(oracle.log_tail(errors, labels, rate)), expected, rel_tol=1e-9)


def test_shares_never_exceed_the_risk():
    """The shares of all windows, also beyond the service life, add up to at most 1 and come close to it."""
    shares = math.fsum(oracle._share(j, (0.20, 0.75, 0.05), 363) for j in range(200_000))

    assert 0.9999 < shares <= 1


def test_one_window_by_hand():
    """One day with 10 errors in 100 labels at 0.03: the release window alone, written out with plain math (computed)."""
    sizes = [0.001 * 3000 ** (i / 63) for i in range(64)]
    weights = [math.sqrt(size) for size in sizes]
    wealth = sum(
        w / sum(weights) * math.exp(size * 10 - 100 * math.log(0.97 + 0.03 * math.exp(size)))
        for size, w in zip(sizes, weights, strict=True)
    )
    counts = oracle.Daily(np.array([100]), np.array([10]), 0)

    assert math.isclose(oracle.total(counts, 0, 0.03, 363), math.log(0.2 * wealth + 0.8), rel_tol=1e-12)


def test_late_labels_and_lower_revisions_are_left_out():
    """A label known at or after its day's seal never counts, a later revision replaces an earlier one if it came in time."""
    rows = [
        oracle.Row("a", 0, 100, 200, "x", "x"),
        oracle.Row("a", 1, 100, 300, "x", "y"),
        oracle.Row("b", 0, 100, 2 * oracle.DAY, "x", "y"),
        oracle.Row("c", 0, 100, 200, "x", "x"),
        oracle.Row("c", 1, 100, 3 * oracle.DAY, "x", "y"),
        oracle.Row("d", 0, 100, None, "x", None),
        oracle.Row("e", 0, 2 * oracle.DAY, 2 * oracle.DAY, "x", "y"),
    ]
    counts = oracle.daily(rows, released=0, lag=oracle.DAY, days=2)

    assert counts.labels.tolist() == [2, 0]
    assert counts.errors.tolist() == [1, 0]
    assert counts.late == 1
