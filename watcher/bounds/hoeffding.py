"""What a hold-out costs when it is judged by Hoeffding's inequality; shown beside the exact figure, never used."""

from __future__ import annotations

import math
from typing import Final

from scipy.special import betaincc

from watcher.bounds.arguments import fraction

_MOST: Final = 10_000_000


def hoeffding_labels(tolerance: float, risk: float, power: float, rate: float) -> int | None:
    """Labels with which k/n + sqrt(log(1/risk)/(2n)) <= `tolerance` with chance at least `power` at true error `rate`.

    0 <= `rate` < `tolerance` < 1, `risk` and `power` in (0, 1). Found by halving, so that slightly fewer may do where the
    chance wavers. None beyond 10 million. ValueError names the argument.
    """
    for name, value in (("tolerance", tolerance), ("risk", risk), ("power", power)):
        fraction(name, value)
    if not 0.0 <= rate < tolerance:
        raise ValueError(f"rate = {rate!r}: a number from 0 to below tolerance = {tolerance!r} is allowed")
    low, high = 0, 1
    while _chance(high, tolerance, risk, rate) < power:
        low, high = high, 2 * high
        if high > _MOST:
            return None
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if _chance(middle, tolerance, risk, rate) >= power else (middle, high)
    return high


def _chance(labels: int, tolerance: float, risk: float, rate: float) -> float:
    """The chance that a sample of that size certifies."""
    allowed = math.floor(labels * (tolerance - math.sqrt(-math.log(risk) / (2.0 * labels))))
    if allowed < 0:
        return 0.0
    if rate == 0.0 or allowed >= labels:
        return 1.0
    return float(betaincc(allowed + 1.0, labels - allowed, rate))
