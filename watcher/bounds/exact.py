"""Exact binomial bounds for one fixed sample, and exact operating characteristics of one window."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import betainc, betaincc, betainccinv, betaincinv

from watcher.bounds.arguments import counts, fraction, fractions
from watcher.bounds.evidence import evidence
from watcher.bounds.mixture import Floats

_NUDGES: Final = 64
_HALVINGS: Final = 120
_FORGOTTEN: Final = 1e-30
"""States less likely than this are dropped at the ends of the band: over 1e6 labels less than 1e-20 in all."""


@dataclass(frozen=True, slots=True)
class Bounds:
    """Lower and upper limits, arrays or numbers of one shape, fractions in [0, 1]."""

    lower: Floats
    upper: Floats


def exact_bounds(labels: ArrayLike, errors: ArrayLike, risk: ArrayLike) -> Bounds:
    """The exact binomial interval (Clopper, Pearson 1934) of one sample of fixed size, risk/2 a side.

    `labels` n >= 0, `errors` 0 <= k <= n, `risk` in (0, 1); they broadcast. Its coverage is at least 1 - risk for ONE
    look at a sample whose size does not depend on the outcomes; looked at again and again it is wrong far more often.
    Rounded outward; [0, 1] without labels. Raises ValueError for impossible counts.
    """
    labels, errors = counts(labels, errors)
    half = fractions("risk", risk) / 2.0
    return Bounds(lower=_lower(labels, errors, half)[()], upper=_upper(labels, errors, half)[()])


def exact_upper(labels: ArrayLike, errors: ArrayLike, risk: ArrayLike) -> Floats:
    """The one-sided exact binomial upper limit at the whole risk; otherwise as `exact_bounds`."""
    labels, errors = counts(labels, errors)
    result: Floats = _upper(labels, errors, fractions("risk", risk))[()]
    return result


def _lower(labels: Floats, errors: Floats, risk: Floats) -> Floats:
    labels, errors, risk = np.broadcast_arrays(labels, errors, risk)
    open_ = errors > 0
    k, rest = np.where(open_, errors, 1.0), labels - errors + 1.0
    return np.where(open_, _outward(betainc, k, rest, risk, betaincinv(k, rest, risk), end=0.0), 0.0)


def _upper(labels: Floats, errors: Floats, risk: Floats) -> Floats:
    labels, errors, risk = np.broadcast_arrays(labels, errors, risk)
    open_ = errors < labels
    k, rest = errors + 1.0, np.where(open_, labels - errors, 1.0)
    return np.where(open_, _outward(betaincc, k, rest, risk, betainccinv(k, rest, risk), end=1.0), 1.0)


def _outward(
    tail: Callable[[Floats, Floats, Floats], Floats],
    k: Floats,
    rest: Floats,
    risk: Floats,
    found: Floats,
    *,
    end: float,
) -> Floats:
    """The limit nearest to `found` whose tail, as computed, is at most the risk; the tail vanishes towards `end`.

    The library's inverse is not taken at its word: at 1,000 errors in 1e9 labels scipy 1.17 is wrong by a factor of 2.
    """
    wrong = np.abs(tail(k, rest, found) / risk - 1.0) > 1e-6
    found = np.where(wrong, end, found)
    if wrong.any():
        found[wrong] = _halved(tail, k[wrong], rest[wrong], risk[wrong], end)
    for power in range(_NUDGES):
        wide = tail(k, rest, found) > risk
        if not wide.any():
            break
        further = np.minimum(found, 1.0 - found) * 2.0 ** (power - 52) * (1.0 if end else -1.0)
        found = np.where(wide, np.nextafter(found + further, end), found)
    return np.asarray(np.clip(found, 0.0, 1.0))


def _halved(
    tail: Callable[[Floats, Floats, Floats], Floats], k: Floats, rest: Floats, risk: Floats, end: float
) -> Floats:
    outer, inner = np.full(k.shape, end), np.full(k.shape, 1.0 - end)
    for _ in range(_HALVINGS):
        middle = 0.5 * (outer + inner)
        reached = tail(k, rest, middle) <= risk
        outer, inner = np.where(reached, middle, outer), np.where(reached, inner, middle)
    return outer


@dataclass(frozen=True, slots=True)
class OperatingCharacteristics:
    """When one window raises a breach, a look after each label, while the error rate is constant."""

    tolerance: float
    risk: float
    rate: float
    horizon: int
    alarm_probability: Floats = field(repr=False)
    """Shape (horizon + 1,): entry n is the chance that the breach was raised by label n."""

    @property
    def mean_labels(self) -> float:
        """The mean number of labels until the breach or the horizon, whichever comes first."""
        return float((1.0 - self.alarm_probability[:-1]).sum())

    @property
    def median_labels(self) -> int | None:
        """Labels by which the breach is raised with chance 1/2; None: not within the horizon."""
        return self.labels_quantile(0.5)

    def labels_quantile(self, q: float) -> int | None:
        """Labels by which the breach is raised with chance q in (0, 1); None: not within the horizon."""
        place = int(np.searchsorted(self.alarm_probability, fraction("q", q)))
        return place if place <= self.horizon else None


def operating_characteristics(tolerance: float, risk: float, rate: float, horizon: int) -> OperatingCharacteristics:
    """The exact distribution of the first label at which evidence above the tolerance reaches log(1/risk).

    `tolerance`, `risk` and `rate` in (0, 1), `horizon` >= 1 labels. A forward pass over (labels, errors); counts are
    monotone in every single error probability, so rate = tolerance is the worst case over all drifting rates at or
    below the tolerance (method.md section 7). Raises ValueError outside these ranges.
    """
    tolerance, risk, rate = fraction("tolerance", tolerance), fraction("risk", risk), fraction("rate", rate)
    if isinstance(horizon, bool) or int(horizon) != horizon or horizon < 1:
        raise ValueError(f"horizon = {horizon!r}: a whole number of labels, at least 1, is needed")
    horizon = int(horizon)
    needed = breaking_errors(np.arange(1, horizon + 1), tolerance, math.log(1.0 / risk))
    return OperatingCharacteristics(tolerance, risk, rate, horizon, _first_crossing(needed, rate))


def breaking_errors(labels: NDArray[np.int64], tolerance: float, threshold: float) -> NDArray[np.int64]:
    """The least number of errors among n labels with evidence above the tolerance >= threshold; n + 1: none is enough.

    Evidence grows with the errors, so the least number is found by halving, for all n at once.
    """
    labels = np.asarray(labels, dtype=np.int64)
    low = np.floor(labels * tolerance).astype(np.int64)
    high = labels + 1
    # A bracket of the size of the answer saves rounds; where it is too narrow the wide one stays.
    spread = threshold + 2.0 + 0.5 * np.log1p(labels)
    reach = labels * tolerance + np.sqrt(2.0 * labels * tolerance * (1.0 - tolerance) * spread) + 3.0 * spread
    near = np.minimum(np.ceil(reach).astype(np.int64), high)
    enough = evidence(np.stack([labels, np.minimum(near, labels)], axis=-1), tolerance, "above") >= threshold
    high = np.where(enough, np.minimum(near, labels), high)
    while True:
        open_ = np.flatnonzero(high - low > 1)
        if not open_.size:
            return high
        middle = (low[open_] + high[open_]) // 2
        enough = evidence(np.stack([labels[open_], middle], axis=-1), tolerance, "above") >= threshold
        high[open_] = np.where(enough, middle, high[open_])
        low[open_] = np.where(enough, low[open_], middle)


def _first_crossing(needed: NDArray[np.int64], rate: float) -> Floats:
    """The chance of errors >= needed at or before each label, errors growing by Bernoulli(rate)."""
    result = np.zeros(len(needed) + 1)
    alive, first, alarm = np.ones(1), 0, 0.0
    for n, limit in enumerate(needed.tolist(), start=1):
        following = np.empty(len(alive) + 1)
        np.multiply(alive, 1.0 - rate, out=following[:-1])
        following[-1] = 0.0
        following[1:] += rate * alive
        cut = max(limit - first, 0)
        if cut < len(following):
            alarm += float(following[cut:].sum())
            following = following[:cut]
        result[n] = alarm
        if n % 32 == 0:
            first, following = _trimmed(first, following)
        if not following.size:
            result[n:] = alarm
            break
        alive = following
    return np.minimum(result, 1.0)


def _trimmed(first: int, alive: Floats) -> tuple[int, Floats]:
    likely = np.flatnonzero(alive > _FORGOTTEN)
    if not likely.size:
        return first, alive[:0]
    return first + int(likely[0]), alive[likely[0] : likely[-1] + 1]
