"""Wald's test, peeking and the product's rule side by side, by exact dynamic programmes."""

from __future__ import annotations

import math

import numpy as np
import pytest
from bounds.sequential import first_exit, kl, repeated_z, sprt, sprt_lines
from scipy.stats import binom

from watcher.bounds.exact import breaking_errors, exact_bounds, operating_characteristics
from watcher.bounds.planning import wald_limit

NEVER = -1


@pytest.mark.parametrize(
    ("plan", "expected"),
    [
        # NIST/SEMATECH e-Handbook 6.2.6 (read second-hand, recomputed).
        ((0.01, 0.10, 0.05, 0.10), (2.397895273, 0.9388616026, 1.205378646, 0.03974743221)),
        # Montgomery, Introduction to SQC, sequential sampling (from memory, recomputed; prints h1 1.22, h2 1.57, s .028).
        ((0.01, 0.06, 0.05, 0.10), (1.843584537, 1.221149209, 1.567799957, 0.02811103414)),
        # Wald 1947 / SRG 1945 (from memory, low confidence that it is the printed plan; recomputed).
        ((0.1, 0.3, 0.02, 0.03), (1.349926717, 2.582625521, 2.87538853, 0.1861689417)),
        # Computed.
        ((0.05, 0.10, 0.05, 0.05), (0.74721, 3.94055, 3.94055, 0.072358)),
    ],
)
def test_lines_of_walds_test(plan: tuple[float, ...], expected: tuple[float, ...]) -> None:
    """The helper's k, h1, h2, s are those printed or recomputed for known plans."""
    assert sprt_lines(*plan) == pytest.approx(expected, rel=1e-5)


def test_item_table_of_walds_test() -> None:
    """Accept and reject numbers of the e-Handbook plan change where its item table (section 6.2.6) says."""
    _, h1, h2, s = sprt_lines(0.01, 0.10, 0.05, 0.10)
    table = {
        2: (NEVER, 2),
        19: (NEVER, 2),
        20: (NEVER, 3),
        23: (NEVER, 3),
        24: (0, 3),
        45: (0, 3),
        46: (0, 4),
        48: (0, 4),
    }
    table |= {
        49: (1, 4),
        70: (1, 4),
        71: (1, 5),
        73: (1, 5),
        74: (2, 5),
        95: (2, 5),
        96: (2, 6),
        99: (2, 6),
        100: (3, 6),
    }

    found = {n: (max(math.floor(s * n - h1), NEVER), math.ceil(s * n + h2)) for n in table}

    assert found == table


@pytest.mark.parametrize(
    ("plan", "reject", "accept", "asn"),
    [
        # Computed by item-by-item enumeration (check values, section 2): P(reject | p0), P(accept | p1), ASN at p0 and p1.
        ((0.01, 0.10, 0.05, 0.10), 0.02205, 0.09958, (30.21273, 22.36915)),
        ((0.01, 0.06, 0.05, 0.10), 0.02858, 0.09892, (63.5835, 50.5081)),
        ((0.1, 0.3, 0.02, 0.03), 0.01369, 0.02742, (29.90181, 26.60221)),
        ((0.05, 0.10, 0.05, 0.05), 0.03947, 0.04914, (163.443, 140.081)),
    ],
)
def test_exact_risks_of_walds_test(
    plan: tuple[float, float, float, float], reject: float, accept: float, asn: tuple[float, float]
) -> None:
    """The dynamic programme gives the enumerated risks and sample numbers; a/(1-b) and a+b bound them (Wald 1947)."""
    p0, p1, alpha, beta = plan
    at_p0, at_p1 = sprt(*plan, p0, 3000), sprt(*plan, p1, 3000)

    assert (at_p0[0], at_p1[1]) == pytest.approx((reject, accept), abs=6e-6)
    assert (at_p0[2], at_p1[2]) == pytest.approx(asn, abs=6e-4)
    assert at_p0[0] <= alpha / (1 - beta)
    assert at_p1[1] <= beta / (1 - alpha)
    assert at_p0[0] + at_p1[1] <= alpha + beta
    # No sequential test of risk a' can have a smaller mean sample at p1 (Wald 1945).
    gain = (1 - at_p1[1]) * math.log((1 - at_p1[1]) / at_p0[0]) + at_p1[1] * math.log(at_p1[1] / (1 - at_p0[0]))
    assert at_p1[2] >= gain / kl(p1, p0) * (1 - 1e-6)


def test_walds_nominal_risk_is_no_guarantee() -> None:
    """Wald's test exceeds its nominal alpha where acceptance overshoots; the product's rule of that risk never does."""
    p0, p1, alpha, beta = 0.9, 0.99, 0.05, 0.4
    exact = sprt(p0, p1, alpha, beta, p0, 4000)[0]
    ours = operating_characteristics(p0, alpha, p0, 4000).alarm_probability[-1]

    assert alpha * 1.1 < exact <= alpha / (1 - beta)
    assert ours <= alpha


def test_anytime_likelihood_ratio() -> None:
    """Rejecting at a likelihood ratio of 20 at any time has the enumerated chance, below 1/20 (computed; Ville 1939)."""
    n = np.arange(1, 5001)
    k, c = math.log(0.10 * 0.95 / (0.05 * 0.90)), math.log(0.90 / 0.95)
    bar = np.ceil((math.log(20) - n * c) / k - 1e-12)
    at_null = first_exit(np.full(n.size, NEVER), bar, 0.05)[1].cumsum()
    at_rise = first_exit(np.full(n.size, NEVER), bar, 0.10)[1].cumsum()

    assert at_null[[99, 499, 999, 4999]] == pytest.approx([0.01664, 0.03817, 0.03928, 0.03934], abs=6e-6)
    assert at_rise[[99, 499, 999]] == pytest.approx([0.42284, 0.97045, 0.99863], abs=6e-6)


@pytest.mark.parametrize(
    ("rate", "expected"),
    [
        # Exact dynamic programme (check values, section 3): n = 100, 500, 1000, 2000.
        (0.05, (0.11392, 0.24556, 0.30100, 0.35498)),
        (0.10, (0.15843, 0.28614, 0.34137, 0.39387)),
        (0.50, (0.22731, 0.35602, 0.40783, 0.45646)),
    ],
)
def test_peeking_with_the_exact_interval(rate: float, expected: tuple[float, ...]) -> None:
    """The exact 95% interval, read after every label, excludes the truth as often as tabled; the product's at most 5%."""
    n = np.arange(1, 2001)
    lowest, highest = _acceptance(n, rate)
    left = sum(first_exit(lowest, highest, rate)).cumsum()
    above = operating_characteristics(rate, 0.025, rate, 2000).alarm_probability[-1]
    below = operating_characteristics(1 - rate, 0.025, 1 - rate, 2000).alarm_probability[-1]

    assert left[[99, 499, 999, 1999]] == pytest.approx(expected, abs=6e-6)
    assert above + below <= 0.05


def _acceptance(n: np.ndarray, rate: float) -> tuple[np.ndarray, np.ndarray]:
    """Counts at or below (above) which the product's exact 95% interval excludes the rate, by looking near the quantiles."""
    low, high = np.full(n.size, NEVER), n + 1
    for i, size in enumerate(n.tolist()):
        near = np.unique(np.clip(binom.ppf([0.025, 0.975], size, rate)[:, None] + np.arange(-2, 3), 0, size))
        bounds = exact_bounds(np.full(near.size, size), near, 0.05)
        low[i] = max(near[bounds.upper < rate], default=NEVER)
        high[i] = min(near[bounds.lower > rate], default=size + 1)
    return low, high


@pytest.mark.parametrize(
    ("looks", "published"),
    [(1, 0.05), (2, 0.083), (3, 0.107), (4, 0.126), (5, 0.142), (10, 0.193), (20, 0.248), (50, 0.320), (100, 0.374)],
)
def test_repeated_z_tests(looks: int, published: float) -> None:
    """Repeated 5% z tests reach the error chances of Armitage, McPherson, Rowe 1969, table 2 (from memory, recomputed)."""
    assert repeated_z(looks, lambda _: 1.959964) == pytest.approx(published, abs=6e-4)


@pytest.mark.parametrize(("looks", "constant"), [(2, 2.178), (3, 2.289), (4, 2.361), (5, 2.413)])
def test_pocock_constants(looks: int, constant: float) -> None:
    """Pocock's constants (1977, from memory, recomputed) bring repeated z tests back to 5%."""
    assert repeated_z(looks, lambda _: constant) == pytest.approx(0.05, abs=1e-4)


def test_the_rule_survives_any_number_of_looks() -> None:
    """A look after each of 16000 labels keeps the risk, and costs at most 1.27 times Wald's limit (method.md section 1)."""
    false = operating_characteristics(0.03, 0.001, 0.03, 16000).alarm_probability[-1]
    means = {
        rise: operating_characteristics(0.03, 0.001, 0.03 * rise, 16000).mean_labels for rise in (1.5, 2.0, 3.0, 5.0)
    }
    ratios = {rise: mean / wald_limit(0.03, 0.001, 0.03 * rise) for rise, mean in means.items()}

    assert false == pytest.approx(5.3e-4, rel=0.02)
    assert ratios == pytest.approx({1.5: 1.26, 2.0: 1.24, 3.0: 1.24, 5.0: 1.26}, abs=0.006)


def test_uncorrected_looks_break_the_risk() -> None:
    """An uncorrected exact test every 70 labels breaks a risk of 0.001 more than tenfold; the product's rule does not."""
    n = 70 * np.arange(1, 301)
    peek = binom.isf(0.001, n, 0.03) + 1
    uncorrected = first_exit(np.full(n.size, NEVER), peek, 0.03, step=70)[1].sum()
    ours = first_exit(np.full(n.size, NEVER), breaking_errors(n, 0.03, math.log(1000)), 0.03, step=70)[1].sum()

    assert uncorrected > 0.01
    assert ours < 0.001
