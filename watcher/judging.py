"""One cell judged: its total against its threshold, its support and its warning, after every newly counted bucket or step."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

import numpy as np
import numpy.typing as npt

from watcher.arriving import (
    Pair,
    Step,
    advance_delays,
    advance_path,
    delays_memory,
    known_delays,
    known_steps,
    remembered,
)
from watcher.bounds import windows
from watcher.bounds.delay import delay_test
from watcher.bounds.noise import breach_rate, support_rate
from watcher.bounds.run_length import Warning as Warned
from watcher.bounds.run_length import walk_warnings
from watcher.path import CellPath, design_of
from watcher.records import Cell, Counts, Terms

IntArray = npt.NDArray[np.int64]
Memory = Mapping[str, Any]
Key = tuple[str, str]


@dataclass(frozen=True, slots=True)
class Book:
    """Everything that is known of one promise version when it is judged."""

    terms: Terms
    digest: str
    """Of the terms."""
    cells: tuple[Cell, ...]
    """The whole first."""
    starts: tuple[int, ...]
    """Every counted bucket since the release, epoch seconds, ascending. Sealed counting: the last ones are new in this
    look. Arriving: up to the newest bucket with a label."""
    end: int
    """End of the newest counted bucket; `released` while there is none."""
    fresh: int
    """How many of `starts` were counted before this look (sealed counting)."""
    paths: Mapping[Key, CellPath]
    provisional: Mapping[Key, Counts]
    """Counts of the open buckets that do not count yet."""
    memories: Mapping[Key, Memory]
    before: Mapping[Key, Mapping[int, Pair]] = field(default_factory=dict)
    """Arriving: labels and errors by bucket as of the look before."""
    sealed: tuple[int, ...] = ()
    """Starts of the buckets sealed by this look."""
    sealed_until: int = 0

    @property
    def ends(self) -> IntArray:
        """End of each counted bucket."""
        return np.array([*self.starts[1:], self.end] if self.starts else [], dtype=np.int64)


@dataclass(frozen=True, slots=True)
class Moment:
    """What a newly counted bucket, or a step, brought."""

    bucket: int
    """Index into `starts`."""
    window: int
    """Index of the shortest supporting window, -1: none."""
    kind: str | None
    """warning, warning-over, or neither."""
    crossed: bool
    """The total is at or over the threshold, or was before in this look."""


@dataclass(frozen=True, slots=True)
class Judged:
    """One cell after its new buckets or steps, before the limits that people are shown."""

    cell: Cell
    risk: float
    threshold: float
    total: float
    """After the newest bucket or step, rounded down to 1e-6 nats."""
    support: int
    """The shortest supporting window now, -1: none."""
    warning: Warned
    warned_before: bool
    trail: tuple[Moment, ...] = ()
    crossing: tuple[int, windows.Crossing] | None = None
    """Index of the newest counted bucket when the total first crossed in this look."""
    window: tuple[int, int] | None = None
    """Labels and errors of the likeliest window at the crossing, where they are not what the path says now."""
    withdrawn: bool = False
    """Arriving: a correction took away the crossing of a breach that had been raised."""
    depends: bool = False
    """Arriving: the delay of labels depends on their outcome."""
    memory: Mapping[str, Any] = field(default_factory=dict)
    """Arriving: what the next look must know of the path."""


def threshold(risk: float, part: Fraction) -> tuple[float, float]:
    """The risk of a cell rounded down and its threshold log(1/risk) in nats rounded up."""
    own = float(np.nextafter(float(Fraction(risk) * part), 0.0))
    return own, float(np.nextafter(-math.log(own), np.inf))


def judge(book: Book, cell: Cell, now: int) -> Judged:
    """Judge what newly counts of a cell, in the one order of docs/method.md."""
    if book.terms.count == "arriving":
        return _arriving(book, cell, now)
    return _sealed(book, cell)


def _warning_of(memory: Memory) -> Warned:
    return Warned(**memory["warning"]) if "warning" in memory else Warned()


def _mean_run(terms: Terms) -> float:
    """Log of the mean number of buckets to a false warning."""
    return math.log(max(2.0, terms.warn_every / terms.bucket))


def _tails(buckets: IntArray) -> IntArray:
    """The statistic of every window that ends with the last bucket, in order of its restart."""
    return np.ascontiguousarray(buckets[::-1].cumsum(axis=0)[::-1])


# --- sealed


def _sealed(book: Book, cell: Cell) -> Judged:
    terms, memory = book.terms, book.memories.get(cell.key, {})
    own, bar = threshold(terms.risk, cell.part)
    warning = _warning_of(memory)
    starts, ends, since = np.array(book.starts, dtype=np.int64), book.ends, book.fresh
    if since == len(starts):
        total = int(memory.get("total_micronats", 0)) / 1e6
        return Judged(cell, own, bar, total, int(memory.get("support", -1)), warning, warning.standing)
    design, buckets = design_of(terms), book.paths[cell.key].statistics
    restarts = windows.restarts(terms.service_life, terms.bucket)
    ages = ends[since:, None] - starts[None, :]
    mature = None if terms.window_at_least is None else ages >= terms.window_at_least
    above = breach_rate(terms.tolerance, terms.label_noise)
    totals = windows.totals(buckets, above, restarts, since=since, design=design, mature=mature)
    crossing, first = None, len(totals)
    if memory.get("breach") is None and (over := np.flatnonzero(totals >= bar)).size:
        first = int(over[0])
        at = since + first
        young = None if mature is None else mature[first, : at + 1]
        tails = _tails(buckets[: at + 1])
        crossing = (at, windows.crossing(tails, above, bar, restarts, design=design, mature=young))
    below = support_rate(terms.tolerance, terms.label_noise)
    enough = ages >= terms.support_at_least
    supports = windows.supports(buckets, below, own, restarts, since=since, long_enough=enough, design=design)
    after, happened = walk_warnings(warning, buckets, since, ends, above, _mean_run(terms), design=design)
    kinds = dict(happened)
    trail = tuple(
        Moment(since + i, int(window), kinds.get(since + i), crossed=i >= first) for i, window in enumerate(supports)
    )
    return Judged(
        cell, own, bar, float(totals[-1]), int(supports[-1]), after, warning.standing, trail=trail, crossing=crossing
    )


# --- arriving


@dataclass(slots=True)
class _Walk:
    """The counts while the steps of a path are taken, and what they bring."""

    book: Book
    cell: Cell
    counts: IntArray
    """(B, 2): labels and errors by bucket so far."""
    risk: float
    bar: float

    def add(self, step: Step) -> int:
        """Take a step; return the number of buckets from the release to the newest one with a label."""
        index = self.book.starts.index(step.bucket)
        self.counts[index] += (step.labels, step.errors)
        some = np.flatnonzero(self.counts[:, 0])
        return int(some[-1]) + 1 if some.size else 0

    def mature(self, count: int) -> npt.NDArray[np.bool_] | None:
        """Which windows are old enough to count towards a breach."""
        least = self.book.terms.window_at_least
        return None if least is None else self._ages(count) >= least

    def _ages(self, count: int) -> IntArray:
        ages: IntArray = self.book.ends[count - 1] - np.array(self.book.starts[:count], dtype=np.int64)
        return ages

    def total(self, count: int) -> float:
        """The total of all windows now."""
        terms = self.book.terms
        if not count:
            return 0.0
        above, flags = breach_rate(terms.tolerance, terms.label_noise), self.mature(count)
        restarts = windows.restarts(terms.service_life, terms.bucket)
        rows = self.counts[:count]
        flags = None if flags is None else flags[None]
        return float(windows.totals(rows, above, restarts, since=count - 1, mature=flags)[0])

    def crossing(self, count: int) -> windows.Crossing:
        """The rate and the likeliest start at a total that crossed."""
        terms = self.book.terms
        above = breach_rate(terms.tolerance, terms.label_noise)
        restarts = windows.restarts(terms.service_life, terms.bucket)
        return windows.crossing(_tails(self.counts[:count]), above, self.bar, restarts, mature=self.mature(count))

    def support(self, count: int) -> int:
        """The shortest supporting window now."""
        terms = self.book.terms
        if not count:
            return -1
        below = support_rate(terms.tolerance, terms.label_noise)
        restarts = windows.restarts(terms.service_life, terms.bucket)
        enough = (self._ages(count) >= terms.support_at_least)[None]
        rows = self.counts[:count]
        return int(windows.supports(rows, below, self.risk, restarts, since=count - 1, long_enough=enough)[0])

    def warn(self, state: Warned, count: int) -> tuple[Warned, str | None]:
        """The warning after a step; windows that a warning dropped stay dropped."""
        terms = self.book.terms
        if not count or state.reset >= count:
            return state, None
        rate = breach_rate(terms.tolerance, terms.label_noise)
        rows, ends = self.counts[:count], self.book.ends[:count]
        state, happened = walk_warnings(state, rows, count - 1, ends, rate, _mean_run(terms))
        return state, happened[0][1] if happened else None


def _arriving(book: Book, cell: Cell, now: int) -> Judged:
    terms, memory = book.terms, book.memories.get(cell.key, {})
    own, bar = threshold(terms.risk, cell.part)
    pairs = dict(zip(book.starts, map(tuple, book.paths[cell.key].statistics.tolist()), strict=True))
    counted: dict[int, Pair] = {start: (n, k) for start, (n, k) in pairs.items() if n}
    old = known_steps(memory)
    path = advance_path(book.before.get(cell.key, {}), counted, old)
    walk = _Walk(book, cell, np.zeros((len(book.starts), 2), dtype=np.int64), own, bar)
    for start, pair in path.base.items():
        walk.counts[book.starts.index(start)] = pair
    crossed_at = memory.get("crossed_at")
    had = memory.get("breach") is not None
    # A crossing before the first amended step stands whatever came later.
    stands = had and (crossed_at is None or crossed_at < path.replay)
    first: int | None = None
    crossing, window = None, None
    warning = _warning_of(memory)
    warned_before, trail, total, count = warning.standing, [], int(memory.get("total_micronats", 0)) / 1e6, 0
    for position, step in enumerate(path.steps):
        count = walk.add(step)
        if position < path.replay:
            continue
        total = walk.total(count)
        if not stands and first is None and total >= bar:
            first = position
            if not had:
                found = walk.crossing(count)
                crossing = (count - 1, found)
                n, k = walk.counts[found.likeliest : count].sum(axis=0).tolist()
                window = (n, k)
        if position >= len(old):
            warning, kind = walk.warn(warning, count)
            trail.append(Moment(max(count - 1, 0), walk.support(count), kind, crossed=stands or first is not None))
    support = trail[-1].window if trail else walk.support(count) if path.amended else int(memory.get("support", -1))
    kept = remembered(path.steps, book.sealed_until)
    delays = advance_delays(known_delays(memory), terms, _ends_of(book), counted, book.sealed, now)
    place = first if first is not None else crossed_at
    dropped = len([step for step in path.steps if step.labels]) - len(kept)
    extra: dict[str, Any] = {"steps": kept, "crossed_at": None if place is None else max(place - dropped, -1)}
    depends = False
    if cell.column == "":
        extra |= delays_memory(delays)
        tables = np.array(delays.tables, dtype=np.int64).reshape(-1, 4).T
        depends = bool(delays.tables) and bool(delay_test(*tables).depends.any())
    return Judged(
        cell,
        own,
        bar,
        total,
        support,
        warning,
        warned_before,
        trail=tuple(trail),
        crossing=crossing,
        window=window,
        withdrawn=had and not stands and first is None,
        depends=depends,
        memory=extra,
    )


def _ends_of(book: Book) -> dict[int, int]:
    return dict(zip(book.starts, book.ends.tolist(), strict=True))
