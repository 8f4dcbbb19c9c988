"""Exact operating characteristics of one window: false breaches within the risk, delays close to Wald's limit."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.special import rel_entr

import watcher
from watcher.bounds.evidence import evidence
from watcher.bounds.exact import breaking_errors

TOLERANCES, RISKS, RISES = (0.005, 0.03, 0.12), (0.001, 0.01, 0.05), (1.5, 2, 3, 5)


def wald(tolerance, risk, rate):
    """log(1/risk)/KL: no test of that risk has a smaller mean sample number (Wald 1945)."""
    return math.log(1 / risk) / float(rel_entr(rate, tolerance) + rel_entr(1 - rate, 1 - tolerance))


@pytest.mark.parametrize(("tolerance", "risk"), list(itertools.product(TOLERANCES, RISKS)))
def test_false_breaches_stay_within_the_risk(tolerance, risk):
    """The exact chance of a false breach, a look after each of 20,000 labels, is at most the risk and not far below."""
    found = watcher.operating_characteristics(tolerance, risk, tolerance, 20_000)

    assert 0.4 * risk < found.alarm_probability[-1] <= risk
    assert (np.diff(found.alarm_probability) >= 0).all()


@pytest.mark.parametrize(("tolerance", "risk"), list(itertools.product(TOLERANCES, RISKS[:2])))
def test_mean_labels_against_wald_s_limit(tolerance, risk):
    """1.5x to 5x the tolerance: at most 1.30 of the limit at risk 0.001, 1.38 at 0.01, 1.45 where it is 7 labels."""
    for rise in RISES:
        limit = wald(tolerance, risk, rise * tolerance)
        allowed = 1.30 if risk == 0.001 else 1.45 if (tolerance, rise) == (0.12, 5) else 1.38
        found = watcher.operating_characteristics(tolerance, risk, rise * tolerance, math.ceil(12 * limit))

        assert found.alarm_probability[-1] > 1 - 1e-7
        assert limit < found.mean_labels <= allowed * limit


def test_figures_of_the_method():
    """method.md section 1, tolerance 0.03, risk 0.001: 1.26x 1.24x 1.24x 1.26x; false breach 5.3e-4 in 16,000."""
    ratios = []
    for rise in RISES:
        limit = wald(0.03, 0.001, rise * 0.03)
        ratios.append(watcher.operating_characteristics(0.03, 0.001, rise * 0.03, 12_000).mean_labels / limit)

    assert pytest.approx(ratios, abs=0.006) == [1.26, 1.24, 1.24, 1.26]
    false = watcher.operating_characteristics(0.03, 0.001, 0.03, 16_000).alarm_probability[-1]
    assert pytest.approx(false, abs=0.06e-4) == 5.3e-4


def test_the_boundary_is_the_least_number_that_breaks():
    """At the boundary the evidence reaches the threshold, one error less does not; n + 1 where none is enough."""
    n = np.r_[np.arange(1, 300), 1000, 10**4, 10**5, 10**6, 10**9]
    for tolerance, threshold in [(0.03, 6.9), (1e-6, 27.6), (0.9, 3.0)]:
        k = breaking_errors(n, tolerance, threshold)
        reached = k <= n

        assert (evidence(np.stack([n, k], -1)[reached], tolerance, "above") >= threshold).all()
        assert (evidence(np.stack([n, k - 1], -1), tolerance, "above") < threshold).all()
        assert (k[~reached] == n[~reached] + 1).all()


def test_first_crossing_by_brute_force():
    """All 2^12 error patterns of 12 labels give the same chances."""
    found = watcher.operating_characteristics(0.1, 0.05, 0.3, 12)
    needed = breaking_errors(np.arange(1, 13), 0.1, math.log(20))
    chance = np.zeros(13)
    for pattern in itertools.product((0, 1), repeat=12):
        crossed = np.flatnonzero(np.cumsum(pattern) >= needed)
        if crossed.size:
            chance[crossed[0] + 1 :] += 0.3 ** sum(pattern) * 0.7 ** (12 - sum(pattern))

    assert chance == pytest.approx(found.alarm_probability, abs=1e-12)
    assert found.mean_labels == pytest.approx((1 - chance[:-1]).sum(), abs=1e-10)


def test_a_simulation_agrees():
    """4,000 streams at twice the tolerance: the mean and the quantiles lie within 5 standard errors."""
    found = watcher.operating_characteristics(0.03, 0.001, 0.06, 5000)
    rng = np.random.default_rng(11)
    needed = breaking_errors(np.arange(1, 5001), 0.03, math.log(1000))
    times = np.concatenate(
        [1 + np.argmax(np.cumsum(rng.random((500, 5000)) < 0.06, axis=1) >= needed, axis=1) for _ in range(8)]
    )

    assert found.mean_labels == pytest.approx(times.mean(), abs=5 * times.std() / math.sqrt(4000))
    for q in (0.1, 0.5, 0.9):
        assert abs((times <= found.labels_quantile(q)).mean() - q) < 5 * math.sqrt(q * (1 - q) / 4000) + 0.002


def test_quantiles_and_horizon():
    """A quantile is the first label by which the chance is reached; None beyond the horizon."""
    found = watcher.operating_characteristics(0.03, 0.001, 0.06, 1000)
    q = found.labels_quantile(0.5)

    assert found.median_labels == q
    assert found.alarm_probability[q] >= 0.5 > found.alarm_probability[q - 1]
    assert found.labels_quantile(0.99) is None
    assert found.alarm_probability.shape == (1001,)
    assert found.alarm_probability[0] == 0.0
    assert watcher.operating_characteristics(0.03, 0.001, 0.06, 1).mean_labels == 1.0


def test_nonsense_is_refused():
    """Every argument is named in the message."""
    good = {"tolerance": 0.03, "risk": 0.001, "rate": 0.06, "horizon": 10}
    for name, value in [("tolerance", 0), ("risk", 1.0), ("rate", math.nan), ("horizon", 0), ("horizon", 2.5)]:
        with pytest.raises(ValueError, match=f"{name} = "):
            watcher.operating_characteristics(**(good | {name: value}))
    with pytest.raises(ValueError, match=r"q = 1\.0"):
        watcher.operating_characteristics(**good).labels_quantile(1.0)
