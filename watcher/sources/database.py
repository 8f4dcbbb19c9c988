"""Database sources through SQLAlchemy: the database counts, in one read-only snapshot, within a time limit."""

from __future__ import annotations

import contextlib
import sqlite3
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any, Final
from urllib.parse import quote

import sqlalchemy as sa
from sqlalchemy.exc import DBAPIError, SQLAlchemyError
from sqlalchemy.pool import NullPool

from watcher.errors import NotAvailable, SourceFailed, UsageError
from watcher.records import Question, RejectedRow, Tally
from watcher.sources import normal
from watcher.sources.base import SourceSpec, Survey
from watcher.sources.header import missing
from watcher.sources.statement import Held, Statement, Table, parts_of
from watcher.sources.surveying import SAMPLE, survey_of
from watcher.sources.tallying import answer, rejected_row, shared

_CONNECT: Final = 10
"""Seconds to reach a server."""
_POSTGRESQL: Final[Mapping[int, Held]] = {
    **dict.fromkeys((18, 19, 25, 1042, 1043), "text"),
    1184: "instant",
    1114: "wall",
    1082: "wall",
    **dict.fromkeys((20, 21, 23, 700, 701, 1700), "number"),
}
"""Type numbers of PostgreSQL -> what such a column holds."""
_FUNCTIONS: Final[Mapping[str, tuple[int, Callable[..., Any]]]] = {
    "watcher_plain": (1, normal.plain),
    "watcher_number": (1, normal.number_of),
    "watcher_wall": (1, normal.wall_of),
    "watcher_zoned": (1, normal.zoned_of),
    "watcher_count": (2, normal.count_of),
}


class DatabaseSource:
    """A table or query of SQLite or PostgreSQL.

    Raises `NotAvailable` at construction for other databases, `UsageError` for a url that cannot be read.
    """

    def __init__(self, spec: SourceSpec) -> None:
        self._spec = spec
        try:
            self._url = sa.make_url(spec.url or "")
        except SQLAlchemyError as error:
            raise UsageError(
                f"source {spec.name!r}: the url is not of the form dialect://user@host/database"
            ) from error
        if self._url.get_backend_name() not in ("sqlite", "postgresql"):
            raise NotAvailable(f"source.{spec.name}.url", self.shown_url, "use sqlite or postgresql")
        if bool(spec.table) == bool(spec.query):
            raise UsageError(f"source {spec.name!r}: give either table or query_file")

    @property
    def name(self) -> str:
        """The source's name in the configuration."""
        return self._spec.name

    @property
    def shown_url(self) -> str:
        """The url without user, password and options."""
        return shown(self._url)

    def signature(self) -> None:
        """Return None: a database does not tell whether it changed."""
        return

    def columns(self) -> list[str]:
        """Return the columns of the table or query, in order."""
        with self._session() as session:
            return list(session.holds)

    def tally(self, questions: Sequence[Question]) -> list[Tally]:
        """Answer all questions from one snapshot."""
        with self._session() as session:
            session.bound_rows()
            limit = self._spec.slice_limit
            return shared(questions, lambda q: answer(session.statement(q), session.run, self.name, limit, None))

    def rejected(self, question: Question, reason: str, limit: int = 20) -> list[RejectedRow]:
        """Return at most `limit` of the rows that were rejected for `reason`."""
        place = self._spec.table or "query"
        with self._session() as session:
            rows = session.run(session.statement(question).rejected_rows(reason, limit))
            return [rejected_row(question, reason, place, None, row, keep=self._spec.keep_raw) for row in rows]

    def survey(self, question: Question | None = None) -> Survey:
        """Look at the columns and first rows (no question), or at the values that a question would read."""
        with self._session() as session:
            names = tuple(session.holds)
            if question is not None:
                return survey_of(session.statement(question), session.run, names)
            rows = session.run(sa.select(sa.text("*")).select_from(session.rows).limit(SAMPLE))
            return Survey(names, tuple(tuple(None if value is None else str(value) for value in row) for row in rows))

    # --- one snapshot -------------------------------------------------------------------------------------------------

    @contextlib.contextmanager
    def _session(self) -> Iterator[_Session]:
        deadline = time.monotonic() + self._spec.timeout
        sqlite = self._url.get_backend_name() == "sqlite"
        engine = _sqlite(self._url, self._spec.base, deadline) if sqlite else _postgresql(self._url)
        stage = "unreachable"
        try:
            with engine.connect() as connection, connection.begin():
                stage = "unreadable"
                yield _Session(connection, self._spec, deadline)
        except (SQLAlchemyError, sqlite3.Error, OSError) as error:
            reason = _reason(error, stage)
            raise SourceFailed(
                self.name, reason, f"{self.shown_url}: {scrubbed(_first_line(error), self._url)}"
            ) from None
        finally:
            engine.dispose()


class _Session:
    """An open snapshot: the relation, what its columns hold, and the way to run a SELECT on it."""

    def __init__(self, connection: sa.Connection, spec: SourceSpec, deadline: float) -> None:
        self._connection, self._spec, self._deadline = connection, spec, deadline
        if spec.table:
            *schema, table = spec.table.split(".")
            self.rows: sa.FromClause = sa.table(table, schema=".".join(schema) or None)
        else:
            # colons would be taken for parameters
            text = (spec.query or "").strip().rstrip(";").replace(":", "\\:")
            self.rows = sa.text(f"({text}) AS samples")  # type: ignore[assignment]
        self.holds = self._described()

    def _described(self) -> dict[str, Held]:
        result = self._execute(sa.select(sa.text("*")).select_from(self.rows).limit(0))
        description: Sequence[Any] = result.cursor.description or ()
        names = list(result.keys())
        if self._connection.dialect.name == "sqlite":
            return dict.fromkeys(names, "text")
        return {name: _POSTGRESQL.get(column[1], "typed") for name, column in zip(names, description, strict=True)}

    def _execute(self, select: sa.Select[Any]) -> sa.CursorResult[Any]:
        left = self._deadline - time.monotonic()
        if left <= 0:
            raise self._failed("timeout", f"no answer within timeout = {self._spec.timeout:g} s")
        if self._connection.dialect.name == "postgresql":
            self._connection.exec_driver_sql(f"SET LOCAL statement_timeout = {max(1, int(left * 1000))}")
        return self._connection.execute(select)

    def run(self, select: sa.Select[Any]) -> Iterator[Any]:
        """Execute a SELECT and yield its rows: no more than there are groups."""
        yield from self._execute(select).fetchall()

    def bound_rows(self) -> None:
        """Refuse a relation with more than max_rows rows; stops counting there."""
        most = self._spec.max_rows
        if most is None:
            return
        some = sa.select(sa.literal_column("1").label("one")).select_from(self.rows).limit(most + 1).subquery("some")
        found = next(iter(self.run(sa.select(sa.func.count()).select_from(some))))[0]
        if found > most:
            raise self._failed(
                "too-many-rows",
                f"the relation has more than max_rows = {most} rows; raise it or give a query that reads less",
            )

    def statement(self, question: Question) -> Statement:
        """Return the statement for one question; refuses columns that are missing or hold the wrong kind of time."""
        wanted = parts_of(question)
        place = self._spec.table or "the query"
        for name in wanted:
            if name not in self.holds:
                raise self._failed("column-missing", missing(name, list(self.holds), place))
        for column in (question.columns.time, question.columns.labelled_at):
            if column is not None:
                self._check_time(question, column)
        columns = {name: sa.column(name, _TYPES.get(self.holds[name])) for name in wanted}
        rows = self.rows
        if isinstance(rows, sa.TableClause):
            rows = sa.table(str(rows.name), *columns.values(), schema=rows.schema)
            columns = {name: rows.c[name] for name in wanted}
        return Statement(question, Table(rows, columns, {name: self.holds[name] for name in wanted}))

    def _check_time(self, question: Question, name: str) -> None:
        held = self.holds[name]
        if self._connection.dialect.name == "sqlite":
            return
        if question.time_format == "rfc3339":
            if held == "wall" and question.source_time_zone is None:
                raise self._failed(
                    "time-without-offset",
                    f"column {name!r} holds times without an offset; declare the source's time_zone",
                )
            if held not in ("instant", "wall"):
                raise self._failed(
                    "time-not-typed",
                    f"column {name!r} is no timestamp; give a timestamp column, or a query that casts it",
                )
        elif held != "number":
            raise self._failed(
                "time-not-typed", f"column {name!r} is no number, and time_format is {question.time_format!r}"
            )

    def _failed(self, reason: str, detail: str) -> SourceFailed:
        return SourceFailed(self._spec.name, reason, detail)


_TYPES: Final[Mapping[str, Any]] = {"instant": sa.DateTime(timezone=True), "wall": sa.DateTime(), "text": sa.Text()}


def _sqlite(url: sa.URL, base: Path, deadline: float) -> sa.Engine:
    path = base / (url.database or "")

    def connect() -> sqlite3.Connection:
        if not path.is_file():
            raise FileNotFoundError(2, "no such file", path.name)
        connection = sqlite3.connect(f"file:{quote(str(path.resolve()))}?mode=ro", uri=True, isolation_level=None)
        equip(connection)
        connection.execute("PRAGMA query_only = ON")
        connection.set_progress_handler(lambda: int(time.monotonic() > deadline), 100_000)
        return connection

    engine = sa.create_engine("sqlite://", creator=connect, poolclass=NullPool)
    # the driver opens no transaction for a SELECT by itself; one snapshot needs one
    sa.event.listen(engine, "begin", lambda connection: connection.exec_driver_sql("BEGIN"))
    return engine


def equip(connection: sqlite3.Connection) -> None:
    """Register the functions that the statement's words need on an SQLite connection."""
    for name, (parameters, function) in _FUNCTIONS.items():
        connection.create_function(name, parameters, function, deterministic=True)


def _postgresql(url: sa.URL) -> sa.Engine:
    if url.drivername == "postgresql":
        url = url.set(drivername="postgresql+psycopg")
    options = "-c TimeZone=UTC -c default_transaction_read_only=on -c DateStyle=ISO"
    engine = sa.create_engine(url, poolclass=NullPool, connect_args={"connect_timeout": _CONNECT, "options": options})
    return engine.execution_options(isolation_level="REPEATABLE READ", postgresql_readonly=True)


def shown(url: sa.URL) -> str:
    """Return a url without user, password and options: what may be printed."""
    bare = sa.URL.create(url.drivername, host=url.host, port=url.port, database=url.database)
    return bare.render_as_string(hide_password=True)


def scrubbed(message: str, url: sa.URL) -> str:
    """Return a driver's message without the user and password of the url."""
    for secret in (url.password, url.username):
        if secret:
            message = message.replace(str(secret), "***")
    return message


def _first_line(error: BaseException) -> str:
    cause = error.orig if isinstance(error, DBAPIError) and error.orig is not None else error
    return (str(cause).strip().splitlines() or [type(cause).__name__])[0][:500]


def _reason(error: BaseException, stage: str) -> str:
    if isinstance(error, FileNotFoundError):
        return "missing"
    cause = error.orig if isinstance(error, DBAPIError) else error
    state, text = getattr(cause, "sqlstate", None), str(cause)
    if state == "57014" or text == "interrupted":
        return "timeout"
    if state in ("42P01", "3F000") or text.startswith("no such table"):
        return "missing"
    return stage
