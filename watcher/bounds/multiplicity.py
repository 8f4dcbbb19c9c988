"""Many slices, many promises: parts of the risk, and a list with a stated false discovery rate."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import numpy as np
from numpy.typing import ArrayLike, NDArray

WHOLE_PART = Fraction(1, 2)
DECLARED_PART = Fraction(2, 5)
DISCOVERED_PART = Fraction(1, 10)
"""With slices: the whole, the values declared in the terms together, the values discovered later together."""


def declared_parts(weights: Sequence[str | int | Fraction]) -> tuple[Fraction, ...]:
    """The declared slice values' parts of the risk, in proportion to their weights; exact, they sum to 2/5.

    ValueError when a weight is not a positive number.
    """
    values = [Fraction(weight) for weight in weights]
    if any(value <= 0 for value in values):
        raise ValueError(f"weights = {list(weights)!r}: positive numbers are allowed")
    return tuple(DECLARED_PART * value / sum(values) for value in values)


def discovered_part(order: int) -> Fraction:
    """The part of the i-th value discovered later, 1/10 * 1/(i(i+1)) for i = 1, 2, ...: all together 1/10."""
    if order < 1:
        raise ValueError(f"order = {order!r}: 1 for the first value discovered, 2 for the second, and so on")
    return DISCOVERED_PART / (order * (order + 1))


def e_bh(totals: ArrayLike, fdr: float = 0.05) -> NDArray[np.bool_]:
    """Which of K totals (nats, one report, CURRENT totals) belong on the list: the e-BH rule.

    `totals` (..., K), -inf allowed; `fdr` in (0, 1). Listed are the k largest, k the largest number with
    k-th largest total >= log(K/(fdr*k)). The expected share of wrongly listed ones is at most fdr times the share of true
    nulls, however the slices depend on one another (Wang, Ramdas 2022). Totals must be logs of e-values at one time fixed
    beforehand or a stopping time common to all: running maxima are none and break the rule.
    """
    if not 0.0 < fdr < 1.0:
        raise ValueError(f"fdr = {fdr!r}: a number strictly between 0 and 1 is allowed")
    values = np.asarray(totals, dtype=np.float64)
    if values.ndim == 0 or np.isnan(values).any():
        raise ValueError("totals: an array of numbers without NaN is allowed, one total a slice in its last axis")
    count = values.shape[-1]
    if count == 0:
        return np.zeros(values.shape, dtype=bool)
    ordered = -np.sort(-values, axis=-1)
    ranks = np.arange(1, count + 1)
    good = ordered >= np.log(count / (fdr * ranks))
    listed = np.where(good, ranks, 0).max(axis=-1)
    smallest = np.take_along_axis(ordered, np.maximum(listed - 1, 0)[..., None], axis=-1)
    return np.asarray((values >= smallest) & (listed[..., None] > 0))


def false_breach_bound(risks: Sequence[float]) -> float:
    """The chance of any false breach among releases and promises with these risks is at most this (union bound)."""
    for risk in risks:
        if not 0.0 < risk < 1.0:
            raise ValueError(f"risks: {risk!r} is not strictly between 0 and 1")
    return min(1.0, float(sum(Fraction(risk) for risk in risks)))
