"""The plan: exact and simulated figures, advice, and what they are made of."""

from __future__ import annotations

import math

import numpy as np
import pytest
from bounds.sequential import kl

from watcher.bounds.exact import operating_characteristics
from watcher.bounds.planning import (
    RISES,
    WEEK,
    WIDTHS,
    Plan,
    bucket_fits,
    plan,
    smallest_rise,
    wald_limit,
    weekly_labels,
    widest_bucket,
)
from watcher.bounds.simulation import Setting, healthy_streams, labels_to_crossing


@pytest.fixture(scope="module")
def progress() -> list[float]:
    """What the plan told while it was made."""
    return []


@pytest.fixture(scope="module")
def made(progress: list[float]) -> Plan:
    """70 labels a day, daily buckets, one year, fewer streams than shipped."""
    return plan(0.03, 0.001, 490, streams=400, progress=progress.append)


def test_wald_limit() -> None:
    """log(1/risk)/KL: 2054, 573, 169 and 53 labels for 1.5x to 5x at 0.03 and 0.001 (method.md section 1)."""
    found = [wald_limit(0.03, 0.001, 0.03 * rise) for rise in (1.5, 2, 3, 5)]

    assert [round(x) for x in found] == [2054, 573, 169, 53]
    assert found[1] == pytest.approx(math.log(1000) / kl(0.06, 0.03))
    assert wald_limit(0.03, 0.001, 0.03) == math.inf


def test_from_release_is_the_exact_first_crossing(made: Plan) -> None:
    """Median and 90% are those of the exact pass at risk*0.20; weeks are labels over the weekly volume."""
    for row in made.rises[1:]:
        exact = operating_characteristics(0.03, 0.001 * 0.2, row.rate, 12_000)
        assert row.from_release.median_labels == exact.median_labels
        assert row.from_release.p90_labels == exact.labels_quantile(0.9)
        assert row.from_release.median_weeks == row.from_release.median_labels / 490
        assert row.from_release.noticed <= 1.0


def test_rows_are_in_order(made: Plan) -> None:
    """One row a rise; larger rises are noticed sooner, quantiles are ordered, nothing beats Wald's limit by chance."""
    assert tuple(row.rise for row in made.rises) == RISES
    for kind in ("from_release", "after_jump"):
        medians = [getattr(row, kind).median_labels for row in made.rises]
        assert medians == sorted(medians, reverse=True)
        assert all(getattr(row, kind).median_labels <= getattr(row, kind).p90_labels for row in made.rises)
    assert all(row.after_jump.median_labels > row.limit for row in made.rises)


def test_jump_figures_agree_with_the_prototype(made: Plan) -> None:
    """A doubled rate takes about 2.0 times the limit of 573 on average (method.md section 2), its median a little less."""
    row = made.rises[2]

    assert 1.6 * 573 < row.after_jump.median_labels < 2.1 * 573
    assert row.after_jump.noticed == 1.0


def test_false_breach_is_below_the_risk(made: Plan) -> None:
    """2.9e-4 at 70 labels a day (method.md section 2)."""
    assert made.false_breach.chance == pytest.approx(2.9e-4, rel=0.15)


def test_progress_rises_to_one(made: Plan, progress: list[float]) -> None:
    """The callback hears an increasing fraction that ends at 1."""
    assert made.tolerance == 0.03
    assert progress == sorted(progress)
    assert 0.0 <= progress[0] < progress[-1] == 1.0
    assert len(progress) > 50


def test_plan_depends_on_its_arguments_alone() -> None:
    """Two plans with the same arguments are equal, another seed changes simulated figures only."""
    first, second, other = (plan(0.05, 0.01, 700, service_life=8 * WEEK, streams=100, seed=s) for s in (1, 1, 2))

    assert first == second
    assert first.rises != other.rises
    assert [row.from_release for row in first.rises] == [row.from_release for row in other.rises]


def test_plan_for_too_few_labels_says_so() -> None:
    """10 labels a week: a doubled rate is noticed within the life by chance only, so its figures are None."""
    found = plan(0.03, 0.001, 10, streams=100)
    row = found.rises[2]

    assert row.from_release.median_labels is None
    assert row.after_jump.median_labels is None
    assert row.after_jump.median_weeks is None
    assert row.from_release.noticed < 0.5
    assert found.smallest_rise == pytest.approx(2.86, abs=0.05)


def test_rises_beyond_certainty_are_left_out() -> None:
    """A rate of 1 or more is no rise; large tolerances keep the small rises only."""
    found = plan(0.4, 0.01, 700, service_life=8 * WEEK, streams=100)

    assert tuple(row.rise for row in found.rises) == (1.25, 1.5, 2.0)


def test_least_window_delays_a_large_jump() -> None:
    """With window_at_least of 14 days a fivefold rise is noticed later than without, a small one about as soon."""
    free, held = (
        plan(0.03, 0.001, 490, window_at_least=days * 86400, streams=200, rises=(1.5, 5.0)) for days in (0, 14)
    )

    assert held.rises[1].after_jump.median_labels > 1.5 * free.rises[1].after_jump.median_labels
    assert held.rises[0].after_jump.median_labels < 1.2 * free.rises[0].after_jump.median_labels


def test_smallest_rise_is_noticed_with_the_stated_chance() -> None:
    """At that rise the exact chance of an alarm within the labels is at least 90%, at 5% less it is below 91%."""
    found = smallest_rise(0.03, 0.001, 3000)
    chances = [
        operating_characteristics(0.03, 0.0002, 0.03 * found * f, 3000).alarm_probability[-1] for f in (1.0, 0.95)
    ]

    assert chances[0] >= 0.9
    assert chances[1] < 0.9
    assert smallest_rise(0.03, 0.001, 0) is None
    assert smallest_rise(0.03, 0.001, 2) is None
    assert smallest_rise(0.03, 0.001, 10_000_000) < 1.02


def test_bucket_advice() -> None:
    """At most a tenth of log(1/(risk*share))/KL(2 eps, eps): 70 a day fit a day, 500 a day 4 hours, floods fit nothing."""
    share = 0.75 / 363
    most = 0.1 * -math.log(0.001 * share) / kl(0.06, 0.03)

    assert bucket_fits(0.03, 0.001, 7 * most * 0.999, 86400)
    assert not bucket_fits(0.03, 0.001, 7 * most * 1.001, 86400)
    assert widest_bucket(0.03, 0.001, 490) == 86400
    assert widest_bucket(0.03, 0.001, 3500) == 4 * 3600
    assert widest_bucket(0.03, 0.001, 1e6) is None
    assert all(width in WIDTHS for width in (widest_bucket(0.03, 0.001, n) for n in (700, 1400, 2800)))
    assert widest_bucket(0.7, 0.001, 7) == 86400


def test_weekly_labels_for_a_wanted_delay() -> None:
    """With the volume found half of the doubled rates are noticed in two weeks, with a fifth less they are not."""
    found = weekly_labels(0.03, 0.001, 2.0, 2.0, streams=200)
    shares = []
    for volume in (found, 0.8 * found):
        setting, rng = Setting(0.03, 0.001, 363, volume / 7), np.random.default_rng(121)
        began = healthy_streams(setting, 0.02, rng.integers(196, 341, 400), rng)
        shares.append(np.isfinite(labels_to_crossing(began, 0.06, 14, rng)).mean())

    assert shares[0] > 0.43
    assert shares[1] < 0.45
    assert weekly_labels(0.03, 0.001, 2.0, 0.1) is None


def test_weekly_labels_for_a_quick_answer() -> None:
    """A fivefold rise within a week, 90% of the time, needs more than the limit suggests; progress is told."""
    told: list[float] = []
    found = weekly_labels(0.03, 0.001, 5.0, 1.0, quantile=0.9, streams=100, service_life=8 * WEEK, progress=told.append)
    median = weekly_labels(0.03, 0.001, 5.0, 1.0, streams=100, service_life=8 * WEEK)

    assert wald_limit(0.03, 0.001, 0.15) < median < found
    assert told
    assert all(0.0 <= done <= 1.0 for done in told)


def test_weekly_labels_beyond_all_measure() -> None:
    """A rise of a twentieth of a percent within a day is out of reach of ten million labels a week."""
    assert weekly_labels(0.03, 0.001, 1.0005, 1 / 7, streams=100, service_life=2 * WEEK) is None


def test_large_risks_are_looked_at_long_enough() -> None:
    """At a large risk the mixture costs several times the limit; the exact pass goes on until the 90% figure is found."""
    row = plan(0.005, 0.9, 490, rises=(10.0,), streams=100, service_life=8 * WEEK).rises[0]

    assert row.from_release.p90_labels > 4 * wald_limit(0.005, 0.18, 0.05)


def test_nothing_healthy_to_jump_from() -> None:
    """If the rate before the jump breaches already, no jump can be simulated and the figures say so."""
    found = plan(0.03, 0.001, 490, healthy=0.5, streams=100, service_life=8 * WEEK)

    assert found.streams == 0
    assert found.rises[0].after_jump.median_labels is None
    assert math.isnan(found.rises[0].after_jump.noticed)


@pytest.mark.parametrize(
    ("call", "name"),
    [
        (lambda: plan(0.0, 0.001, 490), "tolerance"),
        (lambda: plan(0.03, 1.0, 490), "risk"),
        (lambda: plan(0.03, 0.001, 0), "labels_per_week"),
        (lambda: plan(0.03, 0.001, math.nan), "labels_per_week"),
        (lambda: plan(0.03, 0.001, 490, bucket=0), "bucket"),
        (lambda: plan(0.03, 0.001, 490, rises=(0.9,)), "rises"),
        (lambda: plan(0.03, 0.001, 490, healthy=0.0), "healthy"),
        (lambda: smallest_rise(0.03, 0.001, 10, 1.0), "chance"),
        (lambda: weekly_labels(0.03, 0.001, 1.0, 2.0), "rise"),
        (lambda: weekly_labels(0.03, 0.001, 2.0, 0.0), "weeks"),
        (lambda: weekly_labels(0.03, 0.001, 40.0, 2.0), "tolerance"),
    ],
)
def test_nonsense_is_refused_by_name(call: object, name: str) -> None:
    """A ValueError names the argument."""
    with pytest.raises(ValueError, match=name):
        call()
