"""The order of evidence: what newly counts for a cell, bucket by bucket, as the integers that `bounds` works on.

A sealed bucket enters once, whole, in bucket order; a bucket without rows enters as zeros. Under `count = "arriving"` the
statistics of a bucket are what looks have seen of it so far (see `watcher.arriving`).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from fractions import Fraction
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from watcher.bounds.clustered import Clustered
from watcher.bounds.designs import LOSS, UNIFORM, Design
from watcher.bounds.horvitz import HorvitzThompson
from watcher.bounds.weighted import Weighted
from watcher.records import INTEGERS, Counts, Terms

IntArray = npt.NDArray[np.int64]
Levels = Mapping[str, Counts]
"""Counts of one (cell, bucket) by level."""

NOTHING = Counts()


def add(first: Counts, second: Counts) -> Counts:
    """The sum of two counts; the newest of both times."""
    newest = max((c.newest for c in (first, second) if c.newest is not None), default=None)
    return Counts(**{name: getattr(first, name) + getattr(second, name) for name in INTEGERS}, newest=newest)


def total(levels: Levels) -> Counts:
    """The counts of all levels together."""
    if len(levels) == 1:
        return next(iter(levels.values()))
    result = NOTHING
    for counts in levels.values():
        result = add(result, counts)
    return result


def entered(terms: Terms, counts: Counts) -> tuple[int, Fraction]:
    """Labels and errors of the measure: all labels, the labelled positives (miss) or negatives (false-alarm)."""
    if terms.measure == "miss":
        return counts.positives, Fraction(counts.misses)
    if terms.measure == "false-alarm":
        return counts.labels - counts.positives, Fraction(counts.false_alarms)
    if terms.measure == "loss":
        return counts.labels, Fraction(counts.loss_ppm_down, 1_000_000)
    return counts.labels, Fraction(counts.errors)


@lru_cache(maxsize=256)
def design_of(terms: Terms) -> Design:
    """The sampling design that the terms declare."""
    if terms.measure == "loss":
        return LOSS
    if terms.weight_levels:
        return Weighted(terms.weight_levels)
    if terms.n_max is not None:
        return Clustered(terms.n_max)
    if terms.labelling_probabilities:
        return HorvitzThompson(terms.labelling_probabilities)
    return UNIFORM


def statistic(terms: Terms, levels: Levels) -> tuple[int, ...]:
    """The sufficient statistic of one (cell, bucket), in the order of the design's coefficients."""
    if terms.measure == "loss":
        counts = total(levels)
        return counts.labels, counts.loss_ppm_down, counts.loss_ppm_up
    if terms.weight_levels:
        each = [entered(terms, levels.get(level, NOTHING)) for level in terms.weight_levels]
        return sum(n for n, _ in each), *(int(k) for _, k in each)
    if terms.n_max is not None:
        return _clusters(terms.n_max, levels)
    if terms.labelling_probabilities:
        chosen = [levels.get(level, NOTHING) for level in terms.labelling_probabilities]
        every = sum(counts.predictions for counts in levels.values())
        missing = (counts.predictions - counts.labels for counts in chosen)
        return every, *(int(entered(terms, counts)[1]) for counts in chosen), *missing
    n, k = entered(terms, total(levels))
    return n, int(k)


def _clusters(n_max: int, levels: Levels) -> tuple[int, ...]:
    pairs = Clustered(n_max).pairs
    table = dict.fromkeys(pairs, 0)
    for level, counts in levels.items():
        n, _, k = level.partition(":")
        # A cluster without a single label ("0:0") is predictions alone: it tells nothing.
        if level and int(n):
            table[int(n), int(k)] += counts.clusters
    return tuple(table[pair] for pair in pairs)


def estimate(terms: Terms, statistics: Sequence[int], counts: Counts) -> float | None:
    """The point estimate of the measure's rate; None before the first label."""
    if terms.weight_levels:
        errors = sum(Fraction(level) * k for level, k in zip(terms.weight_levels, statistics[1:], strict=True))
        return float(errors / statistics[0]) if statistics[0] else None
    if terms.labelling_probabilities:
        levels = terms.labelling_probabilities
        errors = sum(k / Fraction(level) for level, k in zip(levels, statistics[1 : 1 + len(levels)], strict=True))
        return float(errors / statistics[0]) if statistics[0] else None
    n, k = entered(terms, counts)
    return float(k / n) if n else None


@dataclass(frozen=True, slots=True)
class CellPath:
    """What has entered the evidence of one cell: one row a sealed bucket, oldest first."""

    statistics: IntArray
    """(B, D)"""
    counts: tuple[Counts, ...]
    """(B,) all levels together."""

    @property
    def sum(self) -> Counts:
        """The counts of all sealed buckets together."""
        newest = max((c.newest for c in self.counts if c.newest is not None), default=None)
        sums = {name: sum(getattr(c, name) for c in self.counts) for name in INTEGERS}
        return Counts(**sums, newest=newest)


def path(terms: Terms, starts: Sequence[int], counted: Mapping[int, Levels]) -> CellPath:
    """The path of one cell: `starts` are all its counted buckets in order, `counted` those that have rows."""
    design = design_of(terms)
    statistics = np.zeros((len(starts), design.dimension), dtype=np.int64)
    counts = []
    for row, start in enumerate(starts):
        levels = counted.get(start)
        if levels:
            statistics[row] = statistic(terms, levels)
            counts.append(total(levels))
        else:
            counts.append(NOTHING)
    return CellPath(statistics, tuple(counts))


assert {f.name for f in fields(Counts)} == {*INTEGERS, "newest"}
