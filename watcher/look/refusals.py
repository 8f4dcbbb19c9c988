"""What a look refuses, each with the way out."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Final

from watcher.book import Table
from watcher.bounds.release import certify
from watcher.errors import UsageError, WatcherError
from watcher.look.promises import Evidence, Watched
from watcher.path import NOTHING, add, total
from watcher.records import (
    Counts,
    Question,
    Tally,
    Terms,
)
from watcher.sources.base import Source
from watcher.sources.normal import text_of
from watcher.verdict import moment

ONE_SIDED: Final = 1e-4
"""Chance of refusing a measure wrongly because no label of one side was met yet."""


class ClockWentBack(WatcherError):
    """The time of the look lies before the newest look of the ledger: no look was made."""

    def __init__(self, now: int, newest: int) -> None:
        self.now, self.newest = now, newest
        super().__init__(
            f"clock-went-back: it is {moment(now).isoformat()} and the newest look of the ledger was at "
            f"{moment(newest).isoformat()}; no look was made. Set the clock right, or use `watcher rehearse` to replay history"
        )


class NothingInCommon(UsageError):
    """Labels and predictions share no value: the columns are mapped wrongly, most likely."""

    def __init__(self, promise: str, predictions: Iterable[str], labels: Iterable[str]) -> None:
        self.predictions, self.labels = tuple(predictions), tuple(labels)
        super().__init__(
            f"promise {promise!r}: labels and predictions share no value. predictions: {', '.join(map(repr, self.predictions))}; "
            f"labels: {', '.join(map(repr, self.labels))}. Map the right columns, or declare classes"
        )


class WeakEvidence(UsageError):
    """The release evidence of a promise does not bear out its tolerance."""

    def __init__(self, promise: str, what: str, way_out: str) -> None:
        self.promise, self.what, self.way_out = promise, what, way_out
        super().__init__(f"promise {promise!r}: {what}. {way_out}")


class OneSided(UsageError):
    """The labels cannot support the measure: what would show the errors it counts is never labelled."""

    def __init__(self, promise: str, measure: str, labels: int, side: str) -> None:
        self.promise, self.measure = promise, measure
        super().__init__(
            f"promise {promise!r}: measure = {measure!r} is refused: of {labels:,} labelled samples none was predicted {side}, "
            f"although such predictions are made; a {measure.replace('-', ' ')} could never be seen. Label samples whatever was "
            'predicted, or give the promise a new version with measure = "error"'
        )


def refuse_strangers(source: Source, asked: Question, tally: Tally) -> None:
    """Refuse a first look at labels and predictions that share no value. Raises NothingInCommon."""
    whole = [row.counts for row in tally.cells if row.column == ""]
    labels, errors = sum(c.labels for c in whole), sum(c.errors for c in whole)
    if asked.columns.label is None or asked.classes or not labels or errors < labels:
        return
    survey = source.survey(asked)
    if survey.disjoint:
        raise NothingInCommon(asked.promise, (v for v, _ in survey.predictions), (v for v, _ in survey.labels))


def weak_evidence(terms: Terms, evidence: Evidence) -> WeakEvidence | None:
    """Why release evidence does not bear out the tolerance of a promise (method.md section 6); None when it does."""
    if terms.measure == "loss":
        what = "release_evidence counts errors and cannot bear out a promise about a loss"
        return WeakEvidence(terms.promise, what, "Leave it out; the promise is then shown as uncertified")
    found = certify(evidence.labels, evidence.errors, terms.risk, evidence.models)
    if found.bears_out(terms.tolerance):
        return None
    best = f", the best of {evidence.models:,} models," if evidence.models > 1 else ""
    least = f"{math.ceil(found.exact * 1e5) / 1e5:.5f}".rstrip("0")
    return WeakEvidence(
        terms.promise,
        f"{evidence.errors:,} errors in {evidence.labels:,} labels{best} bear out a tolerance of {least} at risk {terms.risk}, not "
        f"{terms.tolerance}",
        f"Promise {least}, bring more labels, or set uncertified = true, which every page then shows",
    )


def refuse_weak_evidence(watched: Iterable[Watched]) -> None:
    """Raise WeakEvidence for the first promise whose release evidence does not bear it out, unless it is uncertified."""
    for each in watched:
        if each.evidence is not None and not each.uncertified and not each.retired:
            weak = weak_evidence(each.terms, each.evidence)
            if weak is not None:
                raise weak


def refuse_one_sided(source: Source, asked: Question, sealed: Counts) -> None:
    """Raise OneSided when all labels of the sealed buckets are on the side of the predictions that cannot err as measured.

    If labels were drawn whatever was predicted, a false refusal EVER has chance below 1e-4: it takes as many labels as make
    it that unlikely to have met none of the other side.
    """
    misses = asked.measure == "miss"
    if not sealed.labels or not (misses or asked.measure == "false-alarm"):
        return
    positive = sealed.positives - sealed.misses + sealed.false_alarms
    if (sealed.labels - positive if misses else positive) > 0:
        return
    known = source.survey(asked).predictions
    every = sum(rows for _, rows in known)
    likewise = sum(rows for value, rows in known if value == text_of(asked.positive))
    other = every - likewise if misses else likewise
    if other and sealed.labels * math.log1p(-min(other / every, 1.0 - 1e-12)) < math.log(ONE_SIDED):
        raise OneSided(asked.promise, asked.measure, sealed.labels, "negative" if misses else "positive")


def sealed_counts(counts: Table, until: int) -> Counts:
    """Everything of the whole in the buckets before `until`."""
    found = NOTHING
    for start, levels in counts.get(("", ""), {}).items():
        found = add(found, total(levels)) if start < until else found
    return found
