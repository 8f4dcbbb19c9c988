"""Many slices, many promises: a list with a stated false discovery rate, and what several promises risk together."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import numpy as np
from numpy.typing import ArrayLike, NDArray

from watcher.bounds.arguments import fraction


def e_bh(totals: ArrayLike, fdr: float = 0.05) -> NDArray[np.bool_]:
    """Which of K totals (nats, one report, CURRENT totals) belong on the list: the e-BH rule.

    `totals` (..., K), -inf allowed; `fdr` in (0, 1). Listed are the k largest, k the largest number with
    k-th largest total >= log(K/(fdr*k)). The expected share of wrongly listed ones is at most fdr times the share of true
    nulls, however the slices depend on one another (Wang, Ramdas 2022). Totals must be logs of e-values at one time fixed
    beforehand or a stopping time common to all: running maxima are none and break the rule.
    """
    fraction("fdr", fdr)
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
    return min(1.0, float(sum(Fraction(fraction("risks", risk)) for risk in risks)))
