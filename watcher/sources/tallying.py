"""From the rows of the statement to a tally: runs what one question needs and folds crossed cells into views."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import sqlalchemy as sa

from watcher.buckets import bucket_starts, local_start
from watcher.errors import SourceFailed, UsageError
from watcher.records import INTEGERS, CellCounts, Counts, Question, RejectedRow, Tally
from watcher.sources.normal import number_of
from watcher.sources.statement import DUPLICATE, OUTSIDE, USABLE, Statement, parts_of, reason_of

Run = Callable[[sa.Select[Any]], Iterable[Any]]
"""Executes a SELECT and yields rows with named columns, as they come."""

CROSSED: int = 1000
"""The most combinations of slice values that are counted crossed, in one statement."""


@dataclass(slots=True)
class _Fold:
    question: Question
    limit: int
    source: str
    cells: dict[tuple[str, str, int, str], list[int]] = field(default_factory=dict)
    newest: dict[tuple[str, str, int, str], int] = field(default_factory=dict)
    values: dict[str, set[str]] = field(default_factory=dict)
    kinds: dict[int, int] = field(default_factory=dict)
    ahead: bool = False
    starts: dict[int, int] = field(default_factory=dict)

    def __post_init__(self) -> None:
        q = self.question
        for start in bucket_starts(q.open_from, q.now + 1, q.bucket, q.time_zone):
            self.starts.setdefault(local_start(start, q.bucket, q.time_zone), start)

    def add(self, row: Any, slices: Sequence[str], *, whole: bool) -> None:
        """Take in one row of the statement over the crossed `slices`; `whole`: it also counts for the whole."""
        if whole:
            self.kinds[row.kind] = self.kinds.get(row.kind, 0) + row.predictions
            self.ahead = self.ahead or bool(getattr(row, "ahead", 0))
        if row.kind != USABLE:
            return
        views = [("", "")] if whole else []
        for i, column in enumerate(slices):
            value = getattr(row, f"k{i}")
            seen = self.values.setdefault(column, set())
            seen.add(value)
            if len(seen) > self.limit:
                raise TooManyValues(column)
            views.append((column, value))
        start = self.starts[row.bucket]
        for column, value in views:
            key = (column, value, start, row.level)
            sums = self.cells.setdefault(key, [0] * len(INTEGERS))
            for i, name in enumerate(INTEGERS):
                sums[i] += getattr(row, name, 0) or 0
            if row.newest is not None:
                self.newest[key] = max(self.newest.get(key, row.newest), row.newest)

    def tally(self, late_labels: int) -> Tally:
        q = self.question
        cells = tuple(
            CellCounts(*key, Counts(**dict(zip(INTEGERS, sums, strict=True)), newest=self.newest.get(key)))
            for key, sums in sorted(self.cells.items())
        )
        rejected = {
            reason: rows for kind, rows in sorted(self.kinds.items()) if (reason := reason_of(kind)) is not None
        }
        return Tally(
            promise=q.promise,
            version=q.version,
            cells=cells,
            rejected=rejected,
            duplicates=self.kinds.get(DUPLICATE, 0),
            outside=self.kinds.get(OUTSIDE, 0),
            late_labels=late_labels,
            has_future=self.ahead or "future-time" in rejected,
        )


class TooManyValues(Exception):
    """A slice column turned out to have more values than allowed while its counts were coming in."""

    def __init__(self, column: str) -> None:
        self.column = column
        super().__init__(column)


def shared(questions: Sequence[Question], one: Callable[[Question], Tally]) -> list[Tally]:
    """Answer every question, those of promises that ask the same thing with one statement."""
    found: dict[Question, Tally] = {}
    for q in questions:
        same = replace(q, promise="", version="")
        if same not in found:
            found[same] = one(q)
    return [replace(found[replace(q, promise="", version="")], promise=q.promise, version=q.version) for q in questions]


def answer(statement: Statement, run: Run, source: str, slice_limit: int, sample: int | None) -> Tally:
    """Answer one question; `sample` = number of rows in which slice values are counted beforehand, None: all.

    Raises `SourceFailed` ("too-many-values") when a slice column has more values than allowed.
    """
    q = statement.question
    check(q)
    limit = min(slice_limit, q.slice_limit)
    sizes = _sizes(statement, run, sample)
    _refuse(q, sizes, limit, source)
    crossed = 1
    for size in sizes:
        crossed *= max(1, size)
    views: list[tuple[str, ...]] = [q.slices]
    if len(q.slices) > 1 and crossed > CROSSED:
        views = [(column,) for column in q.slices]
    if q.columns.cluster:
        views = [(), *((column,) for column in q.slices)]
    fold = _Fold(q, limit, source)
    try:
        for i, slices in enumerate(views):
            for row in run(statement.counted(slices)):
                fold.add(row, slices, whole=i == 0)
    except TooManyValues:
        _refuse(q, _sizes(statement, run, None), limit, source)
        raise
    late = 0
    if q.columns.labelled_at and q.now - q.label_lag > q.released:
        late = next(iter(run(statement.late_labels())))[0]
    return fold.tally(late)


def rejected_row(q: Question, reason: str, place: str, line: int | None, row: Any, *, keep: bool) -> RejectedRow:
    """Return a row of `rejected_rows` with its values by column; `keep` = False leaves out what may be personal."""
    if not keep:
        return RejectedRow(q.promise, reason, place, line, None, {})
    values = {name: None if value is None else str(value) for name, value in zip(parts_of(q), row, strict=False)}
    return RejectedRow(q.promise, reason, place, line, values[q.columns.id] if q.columns.id else None, values)


def _sizes(statement: Statement, run: Run, sample: int | None) -> list[int]:
    return list(next(iter(run(statement.values(sample))))) if statement.question.slices else []


def _refuse(q: Question, sizes: Sequence[int], limit: int, source: str) -> None:
    for column, size in zip(q.slices, sizes, strict=True):
        if size > limit:
            raise SourceFailed(
                source,
                "too-many-values",
                f"slice column {column!r} of promise {q.promise!r} has at least {size} values and slice_limit is {limit}; "
                f"leave it out of 'slices', choose a column with fewer values, or raise slice_limit",
            )


def check(q: Question) -> None:
    """Refuse a question that no statement can answer; UsageError says which part is in the way."""
    c = q.columns
    designs = [name for name in ("weight", "cluster", "selected") if getattr(c, name)]
    if len(designs) > 1:
        raise UsageError(f"columns {' and '.join(designs)} are mapped together; a promise follows one sampling design")
    if not (c.label and c.prediction) and not c.error and not c.loss:
        raise UsageError("columns: map label and prediction, or error, or loss")
    if c.loss and (c.cluster or q.measure != "loss"):
        raise UsageError("columns.loss needs measure = 'loss' and no cluster")
    if bool(c.selected) != bool(c.labelling_probability):
        raise UsageError("columns.selected and columns.labelling_probability are mapped together or not at all")
    if q.measure in ("miss", "false-alarm") and (q.positive is None or not c.label):
        raise UsageError(f"measure = {q.measure!r} needs 'positive' and a label column")
    for level in (*q.weight_levels, *q.labelling_probabilities):
        if number_of(level) is None:
            raise UsageError(f"level {level!r} is not a decimal number")
