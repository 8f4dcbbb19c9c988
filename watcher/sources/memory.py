"""A source that holds its rows itself: for notebooks, drafts and tests; counts with the same statement as the others."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable, Iterator, Mapping, Sequence
from datetime import datetime
from typing import Any

import sqlalchemy as sa
from sqlalchemy.pool import StaticPool

from watcher.errors import SourceFailed
from watcher.records import Question, RejectedRow, Tally
from watcher.sources.base import Survey
from watcher.sources.database import equip
from watcher.sources.header import missing
from watcher.sources.statement import Statement, Table, parts_of
from watcher.sources.surveying import SAMPLE, survey_of
from watcher.sources.tallying import answer, rejected_row, shared


class MemorySource:
    """Rows given as mappings from column to value; None, text, numbers, booleans and aware datetimes.

    `columns` names them in order; values of columns that a row lacks are NULL.
    """

    def __init__(
        self, name: str, columns: Sequence[str], rows: Iterable[Mapping[str, object]], slice_limit: int = 200
    ) -> None:
        self._name, self._columns, self._limit = name, list(columns), slice_limit
        connection = sqlite3.connect(":memory:", check_same_thread=False)
        equip(connection)
        self._engine = sa.create_engine("sqlite://", creator=lambda: connection, poolclass=StaticPool)
        self._table = sa.Table(
            "samples", sa.MetaData(), *[sa.Column(f"n{i}", sa.Text()) for i in range(len(self._columns))]
        )
        self._table.create(self._engine)
        self.add(rows)

    def add(self, rows: Iterable[Mapping[str, object]]) -> None:
        """Append rows: what a table does between two looks."""
        values = [{f"n{i}": _text(row.get(name)) for i, name in enumerate(self._columns)} for row in rows]
        if values:
            with self._engine.begin() as connection:
                connection.execute(self._table.insert(), values)

    @property
    def name(self) -> str:
        """The source's name."""
        return self._name

    def signature(self) -> None:
        """Return None: every look reads."""
        return

    def columns(self) -> list[str]:
        """Return the columns as given."""
        return list(self._columns)

    def tally(self, questions: Sequence[Question]) -> list[Tally]:
        """Answer all questions."""
        return shared(questions, lambda q: answer(self._statement(q), self._run, self._name, self._limit, None))

    def rejected(self, question: Question, reason: str, limit: int = 20) -> list[RejectedRow]:
        """Return at most `limit` of the rows that were rejected for `reason`."""
        rows = self._run(self._statement(question).rejected_rows(reason, limit))
        return [rejected_row(question, reason, "memory", None, row, keep=True) for row in rows]

    def survey(self, question: Question | None = None) -> Survey:
        """Look at the columns and first rows (no question), or at the values that a question would read."""
        names = tuple(self._columns)
        if question is not None:
            return survey_of(self._statement(question), self._run, names)
        rows = self._run(sa.select(self._table).limit(SAMPLE))
        return Survey(names, tuple(tuple(row) for row in rows))

    def _statement(self, question: Question) -> Statement:
        wanted = parts_of(question)
        for name in wanted:
            if name not in self._columns:
                raise SourceFailed(self._name, "column-missing", missing(name, self._columns, "the table in memory"))
        columns = {name: self._table.c[f"n{self._columns.index(name)}"] for name in wanted}
        return Statement(question, Table(self._table, columns, dict.fromkeys(wanted, "text")))

    def _run(self, select: sa.Select[Any]) -> Iterator[Any]:
        with self._engine.connect() as connection:
            yield from connection.execute(select)


def _text(value: object) -> str | None:
    if value is None:
        return None
    if isinstance(value, datetime):
        if value.tzinfo is None:
            raise ValueError(f"datetime {value} has no time zone; give aware datetimes")
        return value.isoformat()
    return ("true" if value else "false") if isinstance(value, bool) else str(value)
