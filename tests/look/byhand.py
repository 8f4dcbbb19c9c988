"""The evidence and the windows of method.md written out label by label in plain Python: slow, and owing nothing to the product."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import lru_cache

DAY = 86400
SPREAD = [0.001 * 3000 ** (i / 63) for i in range(64)]
ROOTS = sum(math.sqrt(shift) for shift in SPREAD)
LIFE = [(shift, math.sqrt(shift) / ROOTS) for shift in SPREAD]
NEAR = [0.25 + i * (1.6 - 0.25) / 27 for i in range(28)]
RESTART = [(shift, 0.2 * weight) for shift, weight in LIFE] + [(shift, 0.8 / 28) for shift in NEAR]
"""Shift and weight of both mixtures (sections 1 and 2)."""

Item = tuple[float, ...]
"""One label, cluster or prediction, as its design needs it."""
Gain = Callable[[Item, float, float, bool], float]
"""(item, rate, shift > 0, above?) -> what it adds to the exponent."""


def log_sum(values: Sequence[float]) -> float:
    top = max(values)
    return top + math.log(math.fsum(math.exp(value - top) for value in values))


def uniform(item: Item, m: float, shift: float, above: bool) -> float:
    """(error or loss,): lam*x - log(1 - m + m e^lam), section 1."""
    lam = shift if above else -shift
    return lam * item[0] - math.log(1 - m + m * math.exp(lam))


def weighted(largest: float) -> Gain:
    """(weight, error): log(1 + c w) for an error, -log(1 + c m) for every label, section 5."""

    def gain(item: Item, m: float, shift: float, above: bool) -> float:
        c = math.exp(shift) - 1 if above else -(1 - math.exp(-shift)) / largest
        return item[1] * math.log(1 + c * item[0]) - math.log(1 + c * m)

    return gain


def clustered(n_max: int) -> Gain:
    """(labels, errors) of a cluster: log(1 + f (k - m n)), f = c/((1 + c m) n_max), section 5."""

    def gain(item: Item, m: float, shift: float, above: bool) -> float:
        c = math.exp(shift if above else -shift) - 1
        return math.log(1 + c / ((1 + c * m) * n_max) * (item[1] - m * item[0]))

    return gain


def horvitz(smallest: float) -> Gain:
    """(q or 0, labelled, error): every prediction costs log(1 + c m); a missing label is no error above, one below."""

    def gain(item: Item, m: float, shift: float, above: bool) -> float:
        q, labelled, error = item
        c = (math.exp(shift) - 1) * smallest if above else -(1 - math.exp(-shift)) * smallest
        counts = q and (error if labelled else not above)
        return (math.log(1 + c / q) if counts else 0.0) - math.log(1 + c * m)

    return gain


@dataclass
class Windows:
    """Items by bucket since the release, and all windows that end with a bucket."""

    days: Sequence[Sequence[Item]]
    gain: Gain
    restarts: int
    kept: dict[tuple[float, float, bool], list[float]] = field(default_factory=dict)

    def _sums(self, m: float, shift: float, above: bool) -> list[float]:
        """What each bucket adds to the exponent at a shift; kept, as every window needs it."""
        key = (m, shift, above)
        if key not in self.kept:
            gain = lru_cache(maxsize=None)(lambda item: self.gain(item, m, shift, above))
            self.kept[key] = [math.fsum(gain(item) for item in day) for day in self.days]
        return self.kept[key]

    def evidence(self, j: int, t: int, m: float, *, above: bool) -> float:
        """log sum_g w_g exp(...) of the window of the buckets j..t."""
        mixture = LIFE if j == 0 else RESTART
        return log_sum(
            [math.log(weight) + math.fsum(self._sums(m, shift, above)[j : t + 1]) for shift, weight in mixture]
        )

    def share(self, j: int, release: float, life: float) -> float:
        """Of window j within the service life."""
        return release if j == 0 else life / self.restarts

    def total(self, t: int, m: float) -> float:
        """log( sum_{j started} share_j exp(evidence_j) + shares not yet started ), breach shares .20/.75/.05."""
        parts = [math.log(self.share(j, 0.20, 0.75)) + self.evidence(j, t, m, above=True) for j in range(t + 1)]
        return log_sum([*parts, math.log(0.75 * (self.restarts - t) / self.restarts + 0.05)])

    def crossing(self, m: float, threshold: float) -> int | None:
        """The first bucket after which the total, rounded down to 1e-6, reaches the threshold."""
        for t in range(len(self.days)):
            if math.floor(self.total(t, m) * 1e6) / 1e6 >= threshold:
                return t
        return None

    def shortest_support(self, t: int, m: float, risk: float, least: int) -> int | None:
        """The newest start j of a window of at least `least` buckets whose evidence below decides, shares .50/.45/.05."""
        for j in range(t + 1 - least, -1, -1):
            if self.evidence(j, t, m, above=False) >= -math.log(risk * self.share(j, 0.50, 0.45)):
                return j
        return None
