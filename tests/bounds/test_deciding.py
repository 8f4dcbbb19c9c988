"""Labels until the window since the release is decided, against an exact pass over every label."""

from __future__ import annotations

import math

import numpy as np
import pytest

from watcher.bounds.deciding import labels_to_decide, supporting_errors
from watcher.bounds.evidence import evidence
from watcher.bounds.exact import breaking_errors


def exactly(labels, errors, tolerance, risk, rate, limit=40_000):
    """Median and 90% quantile by a forward pass with a look after every label."""
    n = np.arange(labels + 1, labels + limit + 1)
    broken = breaking_errors(n, tolerance, -math.log(risk * 0.20)) - errors
    supported = supporting_errors(n, tolerance, -math.log(risk * 0.50)) - errors
    alive, first, decided, found = np.ones(1), 0, 0.0, []
    for i in range(limit):
        alive = np.convolve(alive, [1 - rate, rate])
        k = first + np.arange(len(alive))
        out = (k <= supported[i]) | (k >= broken[i])
        decided += alive[out].sum()
        alive[out] = 0.0
        found += [i + 1 for q in (0.5, 0.9)[len(found) :] if decided >= q]
        if len(found) == 2:
            break
        if i % 64 == 0:
            likely = np.flatnonzero(alive > 1e-30)
            first, alive = first + likely[0], alive[likely[0] : likely[-1] + 1]
    return tuple(found)


def test_figures_of_the_method():
    """method.md section 4: from nothing, p 0.02, tolerance 0.03, risk 0.001: median 4473, 90% 7640."""
    assert exactly(0, 0, 0.03, 0.001, 0.02) == (4473, 7640)


@pytest.mark.parametrize(
    ("labels", "errors", "tolerance", "risk", "rate"),
    [
        (0, 0, 0.03, 0.001, 0.02),
        (0, 0, 0.03, 0.001, 0.01),
        (0, 0, 0.03, 0.001, 0.05),
        (0, 0, 0.03, 0.001, 0.1),
        (0, 0, 0.03, 0.001, 0.5),
        (1000, 20, 0.03, 0.001, None),
        (500, 5, 0.03, 0.001, None),
        (3000, 60, 0.03, 0.001, None),
        (3000, 90, 0.03, 0.001, 0.02),
        (2000, 50, 0.03, 0.001, None),
        (100, 10, 0.12, 0.01, None),
    ],
)
def test_within_three_percent_of_the_exact_pass(labels, errors, tolerance, risk, rate):
    """Blocks of labels and a lattice of errors move the median and the 90% figure by at most 3% (or 5 labels)."""
    expected = exactly(labels, errors, tolerance, risk, errors / labels if rate is None else rate)

    found = labels_to_decide(labels, errors, tolerance, risk, rate)

    assert found == pytest.approx(expected, rel=0.03, abs=5)


def test_the_supporting_boundary_is_the_most_that_supports():
    """At the boundary the evidence below reaches the threshold, one error more does not; -1 where none is enough."""
    n = np.r_[np.arange(1, 300), 1000, 10**4, 10**5, 10**6, 10**9]
    for tolerance, threshold in [(0.03, 7.6), (1e-6, 27.6), (0.9, 3.0)]:
        k = supporting_errors(n, tolerance, threshold)
        some = k >= 0

        assert (evidence(np.stack([n, k], -1)[some], tolerance, "below") >= threshold).all()
        assert (evidence(np.stack([n, k + 1], -1), tolerance, "below") < threshold).all()


def test_an_estimate_of_zero_is_taken_at_its_word():
    """Not one further error: both figures are the number of faultless labels that support, exactly."""
    further, same = labels_to_decide(200, 0, 0.03, 0.001)
    needed = -math.log(0.001 * 0.50)

    assert further == same
    assert evidence([200 + further, 0], 0.03, "below") >= needed > evidence([199 + further, 0], 0.03, "below")


def test_decided_already():
    """A window that is broken or supported needs no further label."""
    assert labels_to_decide(1000, 100, 0.03, 0.001) == (0, 0)
    assert labels_to_decide(100_000, 2000, 0.03, 0.001) == (0, 0)


def test_more_than_the_limit():
    """At the tolerance itself nothing is decided within 1,000,000 labels; a small limit cuts the 90% figure first."""
    assert labels_to_decide(10_000, 300, 0.03, 0.001) == (None, None)
    median, p90 = labels_to_decide(0, 0, 0.03, 0.001, 0.02, limit=6000)
    assert median == pytest.approx(4473, rel=0.03)
    assert p90 is None


def test_no_estimate():
    """Without labels and without a rate there is nothing to plan with."""
    assert labels_to_decide(0, 0, 0.03, 0.001) == (None, None)


@pytest.mark.parametrize("rate", [-0.1, 1.1, math.nan])
def test_a_rate_outside_zero_to_one_is_refused(rate):
    """The message names the argument."""
    with pytest.raises(ValueError, match="rate = "):
        labels_to_decide(10, 1, 0.03, 0.001, rate)
