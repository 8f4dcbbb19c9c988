"""Windows share the risk: shares, the total over all windows, the crossing, support, and limits of single windows.

A path is a run of buckets since the release; restart j is the start of bucket j, window j at t the sum of buckets
j..t. Window 0 uses the mixture `LIFE`, every later one `RESTART` (method.md sections 2 and 4).

The total is recorded rounded down to 1e-6 nats; whether it crosses is judged on the recorded value.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from watcher.bounds.designs import UNIFORM, Design
from watcher.bounds.evidence import evidence, lower_limit, upper_limit
from watcher.bounds.mixture import LIFE, RESTART, Floats, Rows, Side

Flags = NDArray[np.bool_]
Indices = NDArray[np.intp]

GRAIN: Final = 1_000_000
"""Totals are recorded in millionths of a nat."""
_CHUNK: Final = 64
"""Windows of one bucket that the search for support evaluates at a time, the shortest first."""


@dataclass(frozen=True, slots=True)
class Budget:
    """How a budget of risk is split over windows: the release, restarts in the service life, restarts after it.

    The three parts sum to 1. Of J restarts in the life each has life/J; restart J + i has after*J/((J+i-1)(J+i)), which
    telescopes to `after`: the watch never ends.
    """

    release: float
    life: float
    after: float

    def shares(self, restarts: int, count: int) -> Floats:
        """Shares of windows 0..count-1 with `restarts` = J >= 1 restarts in the service life."""
        return self.share(np.arange(count), restarts)

    def share(self, index: ArrayLike, restarts: int) -> Floats:
        """The share of a window by its index, any shape."""
        index = np.asarray(index, dtype=np.float64)
        beyond = np.maximum(index, restarts + 1.0)
        after = self.after * restarts / ((beyond - 1.0) * beyond)
        return np.where(index == 0, self.release, np.where(index <= restarts, self.life / restarts, after))

    def remainder(self, restarts: int, count: int) -> float:
        """The sum of the shares of windows count, count + 1, ...: those not yet started."""
        if count <= 0:
            return self.release + self.life + self.after
        if count <= restarts:
            return self.life * ((restarts - count + 1) / restarts) + self.after
        return self.after * (restarts / (count - 1))


BREACH: Final = Budget(release=0.20, life=0.75, after=0.05)
"""Shares of the budget that breaches and lower limits use."""
SUPPORT: Final = Budget(release=0.50, life=0.45, after=0.05)
"""Shares of the budget that support and upper limits use."""


@dataclass(frozen=True, slots=True)
class Crossing:
    """Where a total stands against its threshold at one moment."""

    total: float
    """Nats, rounded down to 1e-6: the recorded value."""
    lower: float
    """The rate at which the total equals the threshold: with the stated risk some window averages above it."""
    likeliest: int
    """The window with the largest share of the total: its start is the likeliest start of a rise, not a bound."""


def restarts(service_life_seconds: int, bucket_seconds: int) -> int:
    """J = max(1, ceil(service_life/bucket) - 1), the number of restarts in the service life."""
    return max(1, -(-service_life_seconds // bucket_seconds) - 1)


def totals(
    buckets: ArrayLike,
    rate: float,
    restarts: int,
    *,
    since: int = 0,
    design: Design = UNIFORM,
    mature: Flags | None = None,
) -> Floats:
    """The total (nats, rounded down to 1e-6) after each bucket since..B-1 of a path.

    `buckets` (B, D) integers; `restarts` = J. `mature` (B - since, B): windows that are old enough at that bucket; a
    started window that is not contributes 0; a window that starts earlier than a mature one must be mature. The number
    for a bucket depends on the buckets up to it alone, bit for bit, whatever `since` is.

    Guarantee (method.md section 2): the chance that a total ever reaches log(1/risk) although every window ending
    then averages <= rate is at most the risk.
    """
    buckets = _path(buckets, design)
    count = len(buckets)
    newest = _newest_mature(mature, since, count)
    lived = np.cumsum(buckets, axis=0)
    ends = np.arange(since, count)
    first = np.where(newest >= 0, evidence(lived[since:], rate, "above", design=design), -np.inf)
    unstarted = [BREACH.remainder(restarts, t + 1) for t in range(since, count)]
    parts = [
        math.log(BREACH.release) + first,
        _restarted(lived, newest, ends, rate, BREACH.share(np.arange(1, count), restarts), design),
        np.log(np.asarray(unstarted, dtype=np.float64)),
    ]
    return _recorded(np.logaddexp.reduce(np.stack(parts), axis=0))


def total(
    windows: ArrayLike, rate: float, restarts: int, *, design: Design = UNIFORM, mature: Flags | None = None
) -> float:
    """The total of one set of windows (J', D), window j in row j, exactly as `totals` gives it; `mature` (J',)."""
    windows = _path(windows, design)
    if not len(windows):
        return float(_recorded(np.log(np.array([BREACH.remainder(restarts, 0)])))[0])
    flags = None if mature is None else np.asarray(mature)[None]
    buckets = windows - np.concatenate([windows[1:], np.zeros_like(windows[:1])])
    return float(totals(buckets, rate, restarts, since=len(windows) - 1, design=design, mature=flags)[0])


def crossing(
    windows: ArrayLike,
    rate: float,
    threshold: float,
    restarts: int,
    *,
    design: Design = UNIFORM,
    mature: Flags | None = None,
) -> Crossing:
    """The total of a set of windows, the rate it speaks of, and the likeliest start.

    `lower` is at least `rate` exactly when the recorded total is at least the threshold: then max(rate, root rounded
    down), else min(root, the next float below rate).
    """
    windows = _path(windows, design)
    recorded = total(windows, rate, restarts, design=design, mature=mature)
    started = np.ones(len(windows), dtype=bool) if mature is None else np.asarray(mature, dtype=bool)
    shares = np.log(BREACH.shares(restarts, len(windows)))
    unstarted = math.log(BREACH.remainder(restarts, len(windows)))

    def weighed(m: float) -> Floats:
        return np.where(started, shares + _each(windows, m, "above", design), -np.inf)

    def reaches(m: float) -> bool:
        return float(np.logaddexp.reduce(np.append(weighed(m), unstarted))) >= threshold

    if recorded >= threshold:
        lower = max(rate, _root(reaches, rate, 1.0))
    else:
        lower = min(_root(reaches, 0.0, rate), math.nextafter(rate, 0.0))
    return Crossing(total=recorded, lower=lower, likeliest=int(np.argmax(weighed(rate))) if len(windows) else 0)


def supports(
    buckets: ArrayLike,
    rate: float,
    risk: float,
    restarts: int,
    *,
    since: int = 0,
    long_enough: Flags,
    design: Design = UNIFORM,
) -> Indices:
    """For each bucket since..B-1 the shortest long-enough window whose upper limit is at most the rate; -1 if none.

    `risk` is that of the cell; window j has its `SUPPORT` share. `long_enough` (B - since, B): a window that starts
    earlier than a long-enough one must be long enough. All upper limits hold at once, so the window may be chosen
    after looking (method.md section 4).
    """
    buckets = _path(buckets, design)
    count = len(buckets)
    newest = _newest_mature(long_enough, since, count)
    before = np.concatenate([np.zeros_like(buckets[:1]), np.cumsum(buckets, axis=0)])
    lived = before[1 + since :]
    found = _shortest(before, lived, newest, rate, _needed(risk, SUPPORT.shares(restarts, count)), design)
    open_ = np.flatnonzero((found < 0) & (newest >= 0))
    first = evidence(lived[open_], rate, "below", design=design)
    found[open_] = np.where(first >= float(_needed(risk, SUPPORT.share(0, restarts))), 0, -1)
    return found


def support_of(
    windows: ArrayLike, rate: float, risk: float, restarts: int, *, long_enough: Flags, design: Design = UNIFORM
) -> int:
    """The shortest long-enough window of one set (J', D) whose upper limit is at most the rate; -1 if none."""
    windows = _path(windows, design)
    if not len(windows):
        return -1
    buckets = windows - np.concatenate([windows[1:], np.zeros_like(windows[:1])])
    flags = np.asarray(long_enough)[None]
    return int(supports(buckets, rate, risk, restarts, since=len(windows) - 1, long_enough=flags, design=design)[0])


def window_limits(
    statistics: ArrayLike, index: ArrayLike, risk: ArrayLike, restarts: int, *, design: Design = UNIFORM
) -> tuple[Floats, Floats]:
    """Shown limits of windows: each side at risk * share of its own budget, for the window of that index.

    `statistics` (..., D), `index` (...) and `risk` (...) broadcast. Lower limits of all windows hold at once at all
    times with chance >= 1 - risk, and so do upper limits.
    """
    statistics, index, risk = np.asarray(statistics), np.asarray(index), np.asarray(risk, dtype=np.float64)
    shape = np.broadcast_shapes(statistics.shape[:-1], index.shape, risk.shape)
    rows = np.broadcast_to(statistics, (*shape, design.dimension))
    index, risk = np.broadcast_to(index, shape), np.broadcast_to(risk, shape)
    lower, upper = np.empty(shape), np.empty(shape)
    for chosen, mixture in ((index == 0, LIFE), (index != 0, RESTART)):
        at, part = index[chosen], risk[chosen]
        goal = _needed(part, BREACH.share(at, restarts))
        lower[chosen] = lower_limit(rows[chosen], goal, design=design, mixture=mixture)
        goal = _needed(part, SUPPORT.share(at, restarts))
        upper[chosen] = upper_limit(rows[chosen], goal, design=design, mixture=mixture)
    return lower, upper


def _needed(risk: ArrayLike, shares: Floats) -> Floats:
    return np.asarray(-np.log(np.asarray(risk) * shares))


def _path(rows: ArrayLike, design: Design) -> Rows:
    rows = np.asarray(rows)
    if rows.ndim != 2 or rows.shape[1] != design.dimension:
        raise ValueError(f"buckets or windows have shape {rows.shape}: (number, {design.dimension}) is needed")
    return rows


def _recorded(total: Floats) -> Floats:
    return np.asarray(np.floor(total * GRAIN) / GRAIN)


def _newest_mature(flags: Flags | None, since: int, count: int) -> Indices:
    """The newest flagged window at each bucket since..count-1, -1 where none is; windows not yet started are left."""
    ends = np.arange(since, count)
    if flags is None:
        return ends
    flags = np.asarray(flags, dtype=bool)
    if flags.shape != (count - since, count):
        raise ValueError(f"flags of windows have shape {flags.shape}: ({count - since}, {count}) is needed")
    started = flags & (np.arange(count) <= ends[:, None])
    number = started.sum(axis=1)
    if not np.array_equal(started, np.arange(count) < number[:, None]):
        raise ValueError("flags of windows have a gap: a window that starts earlier is older and must be flagged too")
    return np.asarray(number - 1, dtype=np.intp)


def _restarted(lived: Rows, newest: Indices, ends: Indices, rate: float, shares: Floats, design: Design) -> Floats:
    """The log of sum_{1 <= j <= newest} share_j * exp(evidence_j), by prefix sums: every bucket costs one step.

    exp(evidence_j(t)) = sum_g w_g exp(Y_g(t) - Y_g(j - 1)) with Y_g linear in the counts up to a bucket.
    """
    result = np.full(len(ends), -np.inf)
    if len(lived) < 2:
        return result
    coefficients = design.coefficients(np.asarray(rate, dtype=np.float64), "above", RESTART.shifts)
    grown = lived[:, 0, None] * coefficients[0]
    for d in range(1, design.dimension):
        grown += lived[:, d, None] * coefficients[d]
    started = np.logaddexp.accumulate(np.log(shares)[:, None] - grown[:-1], axis=0)
    some = np.flatnonzero(newest >= 1)
    exponents = grown[ends[some]] + started[newest[some] - 1]
    exponents += RESTART.log_weights
    top = exponents.max(axis=1, keepdims=True)
    result[some] = top[:, 0] + np.log(np.cumsum(np.exp(exponents - top), axis=1)[:, -1])
    return result


def _each(windows: Rows, rate: float, side: Side, design: Design) -> Floats:
    """Evidence of every window of one set."""
    first = evidence(windows[:1], rate, side, design=design, mixture=LIFE)
    return np.concatenate([first, evidence(windows[1:], rate, side, design=design, mixture=RESTART)])


def _root(reaches: Callable[[float], bool], low: float, high: float) -> float:
    """The largest rate in [low, high] that reaches, to a relative 1e-12, rounded down; `low` where none does."""
    if reaches(high):
        return high
    if not reaches(low):
        return low
    while high - low > 1e-12 * high:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if reaches(middle) else (low, middle)
    return low


def _shortest(before: Rows, lived: Rows, newest: Indices, rate: float, needed: Floats, design: Design) -> Indices:
    """The shortest window j >= 1 with evidence below >= needed_j, a chunk of windows at a time, -1 where none is."""
    found = np.full(len(lived), -1, dtype=np.intp)
    open_ = np.flatnonzero(newest >= 1)
    offset = 0
    while open_.size:
        index = newest[open_, None] - np.arange(offset, offset + _CHUNK)
        which, place = np.nonzero(index >= 1)
        j = index[which, place]
        rows = lived[open_[which]] - before[j]
        # No window whose ceiling stays below what it needs can support anything: leaving it out changes nothing.
        likely = design.ceiling(rows, rate, "below") >= needed[j]
        which, j, rows = which[likely], j[likely], rows[likely]
        holds = evidence(rows, rate, "below", design=design, mixture=RESTART) >= needed[j]
        np.maximum.at(found, open_[which[holds]], j[holds])
        offset += _CHUNK
        open_ = open_[(found[open_] < 0) & (newest[open_] - offset >= 1)]
    return found
