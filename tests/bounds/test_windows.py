"""Shares, totals, crossings, support: against sums written out window by window."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from watcher.bounds.designs import LOSS, UNIFORM
from watcher.bounds.evidence import evidence, lower_limit, upper_limit
from watcher.bounds.mixture import LIFE, RESTART
from watcher.bounds.windows import (
    BREACH,
    SUPPORT,
    crossing,
    restarts,
    support_of,
    supports,
    total,
    totals,
    window_limits,
)

DAY = 86400
J = restarts(364 * DAY, DAY)
THRESHOLD = math.log(1 / 0.001)


def year(seed=3, days=365, jump=300, volume=70):
    rng = np.random.default_rng(seed)
    n = rng.poisson(volume, days)
    n[rng.random(days) < 0.1] = 0
    return np.stack([n, rng.binomial(n, np.where(np.arange(days) < jump, 0.02, 0.06))], axis=-1)


def windows_at(buckets, t):
    return np.cumsum(buckets[: t + 1][::-1], axis=0)[::-1]


def each(windows, rate, side):
    mixtures = [LIFE] + [RESTART] * (len(windows) - 1)
    return [float(evidence(w, rate, side, mixture=m)) for w, m in zip(windows, mixtures, strict=True)]


def total_by_hand(windows, rate, started=None):
    """method.md section 2 written out: share by share, with the shares not yet started."""
    shares, unstarted = BREACH.shares(J, len(windows)), BREACH.remainder(J, len(windows))
    started = np.ones(len(windows), dtype=bool) if started is None else started
    parts = [s * math.exp(e) for s, e, on in zip(shares, each(windows, rate, "above"), started, strict=True) if on]
    return math.log(math.fsum([*parts, unstarted]))


def test_shares_are_the_method_s():
    """0.20, then 0.75/J, then 0.05*J/((J+i-1)(J+i)); support 0.50/0.45/0.05; each budget sums to 1."""
    assert J == 363
    shares = BREACH.shares(J, J + 3)

    assert pytest.approx([shares[0], shares[1], shares[J]]) == [0.20, 0.75 / J, 0.75 / J]
    assert pytest.approx([shares[J + 1], shares[J + 2]]) == [0.05 * J / (J * (J + 1)), 0.05 * J / ((J + 1) * (J + 2))]
    assert pytest.approx(SUPPORT.shares(J, 2)) == [0.50, 0.45 / J]
    for budget in (BREACH, SUPPORT):
        for count in (0, 1, 2, 100, J, J + 1, J + 2, 5000):
            assert pytest.approx(budget.shares(J, count).sum() + budget.remainder(J, count), abs=1e-12) == 1.0


def test_number_of_restarts():
    """J = max(1, ceil(service_life/bucket) - 1)."""
    assert [
        restarts(364 * DAY, DAY),
        restarts(364 * DAY, DAY // 4),
        restarts(DAY, DAY),
        restarts(DAY + 1, DAY),
        restarts(2 * DAY + 1, DAY),
    ] == [363, 1455, 1, 1, 2]


def test_total_is_the_sum_over_windows_rounded_down():
    """The prefix sums give the total that adding every window's evidence gives, rounded down to 1e-6."""
    buckets = year()
    found = totals(buckets, 0.03, J)

    for t in (0, 1, 2, 9, 50, 200, 299, 310, 330, 364):
        expected = total_by_hand(windows_at(buckets, t), 0.03)
        assert expected - 1.1e-6 < found[t] < expected + 1e-9
        assert found[t] * 1e6 == pytest.approx(round(found[t] * 1e6), abs=1e-6)


def test_total_beyond_the_service_life():
    """Windows that start after the life share the last 0.05."""
    buckets = year(days=40, jump=20, volume=100)
    few = 10
    shares = BREACH.shares(few, 40)
    parts = [s * math.exp(e) for s, e in zip(shares, each(windows_at(buckets, 39), 0.03, "above"), strict=True)]

    expected = math.log(math.fsum([*parts, BREACH.remainder(few, 40)]))

    assert expected == pytest.approx(totals(buckets, 0.03, few)[39], abs=1.1e-6)


def test_one_look_equals_daily_looks_to_the_last_digit():
    """Totals and supports of one look over a year are those of a look after every bucket, bit for bit."""
    buckets = year()
    age = np.arange(365)[:, None] - np.arange(365) >= 6
    whole, held = totals(buckets, 0.03, J), supports(buckets, 0.03, 0.001, J, long_enough=age)

    daily, daily_held, stored = [], [], []
    for t in range(365):
        daily.append(float(totals(buckets[: t + 1], 0.03, J, since=t)[0]))
        stored.append(total(windows_at(buckets, t), 0.03, J))
        flags = age[t, : t + 1]
        daily_held.append(int(supports(buckets[: t + 1], 0.03, 0.001, J, since=t, long_enough=flags[None])[0]))
        if t % 13 == 0:
            assert daily_held[-1] == support_of(windows_at(buckets, t), 0.03, 0.001, J, long_enough=flags)

    assert whole.tolist() == daily == stored
    assert held.tolist() == daily_held
    for since, until in ((0, 100), (100, 101), (100, 365), (364, 365)):
        assert whole[since:until].tolist() == totals(buckets[:until], 0.03, J, since=since).tolist()


def test_young_windows_contribute_nothing():
    """Under window_at_least a started window that is too young adds 0, not its share; the older ones stay."""
    buckets = year(days=60, jump=30, volume=200)
    mature = np.arange(60)[:, None] - np.arange(60) >= 13
    found = totals(buckets, 0.03, J, mature=mature)

    for t in (0, 5, 13, 14, 40, 59):
        expected = total_by_hand(windows_at(buckets, t), 0.03, mature[t, : t + 1])
        assert expected == pytest.approx(found[t], abs=1.1e-6)
        assert found[t] == total(windows_at(buckets, t), 0.03, J, mature=mature[t, : t + 1])
    assert found[5] == pytest.approx(math.log(BREACH.remainder(J, 6)), abs=1.1e-6)


def test_flags_of_windows_with_a_gap_are_refused():
    """A window that starts earlier is older: it cannot be too young when a later one is not."""
    buckets = year(days=3)

    with pytest.raises(ValueError, match="have a gap"):
        totals(buckets, 0.03, J, mature=np.array([[True] * 3, [False, True, True], [True] * 3]))
    with pytest.raises(ValueError, match=r"\(3, 3\) is needed"):
        totals(buckets, 0.03, J, mature=np.ones((2, 3), dtype=bool))


def test_windows_without_labels_add_their_share_alone():
    """Empty buckets leave exp(evidence) = 1: a path without labels has a total of 0, rounded down."""
    found = totals(np.zeros((500, 2), dtype=int), 0.03, J)

    assert (np.abs(found) <= 1e-6).all()


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 60), st.sampled_from([0.005, 0.03, 0.2]), st.floats(0.5, 9.0))
def test_breach_lower_reaches_the_tolerance_exactly_when_breached(seed, days, rate, threshold):
    """lower >= tolerance if and only if the recorded total is at least the threshold."""
    rng = np.random.default_rng(seed)
    n = rng.integers(0, 300, days)
    buckets = np.stack([n, rng.binomial(n, rng.uniform(0, 3 * rate))], axis=-1)
    windows = windows_at(buckets, days - 1)

    found = crossing(windows, rate, threshold, J)

    assert found.total == total(windows, rate, J) == totals(buckets, rate, J)[-1]
    assert (found.lower >= rate) == (found.total >= threshold)


def test_a_threshold_at_the_recorded_total_itself_is_reached():
    """Judged on the recorded value: equality breaches, the next float above does not."""
    windows = windows_at(year(), 320)
    recorded = total(windows, 0.03, J)

    assert crossing(windows, 0.03, recorded, J).lower >= 0.03
    assert crossing(windows, 0.03, math.nextafter(recorded, 99.0), J).lower < 0.03
    assert crossing(windows, 0.03, recorded + 1e-9, J).lower == math.nextafter(0.03, 0.0)


def test_breach_lower_is_where_the_total_equals_the_threshold():
    """Away from the tolerance `lower` is the root of the total written out by hand, rounded down."""
    buckets = year()
    for t in (100, 280, 330, 364):
        windows = windows_at(buckets, t)
        found = crossing(windows, 0.03, THRESHOLD, J)

        assert total_by_hand(windows, found.lower) == pytest.approx(THRESHOLD, abs=1e-7)
        assert total_by_hand(windows, found.lower) >= THRESHOLD - 1e-10


def test_the_likeliest_start_is_the_window_with_the_largest_share():
    """argmax of share_j * exp(evidence_j), which lies near the jump."""
    windows = windows_at(year(), 330)
    weights = np.log(BREACH.shares(J, 331)) + each(windows, 0.03, "above")

    assert int(np.argmax(weights)) == crossing(windows, 0.03, THRESHOLD, J).likeliest
    assert abs(crossing(windows, 0.03, THRESHOLD, J).likeliest - 300) <= 20


def test_nothing_counted_yet():
    """A promise without buckets has a total of 0, a lower limit of 0 and no support."""
    none = np.zeros((0, 2), dtype=int)

    assert total(none, 0.03, J) == pytest.approx(0.0, abs=1e-6)
    assert (crossing(none, 0.03, THRESHOLD, J).lower, crossing(none, 0.03, THRESHOLD, J).likeliest) == (0.0, 0)
    assert support_of(none, 0.03, 0.001, J, long_enough=np.zeros(0, dtype=bool)) == -1
    assert totals(none, 0.03, J).size == 0
    assert supports(none, 0.03, 0.001, J, long_enough=np.zeros((0, 0), dtype=bool)).size == 0


@pytest.mark.parametrize(("seed", "volume"), [(1, 70), (2, 500), (3, 20), (4, 3000)])
def test_support_is_the_shortest_window_that_holds(seed, volume):
    """Skipping and stopping early change nothing: the same window as evaluating every one of them."""
    buckets = year(seed=seed, days=300, jump=230, volume=volume)
    age = np.arange(300)[:, None] - np.arange(300) >= 6
    found = supports(buckets, 0.03, 0.001, J, long_enough=age)
    needed = -np.log(0.001 * SUPPORT.shares(J, 300))

    for t in range(0, 300, 3):
        windows = windows_at(buckets, t)
        strength = evidence(windows, 0.03, "below", mixture=RESTART)
        strength[0] = evidence(windows[0], 0.03, "below", mixture=LIFE)
        holds = np.flatnonzero((strength >= needed[: t + 1]) & age[t, : t + 1])
        assert found[t] == (holds.max() if holds.size else -1)
    assert (found >= 0).any() == (volume >= 70)


def test_support_means_an_upper_limit_at_or_below_the_tolerance():
    """The window named has its shown upper limit at or below the tolerance, every shorter one above it."""
    buckets = year(days=250, jump=999, volume=300)
    age = np.arange(250)[:, None] - np.arange(250) >= 6
    j = int(supports(buckets, 0.03, 0.001, J, long_enough=age)[-1])
    windows = windows_at(buckets, 249)

    _, upper = window_limits(windows, np.arange(250), 0.001, J)

    assert j > 0
    assert upper[j] <= 0.03
    assert (upper[j + 1 : 244] > 0.03).all()


def test_shown_limits_use_each_budget_s_share():
    """Lower at risk * breach share, upper at risk * support share; LIFE for window 0, RESTART for the others."""
    rows, index = np.array([[5000, 100], [2000, 30], [900, 9]]), np.array([0, 40, 400])
    lower, upper = window_limits(rows, index, [0.001, 0.0005, 0.001], J)

    for i, (row, j, risk, mixture) in enumerate(
        zip(rows, index, (0.001, 0.0005, 0.001), (LIFE, RESTART, RESTART), strict=True)
    ):
        a, b = -np.log(risk * BREACH.share(j, J)), -np.log(risk * SUPPORT.share(j, J))
        assert lower[i] == lower_limit(row, a, mixture=mixture)
        assert upper[i] == upper_limit(row, b, mixture=mixture)


def test_totals_of_a_loss_of_zeros_and_ones_are_those_of_errors():
    """The linear design runs through the same windows."""
    buckets = year(days=100, jump=50)
    losses = np.stack([buckets[:, 0], buckets[:, 1] * 10**6, buckets[:, 1] * 10**6], axis=-1)

    assert totals(buckets, 0.03, J) == pytest.approx(totals(losses, 0.03, J, design=LOSS), abs=2e-6)


def test_large_volumes_stay_exact():
    """1e9 labels over a year: prefix sums and window sums agree to the millionth that is recorded."""
    rng = np.random.default_rng(8)
    n = rng.poisson(2_740_000, 365)
    buckets = np.stack([n, rng.binomial(n, 0.02998)], axis=-1)
    found = totals(buckets, 0.03, J)

    for t in (10, 100, 364):
        assert total_by_hand(windows_at(buckets, t), 0.03) == pytest.approx(found[t], abs=2e-6)


def test_a_flood_of_errors_does_not_overflow():
    """A day on which everything is wrong gives a large finite total."""
    buckets = np.array([[10**6, 20_000]] * 5 + [[10**6, 10**6]] * 3)
    found = totals(buckets, 0.03, J)

    assert np.isfinite(found).all()
    assert found[-1] > 1e6
    assert 0.9 < crossing(windows_at(buckets, 7), 0.03, THRESHOLD, J).lower < 1.0


def test_a_path_of_the_wrong_shape_is_refused():
    """The message names the shape that is needed."""
    with pytest.raises(ValueError, match=r"\(number, 2\) is needed"):
        totals(np.zeros((4, 3)), 0.03, J, design=UNIFORM)
