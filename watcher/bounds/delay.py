"""Does the delay of a label depend on its outcome? Early labels against late ones, bucket by bucket.

The labels of a bucket form a 2x2 table early/late by error/correct (Mantel, Haenszel 1959). If the delay ignores the
outcome, the early errors are hypergeometric given the margins, independent from bucket to bucket.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from watcher.bounds.mixture import Floats

LIMIT: Final = 5.0
"""|z| below which nothing is flagged."""
LEVEL: Final = 2.1e-4 / 364
"""Chance of a false flag at one bucket; 2.1e-4 over 364 of them by the union bound."""


@dataclass(frozen=True, slots=True)
class DelayTest:
    """The test after each bucket, on all buckets up to it; arrays of shape (..., B)."""

    z: Floats
    """(errors among the early - expected)/sqrt(variance); > 0: errors come early. 0 while the variance is 0."""
    log_level: Floats
    """log of an upper bound of the two-sided chance of so large a difference; <= 0."""
    depends: NDArray[np.bool_]
    """|z| >= 5 and the bound at most 2.1e-4/364."""


def delay_test(
    early_labels: ArrayLike, early_errors: ArrayLike, late_labels: ArrayLike, late_errors: ArrayLike
) -> DelayTest:
    """Test after every bucket whether the delay of labels depends on their outcome.

    Counts of shape (..., B), one per sealed bucket in order: early = first seen no later than label_lag/2 after the end of
    the bucket. If the delay ignores the outcome, the chance that a given bucket is flagged is at most `LEVEL`, hence
    2.1e-4 over 364 buckets. |z| >= 5 alone does not keep that level: with one late label among 70 and one error, the
    error is the late one with chance 1/70 and then z = 8.3. The early errors of all buckets are a sum of independent
    0/1 variables of the same mean and variance V (Vatutin, Mikhailov 1982), hence Bennett's inequality (1962):
    P(|difference| >= d) <= 2 exp(-V h(d/V)), h(u) = (1+u) log(1+u) - u. ValueError names the argument.
    """
    a, n1, b, n2 = _tables(early_labels, early_errors, late_labels, late_errors)
    total, errors = n1 + n2, a + b
    with np.errstate(divide="ignore", invalid="ignore"):
        expected = np.where(total > 0, n1 * errors / total, 0.0)
        variance = np.where(total > 1, n1 * n2 * errors * (total - errors) / (total**2 * (total - 1)), 0.0)
    difference, spread = np.cumsum(a - expected, axis=-1), np.cumsum(variance, axis=-1)
    with np.errstate(divide="ignore", invalid="ignore"):
        z = np.where(spread > 0, difference / np.sqrt(spread), 0.0)
        ratio = np.where(spread > 0, np.abs(difference) / spread, 0.0)
    exponent = spread * ((1.0 + ratio) * np.log1p(ratio) - ratio)
    log_level = np.minimum(0.0, math.log(2.0) - exponent)
    return DelayTest(z, log_level, (np.abs(z) >= LIMIT) & (log_level <= math.log(LEVEL)))


def _tables(
    early_labels: ArrayLike, early_errors: ArrayLike, late_labels: ArrayLike, late_errors: ArrayLike
) -> tuple[Floats, Floats, Floats, Floats]:
    n1, a, n2, b = np.broadcast_arrays(
        *(np.asarray(value, dtype=np.float64) for value in (early_labels, early_errors, late_labels, late_errors))
    )
    for name, errors, labels in (("early_errors", a, n1), ("late_errors", b, n2)):
        if not ((errors >= 0) & (errors <= labels)).all():
            raise ValueError(f"{name}: counts from 0 to the labels of the same bucket are allowed")
    return a, n1, b, n2
