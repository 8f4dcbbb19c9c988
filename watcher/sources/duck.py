"""An embedded DuckDB for one pull: sees the named folders and nothing else, spills to its own folder, can be interrupted."""

from __future__ import annotations

import contextlib
import threading
from collections import namedtuple
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any, Final

import duckdb
import sqlalchemy as sa

from watcher.sources.dialects import DuckDBText
from watcher.sources.lines import LONGEST, Malformed
from watcher.sources.statement import Held

_FETCH: Final = 10_000
_DIALECT: Final = DuckDBText()


class Duck:
    """A connection in memory; use it as a context manager.

    `folders` are the only ones it may read, `scratch` is where it spills beyond `memory` bytes, `timeout` ends everything.
    """

    def __init__(self, folders: Sequence[Path], scratch: Path, memory: int, timeout: float) -> None:
        self._connection = duckdb.connect(":memory:")
        self._timeout = timeout
        self._timed_out = False
        self._timer = threading.Timer(max(timeout, 0.001), self._interrupt)
        self._timer.daemon = True
        allowed = sorted({str(folder.resolve()) for folder in folders} | {str(scratch.resolve())})
        for setting in (
            "SET TimeZone = 'UTC'",
            "SET preserve_insertion_order = false",
            "SET autoinstall_known_extensions = false",
            "SET autoload_known_extensions = false",
            "SET enable_progress_bar = false",
            f"SET memory_limit = '{memory // 1024} KiB'",
            f"SET temp_directory = {literal(str(scratch))}",
            f"SET allowed_directories = [{', '.join(literal(folder) for folder in allowed)}]",
            "SET enable_external_access = false",
        ):
            self._connection.execute(setting)

    def __enter__(self) -> Duck:
        self._timer.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._timer.cancel()
        self._connection.close()

    def _interrupt(self) -> None:
        self._timed_out = True
        with contextlib.suppress(duckdb.Error):
            self._connection.interrupt()

    @contextlib.contextmanager
    def _told(self) -> Iterator[None]:
        """Turn the engine's errors into reason codes."""
        if self._timed_out:
            raise Malformed("timeout", self._late())
        try:
            yield
        except duckdb.InterruptException as error:
            raise Malformed("timeout", self._late()) from error
        except duckdb.OutOfMemoryException as error:
            raise Malformed("out-of-memory", _first_lines(error)) from error
        except duckdb.Error as error:
            raise Malformed(_reason(str(error)), _first_lines(error)) from error

    def _late(self) -> str:
        return f"no answer within timeout = {self._timeout:g} s; raise it, or give the source less to read"

    def execute(self, sql: str) -> None:
        """Execute a statement without parameters."""
        with self._told():
            self._connection.execute(sql)

    def run(self, select: sa.Select[Any]) -> Iterator[Any]:
        """Execute a SELECT and yield named tuples, as they come."""
        sql, values = text_of_statement(select)
        with self._told():
            cursor = self._connection.execute(sql, values)
        row_type = namedtuple("Row", [column[0] for column in cursor.description], rename=True)  # type: ignore[misc]
        while True:
            with self._told():
                rows = cursor.fetchmany(_FETCH)
            if not rows:
                return
            yield from map(row_type._make, rows)

    def describe(self, relation: str) -> Mapping[str, Held]:
        """Return what each column of a relation holds."""
        with self._told():
            rows = self._connection.execute(f"DESCRIBE SELECT * FROM {relation}").fetchall()  # noqa: S608 - our own relation
        return {row[0]: _held(row[1]) for row in rows}

    def keep(self, name: str, select: sa.Select[Any]) -> int:
        """Keep the rows of a SELECT as a temporary table and return their number."""
        sql, values = text_of_statement(select)
        with self._told():
            self._connection.execute(f"CREATE OR REPLACE TEMP TABLE {name} AS {sql}", values)
            found = self._connection.execute(f"SELECT count(*) FROM {name}").fetchone()  # noqa: S608 - our own name
        assert found is not None
        return int(found[0])


def text_of_statement(select: sa.Select[Any]) -> tuple[str, list[Any]]:
    """Return a statement for DuckDB as text and the values of its parameters."""
    compiled = select.compile(dialect=_DIALECT, compile_kwargs={"render_postcompile": True})
    return str(compiled), [compiled.params[key] for key in compiled.positiontup or ()]


def literal(text: str) -> str:
    """Return a text as an SQL literal: for places that take no parameter."""
    return "'" + text.replace("'", "''") + "'"


def _held(declared: str) -> Held:
    if declared == "VARCHAR":
        return "text"
    if declared.startswith("TIMESTAMP WITH TIME ZONE"):
        return "instant"
    if declared.startswith(("TIMESTAMP", "DATE")):
        return "wall"
    return (
        "number"
        if declared.startswith(("DECIMAL", "DOUBLE", "FLOAT")) or declared.endswith("INT") or declared == "INTEGER"
        else "typed"
    )


def _reason(message: str) -> str:
    if "Maximum line size" in message or "maximum_line_size" in message or "max_line_size" in message:
        return "line-too-long"
    if "nvalid unicode" in message or "not utf-8" in message.lower():
        return "not-utf8"
    return "lines-unaccounted" if "CSV" in message else "unreadable"


def _first_lines(error: Exception) -> str:
    lines = [line.strip() for line in str(error).splitlines() if line.strip()]
    return " ".join(lines[:4])[:500]


def csv_relation(
    files: Sequence[Path], names: Sequence[str], delimiter: str, skip: int, *, quoted: bool, zipped: bool
) -> str:
    """Return the read_csv call that reads every column as text by position and guesses nothing."""
    columns = ", ".join(f"{literal(name)}: 'VARCHAR'" for name in names)
    paths = ", ".join(literal(str(path)) for path in files)
    quote = literal('"') if quoted else "''"
    return (
        f"read_csv([{paths}], header = false, skip = {skip}, auto_detect = false, delim = {literal(delimiter)}, "
        f"quote = {quote}, escape = {quote}, comment = '', null_padding = false, ignore_errors = false, strict_mode = true, "
        f"compression = '{'gzip' if zipped else 'none'}', max_line_size = {LONGEST + 97_152}, filename = true, "
        f"columns = {{{columns}}})"
    )
