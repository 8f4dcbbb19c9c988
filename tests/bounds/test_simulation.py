"""The fast simulation is the shipped rule, and its importance sampling is exact in mean."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binomtest

from watcher.bounds import windows
from watcher.bounds.simulation import Setting, Streams, false_breach, healthy_streams, labels_to_crossing


def _paths(setting: Setting, buckets: int, seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Labels (B,), errors (B, S) and totals (B, S) of five streams that rise in the middle."""
    rng, streams = np.random.default_rng(seed), Streams(setting, 5)
    errors, totals = [], []
    for t in range(buckets):
        errors.append(streams.draw(0.03 if t < buckets // 2 else 0.06, rng))
        streams.take(errors[-1])
        totals.append(streams.totals())
    at = np.arange(buckets)
    return setting.labels(at, at + 1), np.array(errors), np.array(totals)


@pytest.mark.parametrize("volume", [0.4, 7.5, 60.0, 5000.0])
def test_totals_are_those_of_the_windows(volume: float) -> None:
    """Fractional, ordinary and large volumes, beyond the service life: the totals of `windows.totals` before rounding."""
    setting = Setting(0.03, 0.001, 40, volume)
    labels, errors, totals = _paths(setting, 90, 101)

    for i in range(5):
        expected = windows.totals(np.stack([labels, errors[:, i]], axis=-1), 0.03, 40)
        assert np.minimum(totals[:, i], 600) == pytest.approx(np.minimum(expected, 600), abs=2e-6, rel=1e-6)


@pytest.mark.parametrize("young", [2, 7])
def test_young_windows_contribute_nothing(young: int) -> None:
    """With a least window the totals are those of `windows.totals` with the same windows left out."""
    setting = Setting(0.03, 0.001, 40, 7.5, young)
    labels, errors, totals = _paths(setting, 70, 102)
    ages = np.arange(1, 71)[:, None] - np.arange(70)[None]

    for i in range(5):
        expected = windows.totals(np.stack([labels, errors[:, i]], axis=-1), 0.03, 40, mature=ages >= young)
        assert totals[:, i] == pytest.approx(expected, abs=2e-6)


def test_healthy_streams_wait_at_their_bucket() -> None:
    """Each stream stops at the bucket asked for, one that crossed before is gone, the others have not crossed."""
    setting, starts = Setting(0.03, 0.2, 40, 50), np.random.default_rng(103).integers(0, 60, 200)
    found = healthy_streams(setting, 0.03, starts, np.random.default_rng(104))

    assert 100 < len(found.at) < 200
    assert set(found.at) <= set(starts.tolist())
    assert (found.totals() < setting.threshold).all()


def test_labels_to_crossing_counts_whole_buckets() -> None:
    """Delays are multiples of the bucket, inf beyond the horizon, and leave the streams as they were."""
    setting = Setting(0.03, 0.001, 40, 50)
    streams = healthy_streams(setting, 0.02, np.full(100, 20), np.random.default_rng(105))
    before = streams.totals().copy()
    near, far = (labels_to_crossing(streams, 0.06, buckets, np.random.default_rng(106)) for buckets in (10, 200))

    assert np.isfinite(far).all()
    assert (far % 50 == 0).all()
    assert (near == np.where(far <= 500, far, np.inf)).all()
    assert (streams.totals() == before).all()


@pytest.mark.parametrize(("volume", "buckets", "young"), [(40, 60, 0), (7.5, 120, 0), (40, 60, 10)])
def test_importance_sampling_agrees_with_counting(volume: float, buckets: int, young: int) -> None:
    """At risk 0.2 the importance-sampled chance of a false breach is the counted one of 10000 streams; four s.e."""
    setting = Setting(0.05, 0.2, buckets - 1, volume, young)
    found = false_breach(setting, buckets, 4000, np.random.default_rng(107))
    rng, crossed = np.random.default_rng(108), 0
    for _ in range(20):
        streams, over = Streams(setting, 500), np.zeros(500, dtype=bool)
        for _ in range(buckets):
            streams.take(streams.draw(0.05, rng))
            over |= streams.totals() >= setting.threshold
        crossed += int(over.sum())
    counted = crossed / 10_000

    assert abs(found.chance - counted) < 4 * math.hypot(found.error, math.sqrt(counted / 10_000))
    assert binomtest(crossed, 10_000, 0.2, alternative="greater").pvalue > 1e-4


@pytest.mark.parametrize(("volume", "buckets", "expected"), [(70, 364, 2.9e-4)])
def test_false_breach_of_the_shipped_rule(volume: float, buckets: int, expected: float) -> None:
    """A year at the tolerance, risk 0.001, 70 labels a day: 2.9e-4 (method.md section 2)."""
    found = false_breach(Setting(0.03, 0.001, buckets - 1, volume), buckets, 4000, np.random.default_rng(109))

    assert found.chance == pytest.approx(expected, rel=0.1)
    assert found.error < 0.05 * found.chance


def test_delays_after_a_jump() -> None:
    """70 labels a day, a jump between weeks 28 and 49: 1.79, 2.00, 2.36 times Wald's limit (method.md section 2; s.e. 2%)."""
    setting, rng = Setting(0.03, 0.001, 363, 70), np.random.default_rng(110)
    began = healthy_streams(setting, 0.02, rng.integers(196, 343, 800), rng)
    limits = {1.5: 2054, 2.0: 573, 3.0: 169}
    found = {rise: labels_to_crossing(began, 0.03 * rise, 700, rng).mean() / limit for rise, limit in limits.items()}

    assert found == pytest.approx({1.5: 1.79, 2.0: 2.00, 3.0: 2.36}, rel=0.07)


@pytest.mark.long
@pytest.mark.parametrize(
    ("volume", "per_day", "expected"), [(500, 1, (2.23, 2.64, 3.53)), (125, 4, (2.05, 2.37, 2.79))]
)
def test_delays_at_a_large_volume(volume: float, per_day: int, expected: tuple[float, float, float]) -> None:
    """500 labels a day in daily and in 6-hour buckets (method.md section 2; s.e. 2%)."""
    buckets = 364 * per_day
    setting, rng = Setting(0.03, 0.001, buckets - 1, volume), np.random.default_rng(111)
    began = healthy_streams(setting, 0.02, rng.integers(196 * per_day, 343 * per_day, 800), rng)
    found = [
        labels_to_crossing(began, 0.03 * rise, buckets, rng).mean() / limit
        for rise, limit in ((1.5, 2054), (2.0, 573), (3.0, 169))
    ]

    assert found == pytest.approx(expected, rel=0.07)
