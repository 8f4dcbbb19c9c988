"""The test of the label delay: its statistic, its level when the delay is innocent, its speed when it is not."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import hypergeom

from watcher.bounds import windows
from watcher.bounds.delay import LEVEL, delay_test


def _innocent(seed: int, runs: int, volume: int, rate: float, late: float) -> tuple[np.ndarray, ...]:
    """Counts (runs, 364) of labels whose delay ignores the outcome."""
    rng = np.random.default_rng(seed)
    n2 = rng.binomial(volume, late, (runs, 364))
    n1 = volume - n2
    return n1, rng.binomial(n1, rate), n2, rng.binomial(n2, rate)


def test_statistic_is_mantel_haenszel() -> None:
    """z is (A - E)/sqrt(V) over the tables so far, with the hypergeometric means and variances (scipy's)."""
    n1, a, n2, b = (np.array(x) for x in ([30, 50], [3, 1], [20, 40], [1, 5]))
    law = hypergeom(n1 + n2, a + b, n1)
    found = delay_test(n1, a, n2, b)

    assert found.z == pytest.approx((a - law.mean()).cumsum() / np.sqrt(law.var().cumsum()))


def test_chance_is_never_below_the_exact_one() -> None:
    """For one table the stated two-sided chance bounds the exact hypergeometric tail at every possible count."""
    for n1, n2, errors in ((69, 1, 1), (60, 10, 4), (35, 35, 9), (500, 300, 40)):
        counts = np.arange(max(0, errors - n2), min(n1, errors) + 1)
        pmf = hypergeom.pmf(counts, n1 + n2, errors, n1)
        far = np.abs(counts - n1 * errors / (n1 + n2))
        exact = np.array([pmf[far >= d - 1e-9].sum() for d in far])
        stated = [float(delay_test([n1], [c], [n2], [errors - c]).log_level[0]) for c in counts]

        assert (np.log(exact) <= np.array(stated) + 1e-9).all()


def test_one_late_error_alone_is_no_proof() -> None:
    """One error, the only late label among 70: z is -8.3 with a chance of 1/70, so |z| >= 5 alone would be a false flag."""
    found = delay_test([69], [0], [1], [1])

    assert found.z[0] == pytest.approx(-8.3, abs=0.05)
    assert not found.depends[0]


@pytest.mark.parametrize(("volume", "late"), [(70, 0.5), (70, 0.02), (300, 0.1), (8, 0.3)])
def test_level_when_the_delay_is_innocent(volume: int, late: float) -> None:
    """No flag in 400 innocent years (a false one has chance at most 2.1e-4 a year, 8% in all at the bound, far less)."""
    found = delay_test(*_innocent(81, 400, volume, 0.02, late))

    assert found.depends.any(axis=1).sum() == 0
    # Not for want of looking: the smallest chance seen is about what 400 years of looks should bring.
    assert found.log_level.min() < math.log(0.05)


def test_plain_z_breaks_its_level() -> None:
    """|z| >= 5 alone flags over 1% of innocent years when 2% of the labels are late: fifty times the stated 2.1e-4."""
    found = delay_test(*_innocent(82, 2000, 70, 0.02, 0.02))

    assert (np.abs(found.z) >= 5).any(axis=1).mean() > 0.01


@pytest.mark.parametrize("volume", [10, 70, 300])
def test_outcome_dependent_delay_is_flagged_soon(volume: int) -> None:
    """Errors known after 1 day, correct labels after 8 (label_lag 10 days): flagged within 40 errors, 99% of runs."""
    rng = np.random.default_rng(83)
    errors = rng.binomial(volume, 0.02, (300, 364))
    nothing = np.zeros_like(errors)
    found = delay_test(errors, errors, volume - errors, nothing)
    first = found.depends.argmax(axis=1)

    assert found.depends.any(axis=1).all()
    assert np.quantile(errors.cumsum(axis=1)[np.arange(300), first], 0.99) < 40


def _breached(errors: np.ndarray, volume: int, error_delay: int, correct_delay: int) -> bool:
    """Whether one stream ever breaches if labels count as they arrive, a look a day: true 0.02, tolerance 0.03, risk 0.001."""
    for t in range(errors.size):
        came = np.where(np.arange(t + 1) + error_delay <= t, errors[: t + 1], 0)
        fine = np.where(np.arange(t + 1) + correct_delay <= t, volume - errors[: t + 1], 0)
        tails = np.stack([came + fine, came], axis=-1)[::-1].cumsum(axis=0)[::-1]
        if windows.total(tails, 0.03, 363) >= math.log(1000):
            return True
    return False


def test_counting_arriving_labels_needs_an_innocent_delay() -> None:
    """Errors after 1 day, correct labels after 8: of 60-day streams at 300 a day almost all breach falsely, sealed none.

    method.md section 2: 98% of streams at 300 a day. Sealed, and arriving with an innocent delay, no stream breaches.
    """
    rng = np.random.default_rng(85)
    streams = rng.binomial(300, 0.02, (40, 60))
    early, sealed, innocent = (
        sum(_breached(errors, 300, *pair) for errors in streams) for pair in ((1, 8), (10, 10), (4, 4))
    )

    assert early >= 35
    assert sealed == innocent == 0


def test_mild_dependence_is_flagged_in_time() -> None:
    """Half of the errors come early and a quarter of the correct ones: at 300 labels a day flagged within a quarter."""
    rng = np.random.default_rng(84)
    errors = rng.binomial(300, 0.02, (200, 91))
    early_errors, early_correct = rng.binomial(errors, 0.5), rng.binomial(300 - errors, 0.25)
    found = delay_test(
        early_errors + early_correct, early_errors, 300 - early_errors - early_correct, errors - early_errors
    )

    assert found.depends.any(axis=1).mean() > 0.95
    assert (found.z[:, -1] > 0).all()


def test_empty_buckets_and_one_sided_buckets_say_nothing() -> None:
    """No labels, no errors, only early labels or only errors: z 0, chance 1, no flag; later buckets go on."""
    found = delay_test([0, 50, 50, 5, 30], [0, 0, 3, 5, 2], [0, 20, 0, 5, 20], [0, 0, 0, 5, 1])

    assert found.z[:4].tolist() == [0.0] * 4
    assert found.log_level[:4].tolist() == [0.0] * 4
    assert not found.depends.any()
    assert pytest.approx(2.1e-4) == LEVEL * 364


def test_impossible_counts_are_refused() -> None:
    """Errors beyond the labels are named."""
    with pytest.raises(ValueError, match="late_errors"):
        delay_test([1], [1], [1], [2])
    with pytest.raises(ValueError, match="early_errors"):
        delay_test([1], [-1], [1], [0])
