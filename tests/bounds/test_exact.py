"""The exact binomial interval against published numbers."""

from __future__ import annotations

from fractions import Fraction
from math import comb

import numpy as np
import pytest
from bounds import published
from scipy.special import betainc, betaincc, gammaincinv

import watcher
from watcher.bounds.exact import exact_upper


@pytest.mark.parametrize(("n", "k", "lower", "upper"), published.NEWCOMBE_1998)
def test_newcombe_1998(n, k, lower, upper):
    """Newcombe 1998, Table I, Clopper-Pearson 95%, printed to four decimals."""
    found = watcher.exact_bounds(n, k, 0.05)

    assert (lower, upper) == (round(float(found.lower), 4), round(float(found.upper), 4))


@pytest.mark.parametrize(("n", "k", "risk", "lower", "upper"), [published.NIST_7_2_4_1, published.CONOVER_1971])
def test_handbook_and_r_help(n, k, risk, lower, upper):
    """NIST e-Handbook 7.2.4.1 (recomputed last digit) and R's binom.test example."""
    found = watcher.exact_bounds(n, k, risk)

    assert (lower, upper) == (pytest.approx(float(found.lower), abs=6e-8), pytest.approx(float(found.upper), abs=6e-8))


def test_rule_of_three():
    """Without errors the one-sided 95% limit is 1 - 0.05^(1/n), near 3/n (Hanley, Lippman-Hand 1983)."""
    n = np.array(list(published.RULE_OF_THREE))
    found = exact_upper(n, 0, 0.05)

    assert list(published.RULE_OF_THREE.values()) == pytest.approx(found, abs=6e-6)
    assert 1 - 0.05 ** (1 / n) == pytest.approx(found, rel=1e-12)
    assert (found < 3 / n).all()


@pytest.mark.parametrize(("rate", "confidence", "sizes"), published.LABELS_FOR_ERRORS)
def test_labels_that_bear_out_a_rate(rate, confidence, sizes):
    """The smallest n whose upper limit is at most the rate (Wilks 1941 and the zero-failure tables)."""
    for errors, size in sizes.items():
        n = np.arange(errors + 1, size + 50)
        limits = exact_upper(n, errors, 1 - confidence)

        assert size == n[np.argmax(limits <= rate)]


def test_poisson_reliability_factors():
    """n times the 95% limit tends to the AICPA factors as n grows."""
    for errors, factor in published.POISSON_RELIABILITY.items():
        assert factor == pytest.approx(1e7 * float(exact_upper(10**7, errors, 0.05)), abs=1e-4)


def test_binomial_tail_inversion():
    """Langford 2005: the test-set bound at risk 0.05."""
    for (n, k), upper in published.LANGFORD_2005.items():
        assert upper == pytest.approx(float(exact_upper(n, k, 0.05)), abs=1e-9)


def test_limits_are_rounded_outward():
    """In exact rational arithmetic the tail beyond each limit is at most risk/2."""
    for n, k, risk in [(20, 3, 0.05), (50, 1, 0.001), (33, 32, 0.01), (100, 50, 1e-6), (40, 0, 0.2)]:
        found = watcher.exact_bounds(n, k, risk)
        low, high = Fraction(float(found.lower)), Fraction(float(found.upper))
        at_least = sum(comb(n, i) * low**i * (1 - low) ** (n - i) for i in range(k, n + 1))
        at_most = sum(comb(n, i) * high**i * (1 - high) ** (n - i) for i in range(k + 1))
        half = Fraction(risk) / 2

        assert k == 0 or half * (1 - Fraction(1, 10**9)) < at_least <= half * (1 + Fraction(1, 10**13))
        assert half * (1 - Fraction(1, 10**9)) < at_most <= half * (1 + Fraction(1, 10**13))


def test_edges():
    """No labels: [0, 1]; no errors: lower 0; all errors: upper 1; 1e9 labels and a risk of 1e-12 work."""
    found = watcher.exact_bounds([0, 7, 7, 10**9], [0, 0, 7, 10**3], [0.05, 0.05, 0.05, 1e-12])

    assert found.lower[:2].tolist() == [0.0, 0.0]
    assert found.upper[[0, 2]].tolist() == [1.0, 1.0]
    # With 1e9 labels the counts are Poisson; 7.1 standard deviations of 3.2e-8 on each side.
    assert (gammaincinv(1000, 5e-13) / 1e9, gammaincinv(1001, 1 - 5e-13) / 1e9) == pytest.approx(
        (found.lower[3], found.upper[3]), rel=1e-4
    )


def test_the_library_s_inverse_is_checked():
    """Where scipy's inverse is off the limit still has its tail: 1,000 errors in 1e9 labels, and sizes around it."""
    for n in (10**7, 10**8, 10**9):
        for k in (3, 100, 1000, 10**5, n // 2, n - 1000):
            for risk in (1e-12, 0.05):
                found = watcher.exact_bounds(n, k, risk)
                tails = betainc(k, n - k + 1, found.lower), betaincc(k + 1, n - k, found.upper)
                assert (np.array(tails) <= risk / 2).all()
                assert (np.array(tails) > risk / 2 * (1 - 1e-5)).all()
