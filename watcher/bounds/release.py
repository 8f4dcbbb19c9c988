"""What may be promised at release, and how many labels that takes (method.md section 6).

Every bound here is for ONE look at a sample whose size was fixed beforehand. Only forms that are theorems are offered: the
growth function is never multiplied with a Hoeffding tail on the training sample itself.
"""

from __future__ import annotations

import math
import operator
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import betaincc

from watcher.bounds.arguments import fraction, fractions
from watcher.bounds.evidence import lower_limit, upper_limit
from watcher.bounds.exact import exact_bounds, exact_upper
from watcher.bounds.mixture import Floats
from watcher.bounds.weighted import Weighted

_OUTWARD: Final = 1e-12
"""Relative step outward, above the rounding error of a logarithm and a root."""
_MOST_LABELS: Final = 10_000_000
PAIRS: Final = Weighted(("0.5", "1"))
"""Old and new model on the same samples: a tie scores 1/2, an error of the new one alone 1, of the old one alone 0."""


@dataclass(frozen=True, slots=True)
class Certificate:
    """What a hold-out sample bears out, with what it was made of; rates are fractions, rounded up."""

    labels: int
    errors: int
    risk: float
    models: int
    estimate: float
    exact: float
    """Exact binomial upper limit at risk/models: the tolerance that may be promised."""
    hoeffding: float
    """errors/labels + sqrt(log(models/risk)/(2 labels)), at most 1: weaker, shown beside."""

    def bears_out(self, tolerance: float) -> bool:
        """True when the promise "at most `tolerance`" is wrong with chance at most the risk."""
        return self.exact <= tolerance


@dataclass(frozen=True, slots=True)
class ClassBound:
    """A uniform bound over a class of hypotheses, from the TRAINING sample; rates are fractions."""

    labels: int
    training_errors: int
    risk: float
    deviation: float
    """With chance 1 - risk no hypothesis of the class is further than this from its training error."""
    tolerance: float
    """training error + deviation, at most 1: what may be promised of whichever hypothesis was chosen."""
    form: str
    """The theorem used."""


@dataclass(frozen=True, slots=True)
class Relative:
    """A promise "at most the baseline's error + margin" turned into rates to test against."""

    breach_rate: float
    """Upper limit of the baseline + margin: breach is tested against it, at `risk`."""
    support_rate: float
    """Lower limit of the baseline + margin: support is tested against it, at `risk`."""
    risk: float
    """What the baseline's limits left of the promise's risk."""
    baseline_risk: float


@dataclass(frozen=True, slots=True)
class LabelsNeeded:
    """The smallest hold-out that certifies."""

    labels: int
    errors_allowed: int
    power: float
    """The chance that the sample certifies, at the assumed true error rate."""


def certify(labels: int, errors: int, risk: float, models: int = 1) -> Certificate:
    """The tolerance that a hold-out sample bears out, one look (Clopper, Pearson 1934; Hoeffding 1963).

    `labels` >= 1, 0 <= `errors` <= `labels`, `risk` in (0, 1), `models` >= 1: how many models fixed beforehand were
    compared on this sample (union bound, risk/models each; also the size of a finite class, on the training sample).
    The chance that the true error of the model chosen exceeds `exact` is at most the risk. ValueError names the argument.

    >>> round(certify(6000, 126, 0.001).exact, 4)
    0.0274
    """
    _counts(labels, errors)
    fraction("risk", risk)
    _at_least_one("models", models)
    log_share = math.log(models / risk)
    hoeffding = min(1.0, errors / labels + math.sqrt(log_share / (2.0 * labels)))
    exact = float(exact_upper(labels, errors, risk / models))
    return Certificate(labels, errors, risk, models, errors / labels, exact, hoeffding)


def growth(points: int, dimension: int) -> int:
    """sum_{i <= d} C(N, i), exact: at most so many dichotomies of N points by a class of VC dimension d.

    Sauer 1972; Shelah 1972; Perles and Pajor independently. `points` >= 0, `dimension` >= 0.
    """
    if points < 0 or dimension < 0:
        raise ValueError(f"points = {points!r}, dimension = {dimension!r}: numbers from 0 on are allowed")
    term, total = 1, 1
    for i in range(1, min(points, dimension) + 1):
        term = term * (points - i + 1) // i
        total += term
    return total


def vc_deviation(labels: int, dimension: int, risk: float) -> float:
    """The e with 4 m(2n) exp(-n e^2/8) = risk (Vapnik, Chervonenkis 1971, theorem 2), rounded up.

    P( sup over the class |training - true error| > e ) <= risk. The theorem asks for n >= 2/e^2, which every solution
    satisfies, as n e^2 = 8 log(4 m(2n)/risk) > 8 log 4.
    """
    _at_least_one("labels", labels)
    _at_least_one("dimension", dimension)
    fraction("risk", risk)
    return math.sqrt(8.0 * _log_ratio(4 * growth(2 * labels, dimension), risk) / labels) * (1.0 + _OUTWARD)


def vc_labels(dimension: int, deviation: float, risk: float) -> int:
    """The smallest n from which on `vc_deviation` is at most `deviation`."""
    fraction("deviation", deviation)
    low, high = 1, 1
    while vc_deviation(high, dimension, risk) > deviation:
        low, high = high, 2 * high
        if high > _MOST_LABELS * 100:
            raise ValueError(f"deviation = {deviation!r}: needs over {high // 2} labels; allow a larger deviation")
    while high - low > 1:
        middle = (low + high) // 2
        if vc_deviation(middle, dimension, risk) > deviation:
            low = middle
        else:
            high = middle
    return high


def vc_class(labels: int, training_errors: int, dimension: int, risk: float) -> ClassBound:
    """What the training error of a hypothesis chosen from a class of VC dimension `dimension` bears out."""
    _counts(labels, training_errors)
    deviation = vc_deviation(labels, dimension, risk)
    return _class_bound(labels, training_errors, risk, deviation, "4 m(2n) exp(-n e^2/8)")


def finite_deviation(labels: int, size: int, risk: float, sides: int = 1) -> float:
    """sqrt(log(sides*size/risk)/(2n)): Hoeffding's bound and a union over the class, one or two sides."""
    _at_least_one("labels", labels)
    _at_least_one("size", size)
    fraction("risk", risk)
    if sides not in (1, 2):
        raise ValueError(f"sides = {sides!r}: 1 (true above training error only) or 2 is allowed")
    return math.sqrt(_log_ratio(sides * size, risk) / (2.0 * labels)) * (1.0 + _OUTWARD)


def finite_labels(size: int, deviation: float, risk: float, sides: int = 1, *, consistent: bool = False) -> int:
    """Training labels with which no hypothesis of a finite class deviates by more than `deviation`.

    `consistent`: the chosen hypothesis makes no training error, log(size/risk)/deviation labels suffice (union over the
    bad hypotheses); else log(sides*size/risk)/(2 deviation^2).
    """
    _at_least_one("size", size)
    fraction("deviation", deviation)
    fraction("risk", risk)
    if sides not in (1, 2):
        raise ValueError(f"sides = {sides!r}: 1 (true above training error only) or 2 is allowed")
    if consistent:
        return math.ceil(_log_ratio(size, risk) / deviation)
    return math.ceil(_log_ratio(sides * size, risk) / (2.0 * deviation**2))


def finite_class(labels: int, training_errors: int, size: int, risk: float) -> ClassBound:
    """What the training error of a hypothesis chosen from a finite class bears out; the exact tail is sharper.

    The tolerance is the exact binomial limit at risk/size (union bound, Langford 2005), never above Hoeffding's.
    """
    found = certify(labels, training_errors, risk, models=size)
    deviation = finite_deviation(labels, size, risk)
    return ClassBound(labels, training_errors, risk, deviation, found.exact, "exact binomial tail at risk/size")


def relative(labels: int, errors: int, margin: float, risk: float, baseline_risk: float) -> Relative:
    """Rates for a promise "at most the baseline's error + margin", the baseline known from a sample of its own.

    `labels`, `errors` of the baseline; 0 <= `margin` < 1; 0 < `baseline_risk` < `risk`. A false breach needs the
    baseline's upper limit to be wrong or the test at `Relative.risk` to be: together at most `risk`; support likewise.
    """
    _counts(labels, errors)
    fraction("risk", risk)
    _margin(margin)
    if not 0.0 < baseline_risk < risk:
        raise ValueError(f"baseline_risk = {baseline_risk!r}: a number above 0 and below risk = {risk!r} is allowed")
    upper = min(1.0, float(exact_upper(labels, errors, baseline_risk)) + margin)
    lower = float(exact_bounds(labels, errors, min(2.0 * baseline_risk, 1.0 - 1e-16)).lower) + margin
    left = float(np.nextafter(risk - baseline_risk, 0.0))
    return Relative(min(1.0, float(np.nextafter(upper, 2.0))), float(np.nextafter(lower, 0.0)), left, baseline_risk)


def paired_statistic(
    labels: ArrayLike, worse: ArrayLike, better: ArrayLike
) -> np.ndarray[tuple[int, ...], np.dtype[np.int64]]:
    """The statistic (..., 3) of `PAIRS`: labels, ties, samples that only the new model got wrong.

    `worse` (`better`): samples that only the new (old) model got wrong. Evidence against "new error <= old error +
    margin" is `evidence(paired_statistic(...), paired_rate(margin), "above", design=PAIRS)`: a bet on
    (1 + err_new - err_old)/2, valid at all times and under drift of both models.
    """
    n, w, b = np.broadcast_arrays(*(np.asarray(value, dtype=np.int64) for value in (labels, worse, better)))
    if (w < 0).any() or (b < 0).any() or (w + b > n).any():
        raise ValueError("worse, better: counts from 0 on with worse + better <= labels are allowed")
    return np.stack([n, n - w - b, w], axis=-1)


def paired_rate(margin: float) -> float:
    """(1 + margin)/2: the rate against which the paired bet is held."""
    _margin(margin)
    return (1.0 + margin) / 2.0


def paired_difference(labels: ArrayLike, worse: ArrayLike, better: ArrayLike, risk: ArrayLike) -> tuple[Floats, Floats]:
    """Limits of the average (new error - old error) on the same samples, each side at `risk`; broadcasts.

    Valid at all times at once (betting form of method.md section 5); in [-1, 1], rounded outward.
    """
    statistics, threshold = paired_statistic(labels, worse, better), -np.log(fractions("risk", risk))
    lower = lower_limit(statistics, threshold, design=PAIRS)
    upper = upper_limit(statistics, threshold, design=PAIRS)
    # 2m - 1 is exact for m in [1/4, 1] and off by half a unit below; one step outward covers it.
    low = np.maximum(np.nextafter(2.0 * lower - 1.0, -2.0), -1.0)
    return low, np.minimum(np.nextafter(2.0 * upper - 1.0, 2.0), 1.0)


def labels_for_errors(
    tolerance: ArrayLike, risk: ArrayLike, errors: ArrayLike
) -> np.ndarray[tuple[int, ...], np.dtype[np.int64]]:
    """The smallest hold-out that bears out `tolerance` at `risk` although it holds `errors` errors; broadcasts.

    The label budget of acceptance sampling (Wilks 1941): P(Bin(n, tolerance) <= errors) <= risk.
    """
    rate, chance = fractions("tolerance", tolerance), fractions("risk", risk)
    rate, chance, k = np.broadcast_arrays(rate, chance, np.asarray(errors, dtype=np.float64))
    if not (k >= 0).all():
        raise ValueError("errors: counts from 0 on are allowed")
    low, high = k.astype(np.int64), (k + 1.0).astype(np.int64)
    growing = _at_most(k, high, rate) > chance
    while growing.any():
        low, high = np.where(growing, high, low), np.where(growing, 2 * high, high)
        growing = _at_most(k, high, rate) > chance
    while (high - low > 1).any():
        middle = (low + high) // 2
        enough = (middle > low) & (_at_most(k, np.maximum(middle, k + 1), rate) <= chance)
        low, high = np.where(enough, low, middle), np.where(enough, middle, high)
    return np.asarray(high)


def labels_needed(tolerance: float, risk: float, power: float, rate: float) -> LabelsNeeded:
    """The smallest hold-out that bears out `tolerance` at `risk` with chance at least `power` if the true error is `rate`.

    0 < `rate` < `tolerance` < 1, `risk` and `power` in (0, 1). Exact binomial; ValueError when 10 million are not enough.
    """
    for name, value in (("tolerance", tolerance), ("risk", risk), ("power", power)):
        fraction(name, value)
    if not 0.0 <= rate < tolerance:
        raise ValueError(f"rate = {rate!r}: a number from 0 to below tolerance = {tolerance!r} is allowed")
    low, high = -1, 1
    while _power(high, tolerance, risk, rate)[1] < power:
        low, high = high, 2 * high
        if _power(high, tolerance, risk, rate)[0] > _MOST_LABELS:
            raise ValueError(f"rate = {rate!r}: over {_MOST_LABELS} labels; promise a tolerance further above the rate")
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if _power(middle, tolerance, risk, rate)[1] >= power else (middle, high)
    # The power wavers a little from one count to the next: a somewhat smaller sample may do as well.
    allowed = np.arange(max(0, high - 64 - high // 50), high + 1)
    labels = labels_for_errors(tolerance, risk, allowed)
    chances = _at_most(allowed, labels, rate)
    i = int(np.argmax(chances >= power))
    return LabelsNeeded(int(labels[i]), int(allowed[i]), float(chances[i]))


def _power(allowed: int, tolerance: float, risk: float, rate: float) -> tuple[int, float]:
    """The smallest sample that certifies with so many errors, and its chance to have no more of them."""
    labels = int(labels_for_errors(tolerance, risk, allowed))
    return labels, float(_at_most(allowed, labels, rate))


def _at_most(errors: ArrayLike, labels: ArrayLike, rate: ArrayLike) -> Floats:
    """P(Bin(labels, rate) <= errors), errors < labels."""
    k = np.asarray(errors, dtype=np.float64)
    return np.asarray(betaincc(k + 1.0, np.asarray(labels) - k, rate))


def _class_bound(labels: int, errors: int, risk: float, deviation: float, form: str) -> ClassBound:
    return ClassBound(labels, errors, risk, deviation, min(1.0, errors / labels + deviation), form)


def _log_ratio(count: int, risk: float) -> float:
    """log(count/risk) for integers of any size."""
    return math.log(count) - math.log(risk)


def _counts(labels: int, errors: int) -> None:
    _at_least_one("labels", labels)
    if not 0 <= _whole(errors) <= labels:
        raise ValueError(f"errors = {errors!r}: a whole number from 0 to labels = {labels!r} is allowed")


def _at_least_one(name: str, value: int) -> None:
    if _whole(value) < 1:
        raise ValueError(f"{name} = {value!r}: a whole number from 1 on is allowed")


def _whole(value: object) -> int:
    """The integer, -1 for anything else (a fractional count would pass for a loss, which is refused here)."""
    try:
        return operator.index(value)  # type: ignore[arg-type]
    except TypeError:
        return -1


def _margin(margin: float) -> None:
    if not 0.0 <= margin < 1.0:
        raise ValueError(f"margin = {margin!r}: a number from 0 to below 1 is allowed")
