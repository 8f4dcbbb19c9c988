"""What a promise costs: labels and weeks until a rise is noticed, and what the rule as shipped does by mistake.

Two figures (method.md section 7): (a) the error is too high from the release, exact for window 0 alone and therefore
conservative; (b) a jump after a long healthy time, by simulation of the windowed rule.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from scipy.special import betaincinv

from watcher.bounds import windows
from watcher.bounds.arguments import fraction
from watcher.bounds.exact import OperatingCharacteristics, breaking_errors, operating_characteristics
from watcher.bounds.mixture import Floats
from watcher.bounds.simulation import (
    FalseBreach,
    Progress,
    Setting,
    Streams,
    false_breach,
    healthy_streams,
    labels_to_crossing,
)

WEEK: Final = 7 * 86400
RISES: Final = (1.25, 1.5, 2.0, 3.0, 5.0)
WIDTHS: Final = tuple(hours * 3600 for hours in (1, 2, 3, 4, 6, 8, 12, 24))
"""Bucket widths that a promise may choose, seconds."""
NOTICED: Final = 0.9
"""The chance with which the smallest noticeable rise is noticed within the life."""
_LONGEST: Final = 200_000
"""Labels to which the exact pass looks ahead."""
_WORK: Final = 4e8
"""Numbers a simulation may touch: about two seconds."""
_JUMPS: Final = (0.54, 0.94)
"""Part of the service life after which the simulated jump comes: weeks 28 to 49 of a year."""


@dataclass(frozen=True, slots=True)
class Delay:
    """How long a rise stays unnoticed; None: longer than was looked ahead. Weeks do not include the label lag."""

    median_labels: int | None
    p90_labels: int | None
    median_weeks: float | None
    p90_weeks: float | None
    noticed: float
    """The chance that it is noticed within the service life (jump: within a service life after the jump), or more: the
    exact pass may stop earlier."""


@dataclass(frozen=True, slots=True)
class RisePlan:
    """One rise of the error rate over the tolerance."""

    rise: float
    rate: float
    """rise * tolerance."""
    limit: float
    """log(1/risk)/KL(rate, tolerance) labels: Wald's bound on the mean of any test of that risk."""
    from_release: Delay
    """Exact, window 0 at its share of the risk, without `window_at_least`."""
    after_jump: Delay
    """Simulated, the rule as shipped."""


@dataclass(frozen=True, slots=True)
class Plan:
    """The plan of one promise, or of one slice at its part of the risk and its share of the labels."""

    tolerance: float
    risk: float
    labels_per_week: float
    bucket: int
    service_life: int
    healthy: float
    """Error rate before the simulated jump."""
    streams: int
    """Simulated streams behind `after_jump`."""
    life_labels: int
    rises: tuple[RisePlan, ...]
    false_breach: FalseBreach
    """Within a service life spent exactly at the tolerance."""
    smallest_rise: float | None
    widest_bucket: int | None


def wald_limit(tolerance: float, risk: float, rate: float) -> float:
    """log(1/risk)/KL(rate, tolerance): no test of that risk has a smaller mean sample at `rate` (Wald 1945); labels."""
    p, q = fraction("rate", rate), fraction("tolerance", tolerance)
    divergence = p * math.log(p / q) + (1.0 - p) * (math.log1p(-p) - math.log1p(-q))
    return -math.log(fraction("risk", risk)) / divergence if divergence > 0.0 else math.inf


def plan(
    tolerance: float,
    risk: float,
    labels_per_week: float,
    *,
    bucket: int = 86400,
    service_life: int = 52 * WEEK,
    window_at_least: int = 0,
    rises: Sequence[float] = RISES,
    healthy: float | None = None,
    streams: int = 1000,
    seed: int = 20260101,
    progress: Callable[[float], None] | None = None,
) -> Plan:
    """Labels and weeks until a rise is noticed, the chance of a false breach, and advice.

    `tolerance`, `risk` (of the promise, or a slice's part of it) in (0, 1); `labels_per_week` > 0 of that promise or
    slice; `bucket`, `service_life`, `window_at_least` in seconds; `rises` > 1, those with rise * tolerance >= 1 are left
    out; `healthy` the rate before the jump, 2/3 of the tolerance unless given; `progress` is told the fraction done.
    Depends on its arguments alone. Figures from simulation carry a sampling error of some 3%. ValueError names the
    argument.
    """
    setting = _setting(tolerance, risk, labels_per_week, bucket, service_life, window_at_least)
    healthy = 2.0 / 3.0 * tolerance if healthy is None else fraction("healthy", healthy)
    if any(not rise > 1.0 for rise in rises):
        raise ValueError(f"rises = {tuple(rises)!r}: factors above 1 are allowed")
    tell = progress or (lambda _: None)
    rng = np.random.default_rng(seed)
    buckets = setting.restarts + 1
    life_labels = int(setting.volume * buckets)
    count = _affordable(streams, buckets)
    began = _started(setting, healthy, count, rng, lambda done: tell(0.4 * done))
    wanted = [rise for rise in rises if rise * tolerance < 1.0]
    found = []
    for i, rise in enumerate(wanted):
        rate = rise * tolerance
        exact = _from_release(setting, rate, life_labels, labels_per_week)
        jump = _delay(labels_to_crossing(began, rate, buckets, rng), labels_per_week)
        found.append(RisePlan(rise, rate, wald_limit(tolerance, risk, rate), exact, jump))
        tell(0.4 + 0.3 * (i + 1) / len(wanted))
    false = false_breach(setting, buckets, _affordable(4 * streams, buckets), rng, lambda done: tell(0.7 + 0.3 * done))
    tell(1.0)
    return Plan(
        tolerance=tolerance,
        risk=risk,
        labels_per_week=labels_per_week,
        bucket=bucket,
        service_life=service_life,
        healthy=healthy,
        streams=len(began.at),
        life_labels=life_labels,
        rises=tuple(found),
        false_breach=false,
        smallest_rise=smallest_rise(tolerance, risk, life_labels),
        widest_bucket=widest_bucket(tolerance, risk, labels_per_week, service_life),
    )


def smallest_rise(tolerance: float, risk: float, labels: int, chance: float = NOTICED) -> float | None:
    """The smallest rise, present since the release, that window 0 notices within `labels` labels with that chance.

    In multiples of the tolerance, by the exact chance that the count at the last label is over the boundary, hence
    slightly too large; None: not even a rate of 1 is noticed.
    """
    fraction("chance", chance)
    if labels < 1:
        return None
    threshold = -math.log(fraction("risk", risk) * windows.BREACH.release)
    needed = int(breaking_errors(np.array([labels]), fraction("tolerance", tolerance), threshold)[0])
    if needed > labels:
        return None
    return float(betaincinv(needed, labels - needed + 1, chance)) / tolerance


def widest_bucket(tolerance: float, risk: float, labels_per_week: float, service_life: int = 52 * WEEK) -> int | None:
    """The widest bucket (seconds, one of `WIDTHS`) that costs no noticeable delay; None: even an hour holds too many.

    It holds at most a tenth of the labels that double the tolerance's error rate needs to be noticed by a restart,
    log(1/(risk*share))/KL(2 eps, eps) (method.md section 2).
    """
    fits = [width for width in WIDTHS if bucket_fits(tolerance, risk, labels_per_week, width, service_life)]
    return max(fits, default=None)


def bucket_fits(
    tolerance: float, risk: float, labels_per_week: float, bucket: int, service_life: int = 52 * WEEK
) -> bool:
    """Whether a bucket of that width (seconds) is narrow enough; see `widest_bucket`."""
    setting = _setting(tolerance, risk, labels_per_week, bucket, service_life, 0)
    share = windows.BREACH.life / setting.restarts
    rate = min(2.0 * tolerance, 0.5 * (1.0 + tolerance))
    return setting.volume <= 0.1 * wald_limit(tolerance, risk * share, rate)


def weekly_labels(
    tolerance: float,
    risk: float,
    rise: float,
    weeks: float,
    *,
    quantile: float = 0.5,
    bucket: int = 86400,
    service_life: int = 52 * WEEK,
    healthy: float | None = None,
    streams: int = 400,
    seed: int = 20260101,
    progress: Progress | None = None,
) -> int | None:
    """Labels a week with which a jump to `rise` * tolerance is noticed within `weeks` with chance `quantile`.

    The smallest volume on a 3% grid, by simulation of the rule as shipped after a long healthy time; the label lag comes
    on top. None: not even ten million labels a week are enough, because a bucket is longer than `weeks`.
    """
    rate = rise * tolerance
    fraction("rise * tolerance", rate)
    fraction("quantile", quantile)
    if not (rise > 1.0 and weeks > 0.0):
        raise ValueError(f"rise = {rise!r}, weeks = {weeks!r}: a factor above 1 and a positive time are allowed")
    if weeks * WEEK < bucket:
        return None

    def enough(exponent: int) -> bool:
        setting = _setting(tolerance, risk, 1.03**exponent, bucket, service_life, 0)
        rng = np.random.default_rng(seed)
        before = 2.0 / 3.0 * tolerance if healthy is None else healthy
        began = _started(setting, before, _affordable(streams, setting.restarts + 1), rng, lambda _: None)
        needed = labels_to_crossing(began, rate, math.floor(weeks * WEEK / bucket), rng)
        return float(np.isfinite(needed).mean()) >= quantile

    guess = math.ceil(math.log(max(2.0, 2.0 * wald_limit(tolerance, risk, rate) / weeks)) / math.log(1.03))
    low, high, step = 0, guess, 8
    while not enough(high):
        low, high, step = high, high + step, 2 * step
        if 1.03**high > 1e7:
            return None
        if progress is not None:
            progress(0.2)
    down = 8
    while high - down > low and enough(high - down):
        high, down = high - down, 2 * down
    low = max(low, high - down)
    first = high - low
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if enough(middle) else (middle, high)
        if progress is not None:
            progress(1.0 - 0.8 * math.log(max(high - low, 1) + 1) / math.log(first + 2))
    return math.ceil(1.03**high)


def _setting(
    tolerance: float, risk: float, labels_per_week: float, bucket: int, service_life: int, window_at_least: int
) -> Setting:
    fraction("tolerance", tolerance)
    fraction("risk", risk)
    if not (labels_per_week > 0.0 and math.isfinite(labels_per_week)):
        raise ValueError(f"labels_per_week = {labels_per_week!r}: a positive number is allowed")
    if not (bucket > 0 and service_life > 0 and window_at_least >= 0):
        raise ValueError(
            f"bucket = {bucket!r}, service_life = {service_life!r}, window_at_least = {window_at_least!r}: "
            "positive numbers of seconds are allowed, 0 for no least window"
        )
    restarts = windows.restarts(service_life, bucket)
    young = -(-window_at_least // bucket)
    return Setting(tolerance, risk, restarts, labels_per_week * bucket / WEEK, young)


def _affordable(streams: int, buckets: int) -> int:
    return max(100, min(streams, int(_WORK / (156 * buckets))))


def _started(setting: Setting, healthy: float, count: int, rng: np.random.Generator, tell: Progress) -> Streams:
    buckets = setting.restarts + 1
    early, late = (math.floor(part * buckets) for part in _JUMPS)
    return healthy_streams(setting, healthy, rng.integers(early, max(late, early + 1), count), rng, tell)


def _from_release(setting: Setting, rate: float, life_labels: int, labels_per_week: float) -> Delay:
    own = replace(setting, risk=setting.risk * windows.BREACH.release)
    longest = max(1, min(life_labels, _LONGEST))
    horizon = min(longest, max(1, int(4.0 * wald_limit(own.tolerance, own.risk, rate))))
    found = operating_characteristics(own.tolerance, own.risk, rate, horizon)
    while found.labels_quantile(NOTICED) is None and horizon < longest:
        horizon = min(longest, 3 * horizon)
        found = operating_characteristics(own.tolerance, own.risk, rate, horizon)
    return _exact_delay(found, labels_per_week)


def _exact_delay(found: OperatingCharacteristics, labels_per_week: float) -> Delay:
    median, p90 = found.median_labels, found.labels_quantile(NOTICED)
    return Delay(
        median, p90, _weeks(median, labels_per_week), _weeks(p90, labels_per_week), float(found.alarm_probability[-1])
    )


def _delay(labels: Floats, labels_per_week: float) -> Delay:
    if not labels.size:
        return Delay(None, None, None, None, math.nan)
    ordered = np.sort(labels)
    median, p90 = (_whole(ordered[math.ceil(q * len(ordered)) - 1]) for q in (0.5, NOTICED))
    noticed = float(np.isfinite(labels).mean())
    return Delay(median, p90, _weeks(median, labels_per_week), _weeks(p90, labels_per_week), noticed)


def _whole(value: float) -> int | None:
    return int(value) if math.isfinite(value) else None


def _weeks(labels: int | None, labels_per_week: float) -> float | None:
    return None if labels is None else labels / labels_per_week
