"""The verdict of a promise, brute force, from the rows alone: every day, every window, every point of the mixture.

It is written from the published description of the method and shares no code with the product: plain numpy and math,
nothing cached, nothing skipped, all logarithms taken afresh. Slow on purpose; a year of days takes seconds.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

DAY = 86_400
MICRO = 1_000_000


class Row(NamedTuple):
    """One line of a source: who, when, what was said, what turned out (None while nobody knows), and when that was known."""

    id: str
    revision: int
    time: int
    labelled_at: int | None
    prediction: str
    label: str | None


@dataclass(frozen=True)
class Daily:
    """Counts of each day since the release, as the seal of the day saw them."""

    labels: np.ndarray
    errors: np.ndarray
    late: int
    """Labels that came at or after the end of their day plus the lag: never counted."""


@dataclass(frozen=True)
class Breach:
    """The first day at which the total was at or over the threshold."""

    day: int
    """Index of the day at whose end it crossed; the release day is 0."""
    since: int
    """Index of the day at which the heaviest window starts."""
    total: float
    lower: float
    labels: int
    """Of the heaviest window, as `errors`."""
    errors: int
    share: float


def daily(rows: list[Row], *, released: int, lag: int, days: int) -> Daily:
    """Count each day as its seal does: one row an id (the highest revision known in time), late labels left out."""
    known: dict[str, Row] = {}
    latest: dict[str, Row] = {}
    for row in rows:
        if not released <= row.time < released + days * DAY:
            continue
        seal = (row.time - released) // DAY * DAY + released + DAY + lag
        in_time = row.label is not None and row.labelled_at is not None and row.labelled_at < seal
        if in_time and (row.id not in known or row.revision > known[row.id].revision):
            known[row.id] = row
        if row.id not in latest or row.revision > latest[row.id].revision:
            latest[row.id] = row
    labels, errors = np.zeros(days, int), np.zeros(days, int)
    for row in known.values():
        day = (row.time - released) // DAY
        labels[day] += 1
        errors[day] += row.prediction != row.label
    late = sum(row.label is not None and name not in known for name, row in latest.items())
    return Daily(labels, errors, late)


def _mixture(restart: int) -> tuple[np.ndarray, np.ndarray]:
    """Sizes and weights of the log-odds shifts: 64 geometric ones for the release, 28 further ones for a restart."""
    wide = np.array([0.001 * 3000.0 ** (i / 63) for i in range(64)])
    weight = np.sqrt(wide) / np.sqrt(wide).sum()
    if restart == 0:
        return wide, weight
    narrow = np.array([0.25 + (1.6 - 0.25) * i / 27 for i in range(28)])
    return np.concatenate([wide, narrow]), np.concatenate([0.2 * weight, np.full(28, 0.8 / 28)])


def _share(restart: int, split: tuple[float, float, float], planned: int) -> float:
    """The part of the risk of one restart: the release, a planned bucket start, or one beyond the service life."""
    first, life, tail = split
    if restart == 0:
        return first
    if restart <= planned:
        return life / planned
    i = restart - planned
    return tail * planned / ((planned + i - 1) * (planned + i))


def _evidence(restart: int, labels: np.ndarray, errors: np.ndarray, rate: float, sign: int) -> np.ndarray:
    """log sum w exp(lam k - n log(1 - m + m e^lam)), the shifts all positive (sign 1) or all negative (sign -1)."""
    size, weight = _mixture(restart)
    lam = sign * size
    exponent = np.multiply.outer(errors, lam) - np.multiply.outer(labels, np.log(1 - rate + rate * np.exp(lam)))
    peak = exponent.max(axis=-1)
    return peak + np.log((weight * np.exp(exponent - peak[..., None])).sum(axis=-1))


def _windows(counts: Daily, day: int) -> tuple[np.ndarray, np.ndarray]:
    """Labels and errors of every window that ends with this day; entry j starts with day j."""
    labels = np.array([counts.labels[j : day + 1].sum() for j in range(day + 1)])
    errors = np.array([counts.errors[j : day + 1].sum() for j in range(day + 1)])
    return labels, errors


def _terms(counts: Daily, day: int, rate: float, planned: int) -> tuple[np.ndarray, float]:
    """log(share_j) + evidence_j of every started window, and the share of those that have not started."""
    labels, errors = _windows(counts, day)
    shares = np.array([_share(j, (0.20, 0.75, 0.05), planned) for j in range(day + 1)])
    parts = np.log(shares)
    parts[:1] += _evidence(0, labels[:1], errors[:1], rate, 1)
    parts[1:] += _evidence(1, labels[1:], errors[1:], rate, 1)
    return parts, 1.0 - math.fsum(shares)


def total(counts: Daily, day: int, rate: float, planned: int) -> float:
    """The evidence of all windows that end with this day, in nats, not rounded."""
    parts, waiting = _terms(counts, day, rate, planned)
    peak = max(0.0, float(parts.max()))
    return peak + math.log(math.fsum(np.exp(parts - peak)) + waiting * math.exp(-peak))


def recorded(value: float) -> float:
    """A total as it is recorded and judged: rounded down to a millionth of a nat."""
    return math.floor(value * MICRO) / MICRO


def planned_restarts(life: int) -> int:
    """Bucket starts after the release in a service life of so many seconds, for daily buckets."""
    return max(1, math.ceil(life / DAY) - 1)


def breach(counts: Daily, *, tolerance: float, risk: float, planned: int) -> Breach | None:
    """The first breach, or None if the promise stood to the end."""
    threshold = math.log(1 / risk)
    for day in range(len(counts.labels)):
        value = recorded(total(counts, day, tolerance, planned))
        if value < threshold:
            continue
        parts, _ = _terms(counts, day, tolerance, planned)
        since = int(parts.argmax())
        labels, errors = _windows(counts, day)
        share = _share(since, (0.20, 0.75, 0.05), planned)
        lower = _root(counts, day, threshold, planned, tolerance)
        return Breach(day, since, value, lower, int(labels[since]), int(errors[since]), share)
    return None


def _root(counts: Daily, day: int, threshold: float, planned: int, tolerance: float) -> float:
    """The rate at which the total equals the threshold, by halving; the total falls as the rate grows."""
    low, high = tolerance, 1.0 - 1e-12
    for _ in range(60):
        middle = (low + high) / 2
        if total(counts, day, middle, planned) >= threshold:
            low = middle
        else:
            high = middle
    return low


def support(counts: Daily, day: int, *, tolerance: float, risk: float, planned: int, at_least: int) -> int | None:
    """First day of the shortest window, ending with this day and at least so many days long, whose upper limit is at
    most the tolerance; None if there is none. Whether a warning stands is another question."""
    labels, errors = _windows(counts, day)
    for j in range(day + 1 - at_least, -1, -1):
        share = _share(j, (0.50, 0.45, 0.05), planned)
        against = float(_evidence(j, labels[j], errors[j], tolerance, -1))
        if against >= math.log(1 / (risk * share)):
            return j
    return None


def upper_limit(counts: Daily, day: int, since: int, *, risk: float, planned: int) -> float:
    """The upper limit of the window of days `since` to `day` at its part of the risk of support, by halving."""
    labels, errors = counts.labels[since : day + 1].sum(), counts.errors[since : day + 1].sum()
    threshold = math.log(1 / (risk * _share(since, (0.50, 0.45, 0.05), planned)))
    low, high = errors / labels, 1.0 - 1e-12
    for _ in range(60):
        middle = (low + high) / 2
        if float(_evidence(since, labels, errors, middle, -1)) >= threshold:
            high = middle
        else:
            low = middle
    return high


def warnings(counts: Daily, *, tolerance: float, every: int, calm: int = 28) -> list[bool]:
    """Whether a warning stands after each day: raised when the sum over all windows since the newest reset is at or
    over `every`, which resets; over once the fresh sum stayed below its square root for `calm` days."""
    standing, first, last_loud, found = False, 0, 0, []
    for day in range(len(counts.labels)):
        value = 0.0
        for j in range(first, day + 1):
            labels, errors = counts.labels[j : day + 1].sum(), counts.errors[j : day + 1].sum()
            value += math.exp(min(700.0, float(_evidence(1, labels, errors, tolerance, 1))))
        if value >= every:
            standing, first, last_loud = True, day + 1, day
        elif standing and value >= math.sqrt(every):
            last_loud = day
        elif standing and day - last_loud >= calm:
            standing = False
        found.append(standing)
    return found


def log_tail(errors: int, labels: int, rate: float) -> float:
    """log P(Binomial(labels, rate) >= errors), exact, term by term."""
    terms = [
        math.lgamma(labels + 1)
        - math.lgamma(k + 1)
        - math.lgamma(labels - k + 1)
        + k * math.log(rate)
        + (labels - k) * math.log1p(-rate)
        for k in range(errors, labels + 1)
    ]
    peak = max(terms)
    return peak + math.log(math.fsum(math.exp(term - peak) for term in terms))
