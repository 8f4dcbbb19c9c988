"""Samples with planned unequal chances: every label carries one of at most 16 declared weights.

weight = production share / PLANNED sampling share of the sample's kind, fixed before the labels; mean 1 under the plan.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from decimal import Decimal, InvalidOperation
from fractions import Fraction
from typing import Final

import numpy as np
from numpy.typing import ArrayLike

from watcher.bounds.designs import jump, shaped
from watcher.bounds.mixture import Floats, Rows, Side

MOST_LEVELS: Final = 16
_SLACK: Final = 1e-6
"""Relative room above the rounding error of a ceiling; a ceiling decides nothing, it only skips work."""


def rounded(value: Fraction, side: Side) -> float:
    """The nearest float that weakens the evidence of a side: not above `value` for "above", not below it for "below"."""
    nearest = float(value)
    if side == "above":
        return nearest if Fraction(nearest) <= value else float(np.nextafter(nearest, -np.inf))
    return nearest if Fraction(nearest) >= value else float(np.nextafter(nearest, np.inf))


def decimals(levels: Sequence[str], name: str) -> tuple[Fraction, ...]:
    """Declared levels as exact numbers.

    Raises ValueError naming the argument: 1 to 16 distinct positive decimal numbers are allowed.
    """
    try:
        values = tuple(Fraction(Decimal(level)) for level in levels)
    except (InvalidOperation, OverflowError, ValueError) as error:
        raise ValueError(f"{name} = {tuple(levels)!r}: every level must be a decimal number such as '0.2'") from error
    if not 1 <= len(values) <= MOST_LEVELS:
        raise ValueError(f"{name} has {len(values)} levels: 1 to {MOST_LEVELS} are allowed; merge the nearest ones")
    if min(values) <= 0 or len(set(values)) != len(values):
        raise ValueError(f"{name} = {tuple(levels)!r}: levels must be positive and differ from one another")
    return values


def bet_cost(labels_cost_rate: ArrayLike, bets: Floats) -> Floats:
    """-log(1 + c m), shape (..., G): what every label costs the bets c (G,) against rates m (...)."""
    product = np.multiply.outer(bets, np.asarray(labels_cost_rate, dtype=np.float64))
    return np.moveaxis(np.negative(np.log1p(product, out=product), out=product), 0, -1)


def bet_cost_slope(labels: Rows, rate: Floats, bets: Floats) -> Floats:
    """The derivative -n c/(1 + c m) of the cost of n labels by the rate, shape (..., G)."""
    c = bets.reshape(-1, *(1,) * np.ndim(rate))
    return np.moveaxis(-labels * (c / (1.0 + rate * c)), 0, -1)


def bet_ceiling(labels: Floats, errors: Floats, weighed: Floats, rate: float, side: Side, largest: float) -> Floats:
    """An upper bound of sum_i log(1 + c w_i) - n log(1 + c m) over every bet c of a side, slack included.

    `labels` n, `errors` their number K, `weighed` the sum W of their weights. By Jensen the first sum is at most
    K log(1 + c W/K), and that bound has its maximum at c = (W - n m)/(m (W/K) (n - K)).
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        mean = np.where(errors > 0, weighed / errors, 0.0)
        best = (weighed - labels * rate) / (rate * mean * (labels - errors))
        lowest = -1.0 / largest
        best = np.where(errors > 0, best, lowest) if side == "below" else best
        best = np.clip(best, lowest, 0.0) if side == "below" else np.clip(best, 0.0, 1e12)
        gain = np.where(errors > 0, errors * np.log1p(best * mean), 0.0)
        cost = labels * np.log1p(best * rate)
    beyond = weighed > labels * rate if side == "above" else weighed < labels * rate
    found = gain - cost + _SLACK * (1.0 + np.abs(gain) + np.abs(cost))
    # 0 * inf and the like: no cheap bound is known there, so nothing may be skipped.
    return np.asarray(np.where(beyond, np.where(np.isfinite(found), found, np.inf), _SLACK))


@dataclass(frozen=True, slots=True)
class Weighted:
    """Weighted labels; T = (n, k_1 .. k_L): labels, then the errors of every declared level in order.

    evidence = log sum_g w_g exp( sum_levels k_w log(1 + c_g w) - n log(1 + c_g m) ) with c_g = e^lambda - 1 (above) or
    -(1 - e^-|lambda|)/w_max (below): as section 1 of method.md it holds for the drifting running mean, for all rates and
    all times at once, provided that the planned mean weight is 1 (Waudby-Smith, Ramdas 2023). Weights are rounded to the
    float that weakens each side. Raises ValueError naming `levels`.
    """

    levels: tuple[str, ...]
    """Decimal text as declared, e.g. ("0.2", "1.8"); at most 16."""
    _above: Floats = field(init=False, repr=False, compare=False)
    _below: Floats = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        values = decimals(self.levels, "weight_levels")
        object.__setattr__(self, "levels", tuple(self.levels))
        object.__setattr__(self, "_above", np.array([rounded(value, "above") for value in values]))
        object.__setattr__(self, "_below", np.array([rounded(value, "below") for value in values]))

    @property
    def dimension(self) -> int:
        """Labels and the errors of each level."""
        return 1 + len(self.levels)

    def weights(self, side: Side) -> Floats:
        """The weights (L,) as rounded for a side."""
        return self._above if side == "above" else self._below

    @property
    def largest(self) -> float:
        """w_max, rounded up."""
        return float(self._below.max())

    def bets(self, side: Side, shifts: Floats) -> Floats:
        """c_g, shape (G,)."""
        return jump(side, shifts) if side == "above" else jump(side, shifts) / self.largest

    def coefficients(self, rate: ArrayLike, side: Side, shifts: Floats) -> Floats:
        """-log(1 + c m) for each label, log(1 + c w) for each error of weight w."""
        result = shaped(np.shape(rate), self.dimension, shifts)
        bets = self.bets(side, shifts)
        result[..., 0, :] = bet_cost(rate, bets)
        result[..., 1:, :] = np.log1p(np.multiply.outer(self.weights(side), bets))
        return result

    def slope(self, statistics: Rows, rate: Floats, side: Side, shifts: Floats) -> Floats:
        """-n c / (1 + c m)."""
        return bet_cost_slope(statistics[..., 0], rate, self.bets(side, shifts))

    def equivalent(self, statistics: Rows, side: Side) -> tuple[Floats, Floats]:
        """The uniform sample whose mean has the same value and the same variance."""
        return equivalent(statistics[..., 0], statistics[..., 1:], self.weights(side))

    def ceiling(self, statistics: Rows, rate: float, side: Side) -> Floats:
        """The best single bet if all errors had their mean weight."""
        errors = statistics[..., 1:].astype(np.float64)
        labels, weighed = statistics[..., 0].astype(np.float64), (errors * self.weights(side)).sum(axis=-1)
        return bet_ceiling(labels, errors.sum(axis=-1), weighed, rate, side, self.largest)


def equivalent(labels: Rows, errors: Rows, weights: Floats) -> tuple[Floats, Floats]:
    """Labels and errors of a uniform sample with the mean W/n and the variance sum(w^2 k)/n^2 of a weighted one."""
    n = np.asarray(labels, dtype=np.float64)
    weighed, squares = (errors * weights).sum(axis=-1), (errors * weights**2).sum(axis=-1)
    with np.errstate(divide="ignore", invalid="ignore"):
        size = np.where(squares > 0, n * weighed / squares, n / weights.max())
        share = np.where(n > 0, weighed / n, 0.0)
    return size, size * share
