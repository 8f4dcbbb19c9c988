"""A source in which the classifier does worse from some day on: labels of the tallied counts are flipped by seeded chance.

Only counts are changed, never rows: as many labels, other outcomes. What is drawn for a part of the samples is added to the
whole and to every slice that these samples belong to, so that all views of a bucket stay views of the same samples.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Final, Literal

import numpy as np

from watcher.errors import UsageError
from watcher.records import Counts, Question, RejectedRow, Tally
from watcher.sources.base import Source, Survey

Key = tuple[str, str]
WHOLE: Final[Key] = ("", "")
Side = Literal["positive", "negative"]
SIDES: Final[tuple[Side, ...]] = ("positive", "negative")


@dataclass(frozen=True, slots=True)
class Injection:
    """What is to happen to the error rate."""

    start: int
    """Epoch seconds: buckets that begin at or after it are changed."""
    factor: float | None = None
    """A multiple of the rate seen before, > 0; or `rate`."""
    rate: float | None = None
    """The rate itself, in (0, 1)."""
    column: str = ""
    value: str = ""
    """Only samples with this value in this column; both empty: all."""
    seed: int = 0


@dataclass(frozen=True, slots=True)
class Applied:
    """What an injection came down to for one promise version."""

    promise: str
    version: str
    labels: int
    """Labels of the affected part that the rate before was taken from."""
    errors: int
    before: bool
    """They lie before the start; False: nothing was labelled there, so that all of history was taken."""
    target: float
    """The rate that labels from the start on have in the mean."""
    chance: float
    """With which a label is flipped."""
    worse: bool
    """Correct ones are flipped; False: wrong ones."""


@dataclass(slots=True)
class _Drawn:
    """What was drawn so far of one bucket, level and side: more labels add to it, nothing is drawn twice."""

    random: np.random.Generator
    pools: dict[Key, int] = field(default_factory=dict)
    flips: dict[Key, int] = field(default_factory=dict)


class InjectedSource:
    """Another source's answers with drift in them; the same seed and history give the same counts.

    `until` (epoch seconds) is the newest time that will be asked about: the rate before is taken from the history up to it.
    """

    def __init__(self, inner: Source, injection: Injection, until: int) -> None:
        self._inner = inner
        self._injection = injection
        self._until = until
        self._drawn: dict[tuple[str, str, Side, int, str], _Drawn] = {}
        self.applied: dict[tuple[str, str], Applied] = {}

    @property
    def name(self) -> str:
        """The source's name."""
        return self._inner.name

    def signature(self) -> str | None:
        """Of the source itself."""
        return self._inner.signature()

    def columns(self) -> list[str]:
        """Of the source itself."""
        return self._inner.columns()

    def survey(self, question: Question | None = None) -> Survey:
        """Of the source itself: values are as they were."""
        return self._inner.survey(question)

    def rejected(self, question: Question, reason: str, limit: int = 20) -> list[RejectedRow]:
        """Of the source itself: no row is changed."""
        return self._inner.rejected(question, reason, limit)

    def tally(self, questions: Sequence[Question]) -> list[Tally]:
        """Count, then flip. Raises what the source raises, and UsageError where flipping would not be consistent."""
        for question in questions:
            refuse(question)
            if (question.promise, question.version) not in self.applied:
                self._find_chance(question)
        parts = [self._part(question) for question in questions] if self._injection.column else []
        found = self._inner.tally([*questions, *parts])
        tallies = found[: len(questions)]
        affected = found[len(questions) :] or tallies
        return [self._flipped(*each) for each in zip(questions, tallies, affected, strict=True)]

    def _part(self, question: Question) -> Question:
        """The same question about the affected samples alone, counted by the same slices."""
        own = (self._injection.column, self._injection.value)
        if not self._injection.column or own in question.where:
            return question
        return replace(question, where=(*question.where, own))

    def _find_chance(self, question: Question) -> None:
        asked = replace(self._part(question), open_from=question.released, now=self._until, at_given=True)
        [tally] = self._inner.tally([asked])
        whole = [row for row in tally.cells if (row.column, row.value) == WHOLE]
        before = [row.counts for row in whole if row.bucket < self._injection.start]
        labels, errors = _rate(question, before)
        early = labels > 0
        if not early:
            labels, errors = _rate(question, [row.counts for row in whole])
        key = (question.promise, question.version)
        self.applied[key] = chance_of(self._injection, key, labels, errors, before=early)

    def _flipped(self, question: Question, tally: Tally, affected: Tally) -> Tally:
        self._check(tally, affected)
        flips = self._flips(question, affected)
        cells = []
        for row in tally.cells:
            counts = row.counts
            for side in _sides(question):
                drawn = flips.get((side, row.bucket, row.level), {})
                counts = self._with(question, counts, side, drawn.get((row.column, row.value), 0))
            cells.append(replace(row, counts=counts))
        return replace(tally, cells=tuple(cells))

    def _check(self, tally: Tally, affected: Tally) -> None:
        """Every affected sample must be among those that the promise counts, in every view."""
        all_of = {(row.column, row.value, row.bucket, row.level): row.counts for row in tally.cells}
        for row in affected.cells:
            found = all_of.get((row.column, row.value, row.bucket, row.level), Counts())
            if row.bucket >= self._injection.start and not _within(row.counts, found):
                raise UsageError(
                    f"inject: slice {self._injection.column}={self._injection.value}: more samples have this value than the "
                    "promise counts: the value changes between revisions of a sample, so that nothing consistent can be "
                    "injected into it; inject without a slice"
                )

    def _flips(self, question: Question, affected: Tally) -> dict[tuple[Side, int, str], Mapping[Key, int]]:
        applied = self.applied[question.promise, question.version]
        pools: dict[tuple[Side, int, str], dict[Key, int]] = {}
        for row in affected.cells:
            if row.bucket >= self._injection.start:
                for side in _sides(question):
                    pool = _pool(row.counts, side, worse=applied.worse)
                    pools.setdefault((side, row.bucket, row.level), {})[row.column, row.value] = pool
        return {place: self._draw(question, place, pool, applied.chance) for place, pool in pools.items()}

    def _draw(
        self, question: Question, place: tuple[Side, int, str], pools: Mapping[Key, int], chance: float
    ) -> Mapping[Key, int]:
        key = (question.promise, question.version, *place)
        drawn = self._drawn.get(key)
        if drawn is None or any(pools.get(cell, 0) < before for cell, before in drawn.pools.items()):
            # A label was taken back or put right: this bucket is drawn afresh.
            drawn = self._drawn[key] = _Drawn(_random(self._injection.seed, key))
        _add(drawn, pools, chance)
        return drawn.flips

    def _with(self, question: Question, counts: Counts, side: Side, flips: int) -> Counts:
        if not flips:
            return counts
        change = flips if self.applied[question.promise, question.version].worse else -flips
        misses = counts.misses + (change if side == "positive" else 0)
        told = side == "negative" and question.positive is not None and question.columns.error is None
        return replace(
            counts,
            errors=counts.errors + change,
            misses=misses,
            false_alarms=counts.false_alarms + (change if told else 0),
        )


def refuse(question: Question) -> None:
    """Raise UsageError for what cannot be injected into consistently."""
    if question.measure == "loss":
        raise UsageError(
            f"inject: promise {question.promise!r} has measure = 'loss': flipping labels says nothing about a loss between 0 "
            "and 1; rehearse it without --inject"
        )
    if question.columns.cluster is not None:
        raise UsageError(
            f"inject: promise {question.promise!r} counts clusters: errors of one cluster occur together, and how is not known "
            "from the counts; rehearse it without --inject"
        )


def chance_of(injection: Injection, key: tuple[str, str], labels: int, errors: int, *, before: bool) -> Applied:
    """The chance of a flip that takes the rate errors/labels to the wanted one; raises UsageError where there is none."""
    where = f" with {injection.column} = {injection.value!r}" if injection.column else ""
    if not labels:
        raise UsageError(f"inject: promise {key[0]!r} has no labelled sample{where}; nothing can be injected")
    rate = errors / labels
    if injection.rate is not None:
        target = injection.rate
    else:
        assert injection.factor is not None
        if not errors:
            raise UsageError(
                f"inject: promise {key[0]!r} had no error{where}, and a multiple of 0 is 0; give the rate itself: rate=0.05"
            )
        target = injection.factor * rate
    if not 0 <= target <= 1:
        raise UsageError(f"inject: {injection.factor:g} times {rate:.4g} is {target:.4g}: a rate is at most 1")
    worse = target >= rate
    chance = (target - rate) / (1 - rate) if worse and rate < 1 else (rate - target) / rate if not worse else 0.0
    return Applied(*key, labels, errors, before, target, chance, worse)


def _sides(question: Question) -> Iterator[Side]:
    if question.measure != "false-alarm":
        yield "positive"
    if question.measure != "miss":
        yield "negative"


def _rate(question: Question, found: Sequence[Counts]) -> tuple[int, int]:
    labels = errors = 0
    for counts in found:
        for side in _sides(question):
            wrong = _pool(counts, side, worse=False)
            labels += wrong + _pool(counts, side, worse=True)
            errors += wrong
    return labels, errors


def _pool(counts: Counts, side: Side, *, worse: bool) -> int:
    """How many labels of one side can be flipped: the correct ones to do worse, the wrong ones to do better.

    Without a positive class every label is on the negative side.
    """
    of_side = counts.positives if side == "positive" else counts.labels - counts.positives
    wrong = counts.misses if side == "positive" else counts.errors - counts.misses
    return of_side - wrong if worse else wrong


def _within(part: Counts, every: Counts) -> bool:
    return all(
        _pool(part, side, worse=worse) <= _pool(every, side, worse=worse) for side in SIDES for worse in (True, False)
    )


def _add(drawn: _Drawn, pools: Mapping[Key, int], chance: float) -> None:
    """Draw for the labels that came: how many of all are flipped, then, column by column, whose they are.

    Given their number, the flipped ones are any subset of the labels that could be flipped: every column's numbers follow
    the hypergeometric law, and add up to the number for the whole.
    """
    more = {cell: pool - drawn.pools.get(cell, 0) for cell, pool in pools.items()}
    fresh = more.get(WHOLE, 0)
    flips = int(drawn.random.binomial(fresh, chance))
    for column in sorted({column for column, _ in pools}):
        cells = sorted(cell for cell in pools if cell[0] == column)
        sizes = np.array([more[cell] for cell in cells], dtype=np.int64)
        assert int(sizes.sum()) == fresh, f"the values of {column!r} do not add up to the whole"
        taken = drawn.random.multivariate_hypergeometric(sizes, flips, method="marginals")
        for cell, number in zip(cells, taken.tolist(), strict=True):
            drawn.flips[cell] = drawn.flips.get(cell, 0) + int(number)
    drawn.pools = dict(pools)


def _random(seed: int, key: tuple[object, ...]) -> np.random.Generator:
    text = "\x00".join(map(str, (seed, *key)))
    return np.random.Generator(np.random.PCG64(int.from_bytes(hashlib.sha256(text.encode()).digest()[:16])))
