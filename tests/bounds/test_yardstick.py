"""An independent yardstick: bounds of the research library confseq 0.0.11 (Howard, Waudby-Smith and others).

Its beta-binomial mixture must be told beforehand at which sample size it shall be tightest (`t_opt`, `v_opt`); the fixed
mixture here is told nothing. Stored values for every run; `--long` computes them afresh with the library itself.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from bounds import published
from peers import confseq
from scipy.optimize import brentq

import watcher
from watcher.bounds.evidence import evidence


def boundary(variance, alpha, g, h):
    """The excess over n*p at which evidence above reaches log(1/alpha): increments g, h have p = g/(g + h)."""
    n, p = variance / (g * h), g / (g + h)
    return brentq(lambda k: float(evidence(np.array([n, k]), p, "above")) - math.log(1 / alpha), n * p, n) - n * p


@pytest.mark.parametrize("case", published.CONFSEQ_BERNOULLI)
def test_limits_against_the_bernoulli_interval(case):
    """At its own best size the library's interval is narrower by at most a fifth; far from it, ours is narrower."""
    errors, labels, alpha, best, lower, upper = case
    found = watcher.confidence_bounds(labels, errors, alpha)

    ratio = (found.upper - found.lower) / (upper - lower)

    if best == labels:
        assert 0.95 < ratio < 1.27
    else:
        assert ratio < 1.0
    assert max(found.lower, lower) < errors / labels + 1e-12 < min(found.upper, upper)


@pytest.mark.parametrize("case", published.CONFSEQ_BETA_BINOMIAL)
def test_boundary_against_the_beta_binomial_mixture(case):
    """The count at which evidence suffices lies between 1.00 and 1.20 of the mixture bound tuned to about that size."""
    variance, alpha, _, g, h, one_sided, value = case

    ratio = boundary(variance, alpha if one_sided else alpha / 2, g, h) / value

    assert 1.0 < ratio < 1.20


@pytest.mark.long
def test_the_stored_values_are_the_library_s():
    """The library, built afresh, gives the stored values."""
    code = (
        "import confseq.boundaries as b\n"
        "answer = [[list(b.bernoulli_confidence_interval(*c[:4])) for c in argument[0]],\n"
        "          [b.beta_binomial_mixture_bound(*c[:5], alpha_opt=c[1], is_one_sided=c[5]) for c in argument[1]]]"
    )
    intervals, bounds = confseq.ask(code, [published.CONFSEQ_BERNOULLI, published.CONFSEQ_BETA_BINOMIAL])

    assert np.array(intervals) == pytest.approx(np.array([c[4:] for c in published.CONFSEQ_BERNOULLI]), abs=1e-7)
    assert bounds == pytest.approx([c[6] for c in published.CONFSEQ_BETA_BINOMIAL], rel=1e-6)


@pytest.mark.long
def test_limits_against_the_library_over_many_pairs():
    """200 pairs at risk 0.001, the library tuned to each pair's own size: our width is 0.95 to 1.30 of its width."""
    rng = np.random.default_rng(51)
    n = np.exp(rng.uniform(np.log(200), np.log(20_000), 200)).astype(int)
    k = rng.binomial(n, rng.uniform(0.01, 0.3, 200))
    code = (
        "import confseq.boundaries as b\n"
        "answer = [list(b.bernoulli_confidence_interval(k, n, 0.001, n, 0.001)) for n, k in argument]"
    )
    theirs = np.array(confseq.ask(code, np.stack([n, k], axis=-1).tolist()))
    ours = watcher.confidence_bounds(n, k, 0.001)

    ratio = (ours.upper - ours.lower) / (theirs[:, 1] - theirs[:, 0])

    assert ratio.min() > 0.95
    assert ratio.max() < 1.30
