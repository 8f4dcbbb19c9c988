"""How many further labels until the window since the release is broken or supported."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, xlog1py, xlogy

from watcher.bounds.arguments import counts, fraction
from watcher.bounds.evidence import evidence
from watcher.bounds.exact import breaking_errors
from watcher.bounds.mixture import Floats, Side

_LOOKS: Final = 48
"""Blocks up to the typical decision; afterwards as many for every doubling."""
_OVERSHOOT: Final = 0.5826
"""-zeta(1/2)/sqrt(2 pi): how far, in standard deviations of a step, looking at block ends moves a boundary outward
(Siegmund 1985; Broadie, Glasserman, Kou 1997)."""
_FORGOTTEN: Final = 1e-12


@dataclass(frozen=True, slots=True)
class _Question:
    labels: int
    errors: int
    tolerance: float
    rate: float
    to_break: float
    """Nats, as `to_support`."""
    to_support: float
    limit: int

    def decided(self, further: Floats, errors: Floats) -> NDArray[np.bool_]:
        """Whether the window is broken or supported after so many further labels with so many errors among them."""
        rows = np.stack([self.labels + further, self.errors + errors], axis=-1)
        broken = evidence(rows, self.tolerance, "above") >= self.to_break
        return np.asarray(broken | (evidence(rows, self.tolerance, "below") >= self.to_support))

    def boundaries(self, further: NDArray[np.int64]) -> tuple[Floats, Floats]:
        """Further errors, fractional, at or below which the window is supported, at or above which it is broken."""
        labels = self.labels + further
        most = np.maximum(supporting_errors(labels, self.tolerance, self.to_support), 0)
        least = breaking_errors(labels, self.tolerance, self.to_break)
        supported = self._crossed(labels, most, most + 1, "below", self.to_support)
        broken = np.where(least > labels, np.inf, self._crossed(labels, least - 1, least, "above", self.to_break))
        return supported - self.errors, broken - self.errors

    def _crossed(
        self, labels: NDArray[np.int64], low: NDArray[np.int64], high: NDArray[np.int64], side: Side, goal: float
    ) -> Floats:
        """Where the evidence, nearly linear between neighbouring counts, equals the goal."""
        first, second = (evidence(np.stack([labels, k], axis=-1), self.tolerance, side) for k in (low, high))
        return np.asarray(low + (goal - first) / (second - first))


def labels_to_decide(
    labels: int,
    errors: int,
    tolerance: float,
    risk: float,
    rate: float | None = None,
    breach_share: float = 0.20,
    support_share: float = 0.50,
    limit: int = 1_000_000,
) -> tuple[int | None, int | None]:
    """Median and 90% quantile of the FURTHER labels until window 0 is broken or supported at a constant error rate.

    `labels`, `errors`: what window 0 holds; `risk` is the cell's; `rate` defaults to the present estimate
    errors/labels. None stands for more than `limit` labels, and for no estimate (no labels and no rate); 0 when the
    window is decided already. An estimate of 0 (or 1) is taken at its word: not one further label is an error (a
    correct one), and both figures are the same.

    A plan, not a probability of any verdict: at block ends the chance is exact up to a lattice, and looks in between
    are allowed for by the usual continuity correction; within 3% of the exact pass over every label.
    """
    counts(labels, errors)
    tolerance, risk = fraction("tolerance", tolerance), fraction("risk", risk)
    if rate is None:
        if labels == 0:
            return None, None
        rate = errors / labels
    if not 0.0 <= rate <= 1.0:
        raise ValueError(f"rate = {rate!r}: a number from 0 to 1 is needed")
    to_break, to_support = -math.log(risk * breach_share), -math.log(risk * support_share)
    question = _Question(int(labels), int(errors), tolerance, float(rate), to_break, to_support, limit)
    if question.decided(np.zeros(1), np.zeros(1))[0]:
        return 0, 0
    typical = _mean_path(question)
    if rate in (0.0, 1.0):
        return typical, typical
    return _quantiles(question, limit if typical is None else typical)


def supporting_errors(labels: NDArray[np.int64], tolerance: float, threshold: float) -> NDArray[np.int64]:
    """The most errors among n labels with evidence below the tolerance >= threshold; -1: not even none is enough."""
    labels = np.asarray(labels, dtype=np.int64)
    high = np.ceil(labels * tolerance).astype(np.int64)
    spread = threshold + 2.0 + 0.5 * np.log1p(labels)
    reach = np.floor(labels * tolerance - np.sqrt(2.0 * labels * tolerance * spread)).astype(np.int64)
    near = np.maximum(reach, 0)
    enough = evidence(np.stack([labels, near], axis=-1), tolerance, "below") >= threshold
    low = np.where(enough, near, -1)
    while True:
        open_ = np.flatnonzero(high - low > 1)
        if not open_.size:
            return low
        middle = (low[open_] + high[open_]) // 2
        enough = evidence(np.stack([labels[open_], middle], axis=-1), tolerance, "below") >= threshold
        low[open_] = np.where(enough, middle, low[open_])
        high[open_] = np.where(enough, high[open_], middle)


def _mean_path(question: _Question) -> int | None:
    """Further labels until the window is decided if errors come in at exactly the rate; None: beyond the limit."""
    low, grid = 0, np.unique(np.geomspace(1, question.limit, 96).astype(np.int64))
    while True:
        decided = np.flatnonzero(
            question.decided(grid.astype(np.float64), np.asarray(question.rate * grid, dtype=np.float64))
        )
        if not decided.size:
            return None
        first = int(decided[0])
        low, high = int(grid[first - 1]) if first else low, int(grid[first])
        if high - low <= 1:
            return high
        grid = np.unique(np.linspace(low + 1, high, 64).astype(np.int64))


def _quantiles(question: _Question, typical: int) -> tuple[int | None, int | None]:
    found: list[int | None] = []
    previous, chance = 0, 0.0
    for further, decided in _decisions(question, typical):
        reached = [q for q in (0.5, 0.9)[len(found) :] if decided >= q]
        parts = [(q - chance) / (decided - chance) for q in reached]
        found += [previous + max(1, math.ceil((further - previous) * part)) for part in parts]
        if len(found) == 2:
            break
        previous, chance = further, decided
    found += [None] * (2 - len(found))
    return found[0], found[1]


def _decisions(question: _Question, typical: int) -> Iterator[tuple[int, float]]:
    """(further labels, chance that the window is decided by then) at the end of every block."""
    rate = question.rate
    further, block, grain = 0, max(1, typical // _LOOKS), 1
    chance, first, alive = 0.0, 0, np.ones(1)
    while further < question.limit and alive.size:
        ends = further + block * np.arange(1, (2 if further == 0 else 1) * _LOOKS + 1)
        ends = ends[ends <= question.limit] if ends[0] <= question.limit else np.array([question.limit])
        spread = math.sqrt(block * rate * (1.0 - rate))
        while grain * 12 <= spread:
            first, alive, grain = *_coarser(first, alive), grain * 2
        offset, step = _step(int(ends[0]) - further, rate, grain)
        supported, broken = question.boundaries(ends)
        # Looks after every label overshoot too: upward by half an error, downward (the boundary moves) hardly at all.
        down, up = _OVERSHOOT * (spread - math.sqrt(rate * (1.0 - rate))), max(0.0, _OVERSHOOT * spread - 0.5)
        for end, low, high in zip(ends.tolist(), supported + down, broken - up, strict=True):
            first, alive = first + offset, np.convolve(alive, step)
            out = alive * _beyond((first + np.arange(len(alive))) * grain, low, high, grain)
            chance += float(out.sum())
            alive -= out
            likely = np.flatnonzero(alive > _FORGOTTEN)
            first, alive = (
                (first + int(likely[0]), alive[likely[0] : likely[-1] + 1]) if likely.size else (0, alive[:0])
            )
            yield end, min(chance, 1.0)
            if not likely.size:
                break
        further, block = int(ends[-1]), 2 * block


def _beyond(errors: NDArray[np.int64], low: float, high: float, grain: int) -> Floats:
    """The part of every lattice cell at or beyond the boundaries; on the lattice of single errors all or nothing."""
    if grain == 1:
        return np.asarray((errors <= low) | (errors >= high), dtype=np.float64)
    return np.asarray(np.clip(0.5 + np.maximum(low - errors, errors - high) / grain, 0.0, 1.0))


def _step(labels: int, rate: float, grain: int) -> tuple[int, Floats]:
    """The binomial distribution of the errors of a block on a lattice of `grain` errors: first place, chances."""
    spread = math.sqrt(labels * rate * (1.0 - rate))
    low = max(0, math.floor(labels * rate - 8.0 * spread - 4.0))
    high = min(labels, math.ceil(labels * rate + 8.0 * spread + 24.0))
    errors = np.arange(low, high + 1, dtype=np.float64)
    ways = gammaln(labels + 1.0) - gammaln(errors + 1.0) - gammaln(labels - errors + 1.0)
    chances = np.exp(ways + xlogy(errors, rate) + xlog1py(labels - errors, -rate))
    return _on_lattice(low, chances / chances.sum(), grain)


def _coarser(first: int, chances: Floats) -> tuple[int, Floats]:
    return _on_lattice(first, chances, 2)


def _on_lattice(first: int, chances: Floats, grain: int) -> tuple[int, Floats]:
    """Split every chance between its two neighbours on the coarser lattice so that the mean stays."""
    if grain == 1:
        return first, chances
    place, rest = np.divmod(first + np.arange(len(chances)), grain)
    start = int(place[0])
    upper = chances * (rest / grain)
    size = int(place[-1]) - start + 2
    result = np.bincount(place - start, chances - upper, size) + np.bincount(place - start + 1, upper, size)
    return start, np.asarray(result, dtype=np.float64)
