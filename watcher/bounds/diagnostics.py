"""What is shown beside a verdict and has no influence on it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import chdtrc

from watcher.bounds.designs import LOSS, PPM
from watcher.bounds.evidence import evidence
from watcher.bounds.mixture import Floats
from watcher.bounds.weighted import decimals, rounded

LEVEL: Final = 1e-4
"""Of the tests of the mean weight and of over-dispersion."""
EXPECTED: Final = 5.0
"""Errors that every group of the chi-square test expects at least."""


def labelled_share(labels: ArrayLike, predictions: ArrayLike) -> Floats:
    """labels/predictions, in [0, 1]; NaN where there is no prediction. Broadcasts; ValueError when labels > predictions."""
    n, every = (np.asarray(value, dtype=np.float64) for value in (labels, predictions))
    if not ((n >= 0) & (n <= every)).all():
        raise ValueError("labels: counts from 0 to predictions are allowed")
    return np.asarray(np.divide(n, every, out=np.full(np.broadcast(n, every).shape, np.nan), where=every > 0))


def tipping_point(labels: ArrayLike, rate: ArrayLike, predictions: ArrayLike, tolerance: ArrayLike) -> Floats:
    """The error rate among the unlabelled at which the promise would be broken: (eps N - u n)/(N - n).

    `labels` n <= `predictions` N, `rate` u the error rate of the labelled (estimate or upper limit). NaN where nothing is
    unlabelled; <= 0: broken by the labelled alone; > 1: cannot be broken by the unlabelled. Broadcasts.
    """
    n, u, every, eps = np.broadcast_arrays(
        *(np.asarray(value, dtype=np.float64) for value in (labels, rate, predictions, tolerance))
    )
    if not ((n >= 0) & (n <= every)).all():
        raise ValueError("labels: counts from 0 to predictions are allowed")
    missing = every - n
    # eps + (eps - u) n/(N - n): no difference of two large products.
    share = np.divide(n, missing, out=np.zeros(n.shape), where=missing > 0)
    return np.asarray(np.where(missing > 0, eps + (eps - u) * share, np.nan))


@dataclass(frozen=True, slots=True)
class OverDispersion:
    """Are errors bunched more than independent labels of one common rate would be?"""

    statistic: float
    """Chi-square: sum (k - n p)^2/(n p (1-p)), p the common rate."""
    degrees: int
    ratio: float
    """statistic/degrees: near 1 when labels are independent, near 1 + (cluster size - 1) * correlation in clusters of one
    size. NaN without degrees."""
    chance: float
    """Of so large a chi-square."""
    clustered: bool
    """The chance is below 1e-4."""


def over_dispersion(labels: ArrayLike, errors: ArrayLike) -> OverDispersion:
    """Chi-square test of one common error rate; descriptive, meant for the last 28 sealed buckets once per sealed week.

    Counts of shape (B,): are the buckets more unlike than chance (between buckets)? Counts of shape (P, B): are the P parts
    of a bucket, each bucket with a rate of its own (within buckets)? Neighbouring buckets are first merged until 5 errors
    are expected in every group (Cochran 1954): with 0.4 expected the chi-square quantile is exceeded 8 times too often,
    and merging leaves the over-dispersion of clusters inside a bucket as it is. A rate that drifts, or differs between the
    parts, shows too: the flag says "not independent labels of one rate". ValueError names the argument.
    """
    n, k = np.broadcast_arrays(np.asarray(labels, dtype=np.float64), np.asarray(errors, dtype=np.float64))
    if not ((k >= 0) & (k <= n)).all():
        raise ValueError("errors: counts from 0 to labels are allowed")
    if n.ndim not in (1, 2):
        raise ValueError(f"labels has {n.ndim} axes: (B,) or (P, B) is allowed")
    if n.ndim == 1:
        rate = k.sum() / max(n.sum(), 1.0)
        groups = _merged(n[None], k[None], rate)
        tables = [(np.array([g[0][0] for g in groups]), np.array([g[1][0] for g in groups]))]
    else:
        tables = _merged(n, k, None)
    parts = [_chi_square(*table) for table in tables]
    statistic, degrees = sum(part[0] for part in parts), sum(part[1] for part in parts)
    if degrees == 0:
        return OverDispersion(statistic, 0, math.nan, 1.0, clustered=False)
    chance = float(chdtrc(degrees, statistic))
    return OverDispersion(statistic, degrees, statistic / degrees, chance, clustered=chance < LEVEL)


def _merged(labels: Floats, errors: Floats, rate: float | None) -> list[tuple[Floats, Floats]]:
    """Runs of buckets, columns of (P, B), added up until every part that has labels expects EXPECTED errors; the rest
    joins the last run.
    """
    groups: list[tuple[Floats, Floats]] = []
    n, k = np.zeros(len(labels)), np.zeros(len(labels))
    for column_n, column_k in zip(labels.T, errors.T, strict=True):
        n, k = n + column_n, k + column_k
        some = n[n > 0]
        p = (k.sum() / n.sum() if some.size else 0.0) if rate is None else rate
        if some.size and some.min() * min(p, 1.0 - p) >= EXPECTED:
            groups.append((n, k))
            n, k = np.zeros(len(labels)), np.zeros(len(labels))
    if groups:
        last_n, last_k = groups.pop()
        groups.append((last_n + n, last_k + k))
    return groups


def _chi_square(labels: Floats, errors: Floats) -> tuple[float, int]:
    n, k = labels[labels > 0], errors[labels > 0]
    if len(n) < 2:
        return 0.0, 0
    p = k.sum() / n.sum()
    return float(((k - n * p) ** 2 / n).sum() / (p * (1.0 - p))), len(n) - 1


@dataclass(frozen=True, slots=True)
class MeanWeight:
    """Does the mean weight of the labelled samples agree with the plan, under which it is 1?"""

    mean: float
    """NaN without labels."""
    evidence_above: float
    """Nats that the mean weight exceeds 1."""
    evidence_below: float
    """Nats that it falls short of 1."""
    off: bool
    """Either reached log(2/1e-4)."""


def mean_weight(labels: ArrayLike, levels: Sequence[str], level: float = LEVEL) -> MeanWeight:
    """Test that the weights average 1, as the plan says, from the labels of each declared level.

    `labels` (L,): labelled samples of each of `levels` (decimal text). weight/w_max lies in [0, 1] and has mean 1/w_max:
    section 1's bounds hold at all times, so a false flag EVER has chance at most `level`, however often it is asked.
    Weights wrong by +25% break the guarantee of the breach (false breach .62 at risk .05): hence the flag.
    """
    if not 0.0 < level < 1.0:
        raise ValueError(f"level = {level!r}: a number strictly between 0 and 1 is allowed")
    weights = decimals(levels, "weight_levels")
    counts = np.asarray(labels)
    if counts.shape != (len(weights),) or (counts < 0).any():
        raise ValueError(
            f"labels has shape {counts.shape}: one count from 0 on for each of {len(weights)} levels is allowed"
        )
    largest, n = max(weights), int(counts.sum())
    total = sum(weight * int(count) for weight, count in zip(weights, counts.tolist(), strict=True))
    millionths = total * PPM / largest
    statistic = np.array([n, math.floor(millionths), math.ceil(millionths)])
    plan = 1 / largest
    above = float(evidence(statistic, min(1.0, rounded(plan, "below")), "above", design=LOSS))
    below = float(evidence(statistic, rounded(plan, "above"), "below", design=LOSS))
    off = max(above, below) >= math.log(2.0 / level)
    return MeanWeight(float(total / n) if n else math.nan, above, below, off)


@dataclass(frozen=True, slots=True)
class ErrorByLag:
    """Error rates of early and late labels side by side; NaN where there are none."""

    early: float
    late: float
    early_labels: int
    late_labels: int


def error_by_lag(
    early_labels: ArrayLike, early_errors: ArrayLike, late_labels: ArrayLike, late_errors: ArrayLike
) -> ErrorByLag:
    """The error rate of labels that came early and of those that came late, over all buckets given."""
    n1, k1, n2, k2 = (int(np.sum(value)) for value in (early_labels, early_errors, late_labels, late_errors))
    if not (0 <= k1 <= n1 and 0 <= k2 <= n2):
        raise ValueError("early_errors, late_errors: counts from 0 to the labels of the same kind are allowed")
    return ErrorByLag(k1 / n1 if n1 else math.nan, k2 / n2 if n2 else math.nan, n1, n2)
