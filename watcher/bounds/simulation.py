"""Many streams of labels at once through the windowed rule of `windows.totals`.

All restarts share one mixture, so a total needs one number a shift and stream, carried from bucket to bucket:
    Q_g(t) = (Q_g(t-1) + share_t) * exp(counts of bucket t * coefficients_g),
in place of one a window. It is the same rule (a test holds it against `windows.totals`), and made for plans only: nothing
here decides about a promise.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from watcher.bounds.designs import per_label
from watcher.bounds.mixture import LIFE, RESTART, Floats
from watcher.bounds.windows import BREACH

Counts = NDArray[np.int64]
Progress = Callable[[float], None]
"""Called with the fraction done, 0 to 1."""
_TABLE: Final = 4096
"""Largest bucket for which the factors of every possible count are laid out beforehand."""
_BLOCK: Final = 500
"""Streams whose numbers stay in the cache of a core."""
_SHIFTS: Final = np.concatenate([LIFE.shifts, RESTART.shifts])
_WEIGHTS: Final = np.concatenate([BREACH.release * LIFE.weights, RESTART.weights])
_LIFE: Final = LIFE.shifts.size


@dataclass(frozen=True, slots=True)
class Setting:
    """The rule of one promise (or slice) and the volume that feeds it."""

    tolerance: float
    risk: float
    """Of the promise, or its part of a slice."""
    restarts: int
    """J, `windows.restarts`."""
    volume: float
    """Labels a bucket, > 0; buckets hold floor or ceil of it in turn."""
    young: int = 0
    """Buckets that a window must hold before it counts (window_at_least)."""

    @property
    def threshold(self) -> float:
        """log(1/risk)."""
        return -math.log(self.risk)

    def labels(self, start: Counts, end: Counts) -> Counts:
        """Labels in the buckets start..end-1."""
        return np.asarray(np.floor(end * self.volume) - np.floor(start * self.volume), dtype=np.int64)


class Streams:
    """The totals of S streams, each at a bucket of its own."""

    def __init__(self, setting: Setting, count: int) -> None:
        self.setting = setting
        self.at = np.zeros(count, dtype=np.int64)
        """Buckets taken into account."""
        self.parts = np.concatenate([np.ones((count, _LIFE)), np.zeros((count, RESTART.shifts.size))], axis=1)
        self.grown = np.zeros_like(self.parts) if setting.young > 1 else None
        self.recent = np.zeros((count, max(setting.young - 1, 0)), dtype=np.int64)
        self._costs = per_label(setting.tolerance, "above", _SHIFTS)
        self._few = few = math.floor(setting.volume)
        self._table = None
        if few <= _TABLE:
            errors = np.arange(few + 2)
            self._table = np.stack([self._factors(np.full(few + 2, n), errors) for n in (few, few + 1)])

    def _factors(self, labels: Counts, errors: Counts) -> Floats:
        with np.errstate(over="ignore", under="ignore"):
            return np.asarray(np.exp(errors[:, None] * _SHIFTS + labels[:, None] * self._costs))

    def take(self, errors: Counts) -> None:
        """Count one more bucket of every stream; `errors` (S,)."""
        setting = self.setting
        labels = setting.labels(self.at, self.at + 1)
        table = self._table
        factors = self._factors(labels, errors) if table is None else table[labels - self._few, errors]
        with np.errstate(over="ignore", under="ignore", invalid="ignore"):
            self.parts[:, _LIFE:] += np.where(self.at == 0, 0.0, BREACH.share(self.at, setting.restarts))[:, None]
            self.parts *= factors
            if self.grown is not None:
                self._grow(errors, factors)
        self.at += 1

    def _grow(self, errors: Counts, factors: Floats) -> None:
        """Windows that have come of age: the older ones grow by this bucket, the newest enters with all its buckets."""
        assert self.grown is not None
        young = self.setting.young
        self.grown *= factors
        start = self.at + 1 - young
        born = start >= 0
        sums = self.recent.sum(axis=1) + errors
        entering = self._factors(self.setting.labels(np.maximum(start, 0), self.at + 1), sums)
        share = np.where(born, BREACH.share(np.maximum(start, 0), self.setting.restarts), 0.0)
        life = np.where(born & (start == 0), 1.0, 0.0)
        self.grown[:, :_LIFE] += life[:, None] * entering[:, :_LIFE]
        self.grown[:, _LIFE:] += np.where(start > 0, share, 0.0)[:, None] * entering[:, _LIFE:]
        self.recent = np.concatenate([self.recent[:, 1:], errors[:, None]], axis=1)

    def totals(self, *, full: bool = False) -> Floats:
        """The log of the total of each stream (S,); `full`: windows that are too young included."""
        parts = self.parts if full or self.grown is None else self.grown
        with np.errstate(over="ignore", under="ignore", invalid="ignore"):
            sums = parts @ _WEIGHTS
        sums = np.where(np.isnan(sums), np.inf, sums)
        return np.asarray(np.log(sums + self._unstarted()))

    def _unstarted(self) -> Floats:
        """The shares of the windows that have not started; the started ones keep theirs out even while too young."""
        J = self.setting.restarts
        late = BREACH.after * J / np.maximum(self.at - 1.0, J)
        early = BREACH.life * (J - self.at + 1.0) / J + BREACH.after
        return np.asarray(np.where(self.at == 0, 1.0, np.where(self.at <= J, early, late)))

    def keep(self, which: NDArray[np.intp] | NDArray[np.bool_]) -> Streams:
        """A copy with the chosen streams only."""
        other = object.__new__(Streams)
        other.setting, other._costs, other._table, other._few = self.setting, self._costs, self._table, self._few
        other.at, other.parts, other.recent = self.at[which], self.parts[which], self.recent[which]
        other.grown = None if self.grown is None else self.grown[which]
        return other

    def copy(self) -> Streams:
        """The same streams, to go on with on their own."""
        return self.keep(np.arange(len(self.at)))

    def draw(self, rate: float | Floats, rng: np.random.Generator) -> Counts:
        """Errors of the next bucket of every stream at these true rates."""
        return np.asarray(rng.binomial(self.setting.labels(self.at, self.at + 1), rate), dtype=np.int64)


def healthy_streams(
    setting: Setting, healthy: float, starts: Counts, rng: np.random.Generator, progress: Progress | None = None
) -> Streams:
    """Streams (S,) at true rate `healthy` up to the bucket `starts` (S,) of each; those that crossed are left out."""
    streams, done = Streams(setting, len(starts)), []
    ends = starts.copy()
    for t in range(int(starts.max()) + 1):
        arrived = ends == t
        if arrived.any():
            done.append(streams.keep(arrived))
            streams, ends = streams.keep(~arrived), ends[~arrived]
        if not len(ends):
            break
        streams.take(streams.draw(healthy, rng))
        fine = streams.totals() < setting.threshold
        if not fine.all():
            streams, ends = streams.keep(fine), ends[fine]
        if progress is not None:
            progress(t / int(starts.max()))
    return _joined(setting, done)


def _joined(setting: Setting, parts: list[Streams]) -> Streams:
    if not parts:
        return Streams(setting, 0)
    whole = parts[0].copy()
    for name in ("at", "parts", "recent", "grown"):
        arrays = [getattr(part, name) for part in parts]
        setattr(whole, name, None if arrays[0] is None else np.concatenate(arrays))
    return whole


def labels_to_crossing(streams: Streams, rate: float, buckets: int, rng: np.random.Generator) -> Floats:
    """Labels of each stream until its total crosses at true rate `rate`, whole buckets; inf beyond `buckets` of them."""
    setting, begin = streams.setting, streams.at
    left = streams.copy()
    names, found = np.arange(len(begin)), np.full(len(begin), np.inf)
    for _ in range(buckets):
        if not len(names):
            break
        left.take(left.draw(rate, rng))
        crossed = left.totals() >= setting.threshold
        if crossed.any():
            which = names[crossed]
            found[which] = setting.labels(begin[which], left.at[crossed])
            left, names = left.keep(~crossed), names[~crossed]
    return found


@dataclass(frozen=True, slots=True)
class FalseBreach:
    """The chance that the rule raises a breach within a horizon spent exactly AT the tolerance."""

    chance: float
    error: float
    """Standard error of the estimate."""


def false_breach(
    setting: Setting, buckets: int, draws: int, rng: np.random.Generator, progress: Progress | None = None
) -> FalseBreach:
    """Importance sampling, exact in mean (method.md section 7).

    A window j is drawn by its share (beyond the horizon: none starts), a shift by its mixture; the true rate is the
    tolerance before restart j and tilted by the shift from it on. The full total is the likelihood ratio of such streams
    to streams at the tolerance, so the chance is the mean of 1{cross} exp(-full total at the crossing).
    """
    values = []
    for first in range(0, draws, _BLOCK):
        values.append(_weights_of_crossings(setting, buckets, min(_BLOCK, draws - first), rng))
        if progress is not None:
            progress(min(1.0, (first + _BLOCK) / draws))
    everything = np.concatenate(values)
    return FalseBreach(float(everything.mean()), float(everything.std() / math.sqrt(draws)))


def _weights_of_crossings(setting: Setting, buckets: int, draws: int, rng: np.random.Generator) -> Floats:
    """1{cross} exp(-full total at the crossing) of some streams drawn for `false_breach`."""
    eps = setting.tolerance
    shares = np.append(BREACH.shares(setting.restarts, buckets), BREACH.remainder(setting.restarts, buckets))
    window = rng.choice(buckets + 1, size=draws, p=shares / shares.sum())
    life = rng.choice(LIFE.shifts, size=draws, p=LIFE.weights)
    shift = np.where(window == 0, life, rng.choice(RESTART.shifts, size=draws, p=RESTART.weights))
    tilted = eps * np.exp(shift) / (1.0 - eps + eps * np.exp(shift))
    streams, values = Streams(setting, draws), np.zeros(draws)
    names = np.arange(draws)
    for t in range(buckets):
        streams.take(streams.draw(np.where(window[names] <= t, tilted[names], eps), rng))
        crossed = streams.totals() >= setting.threshold
        if crossed.any():
            values[names[crossed]] = np.exp(-streams.keep(crossed).totals(full=True))
            streams, names = streams.keep(~crossed), names[~crossed]
        if not len(names):
            break
    return values
