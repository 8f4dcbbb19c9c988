"""The words that engines spell differently: one class each, with its spelling for every engine.

Nothing else of the statement knows which engine runs it. A new engine needs a spelling of each word here and a reader.
Arguments are columns of an inner SELECT, never expressions, so that a spelling may repeat them.
"""

from __future__ import annotations

from typing import Any, Final

import sqlalchemy as sa
from sqlalchemy.dialects.postgresql.base import PGDialect
from sqlalchemy.ext.compiler import compiles
from sqlalchemy.sql.compiler import SQLCompiler
from sqlalchemy.sql.functions import FunctionElement

from watcher.sources.normal import COUNT, NUMBER, OFFSET, SPELLINGS, STAMP, WHOLE


class DuckDBText(PGDialect):
    """Writes a statement for DuckDB: PostgreSQL's grammar under a name of its own, so that no spelling leaks across."""

    name = "duckdb"
    supports_statement_cache = True

    def __init__(self) -> None:
        super().__init__(paramstyle="numeric_dollar")  # type: ignore[no-untyped-call]


class Trimmed(FunctionElement[str]):
    """The value as text without blanks at either end, compared byte by byte."""

    type = sa.Text()
    inherit_cache = True


class Plain(FunctionElement[str]):
    """A trimmed text in its one spelling (`normal.plain`)."""

    type = sa.Text()
    inherit_cache = True


class Number(FunctionElement[float]):
    """The double that a trimmed decimal text stands for, or NULL."""

    type = sa.Double()
    inherit_cache = True


class Exact(FunctionElement[str]):
    """The value as text to be compared byte by byte, whatever the column's own rules of comparison are."""

    type = sa.Text()
    inherit_cache = True


class Zoned(FunctionElement[int]):
    """The seconds since 1970 of an RFC 3339 text with an offset, blanks around it allowed, or NULL."""

    type = sa.BigInteger()
    inherit_cache = True


class Wall(FunctionElement[int]):
    """The wall clock seconds of an RFC 3339 text without an offset, blanks around it allowed, or NULL."""

    type = sa.BigInteger()
    inherit_cache = True


class Count(FunctionElement[int]):
    """The whole seconds of a text that counts units; the second argument says how many make a second."""

    type = sa.BigInteger()
    inherit_cache = True


class Digits(FunctionElement[bool]):
    """Whether a text consists of digits only."""

    type = sa.Boolean()
    inherit_cache = True


class Stamp(FunctionElement[int]):
    """The seconds of a typed date and time, fraction cut off, NULL outside the years 1970 to 2100."""

    type = sa.BigInteger()
    inherit_cache = True


class Amount(FunctionElement[int]):
    """The whole seconds of a typed number of units; the second argument says how many make a second."""

    type = sa.BigInteger()
    inherit_cache = True


class Digest(FunctionElement[int]):
    """An integer that equal texts share: fewer bytes to group by; different texts may share it too."""

    type = sa.BigInteger()
    inherit_cache = True


def _parts(element: FunctionElement[Any], compiler: SQLCompiler, **kw: Any) -> list[str]:
    return [compiler.process(clause, **kw) for clause in element.clauses]


def _spellings(text: str) -> str:
    return " ".join(
        f"WHEN {text} IN ({', '.join(repr(one) for one in spellings)}) THEN '{value}'" for value, spellings in SPELLINGS
    )


_WHOLE_UNTIL: Final = 15
"""Digits of the largest typed count believed: 2100 in milliseconds has 13."""


# --- DuckDB ---------------------------------------------------------------------------------------------------------
# TRY_CAST is never given a bare column: the optimizer would move the cast into the CSV reader, which then drops the row.


@compiles(Trimmed, "duckdb")
def _(element: Trimmed, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    # trim() with a set of characters is slow; most values start and end with something above the blank
    return f"(CASE WHEN {x} >= '!' AND right_grapheme({x}, 1) >= '!' THEN {x} ELSE trim({x}, E' \\t\\r\\n') END)"


@compiles(Plain, "duckdb")
def _(element: Plain, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    whole = f"contains({x}, '.0') AND regexp_full_match({x}, '{WHOLE}')"
    return f"(CASE WHEN {whole} THEN split_part({x}, '.', 1) {_spellings(x)} ELSE {x} END)"


@compiles(Number, "duckdb")
def _(element: Number, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"(CASE WHEN regexp_full_match({x}, '{NUMBER}') THEN TRY_CAST(trim({x}) AS DOUBLE) END)"


@compiles(Exact, "duckdb")
def _(element: Exact, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"CAST({x} AS VARCHAR)"


_BLANK: Final = "[ \\t\\r\\n]*"
_TRIMMED: Final = "trim({x}, E' \\t\\r\\n')"


def _duck_wall(text: str) -> str:
    return f"epoch_ms(TRY_CAST(left({text}, 19) AS TIMESTAMP)) // 1000"


@compiles(Zoned, "duckdb")
def _(element: Zoned, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    # 20 bytes from a digit to a Z: strptime then accepts exactly two digits in each field and does the whole check
    usual = f"strlen({x}) = 20 AND {x} >= '0' AND suffix({x}, 'Z')"
    fast = f"CASE WHEN {usual} THEN epoch_ms(try_strptime({x}, '%Y-%m-%dT%H:%M:%SZ')) // 1000 END"
    text = _TRIMMED.format(x=x)
    sign = f"(CASE WHEN left(right({text}, 6), 1) = '-' THEN -1 ELSE 1 END)"
    digits = f"CAST(left(right({text}, 5), 2) AS BIGINT) * 3600 + CAST(right({text}, 2) AS BIGINT) * 60"
    offset = f"(CASE WHEN right({text}, 1) IN ('Z', 'z') THEN 0 ELSE {sign} * ({digits}) END)"
    slow = f"CASE WHEN regexp_full_match({x}, '{_BLANK}{STAMP}{OFFSET}{_BLANK}') THEN {_duck_wall(text)} - {offset} END"
    return f"coalesce({fast}, {slow})"


@compiles(Wall, "duckdb")
def _(element: Wall, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"(CASE WHEN regexp_full_match({x}, '{_BLANK}{STAMP}{_BLANK}') THEN {_duck_wall(_TRIMMED.format(x=x))} END)"


@compiles(Count, "duckdb")
def _(element: Count, compiler: SQLCompiler, **kw: Any) -> str:
    x, units = _parts(element, compiler, **kw)
    whole = f"CAST(split_part({_TRIMMED.format(x=x)}, '.', 1) AS BIGINT)"
    return f"(CASE WHEN regexp_full_match({x}, '{_BLANK}{COUNT}{_BLANK}') THEN {whole} // {units} END)"


@compiles(Digits, "duckdb")
def _(element: Digits, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"regexp_full_match({x}, '[0-9]+')"


@compiles(Digest, "duckdb")
def _(element: Digest, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"hash({x})"


# --- PostgreSQL -----------------------------------------------------------------------------------------------------


@compiles(Trimmed, "postgresql")
def _(element: Trimmed, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"(btrim(CAST({x} AS TEXT), E' \\t\\r\\n') COLLATE \"C\")"


@compiles(Exact, "postgresql")
def _(element: Exact, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f'(CAST({x} AS TEXT) COLLATE "C")'


@compiles(Plain, "postgresql")
def _(element: Plain, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"(CASE WHEN {x} ~ '^{WHOLE}$' THEN split_part({x}, '.', 1) {_spellings(x)} ELSE {x} END)"


@compiles(Number, "postgresql")
def _(element: Number, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"(CASE WHEN {x} ~ '^({NUMBER})$' THEN CAST({x} AS DOUBLE PRECISION) END)"


@compiles(Digits, "postgresql")
def _(element: Digits, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"({x} ~ '^[0-9]+$')"


@compiles(Stamp, "postgresql")
@compiles(Stamp, "duckdb")
def _(element: Stamp, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    # infinity has no epoch in some engines: the finite range is tested before EXTRACT
    within = f"{x} >= '1969-12-30 00:00:00' AND {x} < '2101-01-03 00:00:00'"
    return f"(CASE WHEN {within} THEN CAST(FLOOR(EXTRACT(EPOCH FROM {x})) AS BIGINT) END)"


@compiles(Amount, "postgresql")
@compiles(Amount, "duckdb")
def _(element: Amount, compiler: SQLCompiler, **kw: Any) -> str:
    x, units = _parts(element, compiler, **kw)
    within = f"{x} >= 0 AND {x} < 1e{_WHOLE_UNTIL}"
    return f"(CASE WHEN {within} THEN CAST(FLOOR({x} / CAST({units} AS NUMERIC)) AS BIGINT) END)"


# --- SQLite: functions that the reader registers on its connection (`database.py`) ------------------------------------


@compiles(Trimmed, "sqlite")
def _(element: Trimmed, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"trim(CAST({x} AS TEXT), char(32, 9, 13, 10))"


@compiles(Plain, "sqlite")
def _(element: Plain, compiler: SQLCompiler, **kw: Any) -> str:
    return f"watcher_plain({', '.join(_parts(element, compiler, **kw))})"


@compiles(Number, "sqlite")
def _(element: Number, compiler: SQLCompiler, **kw: Any) -> str:
    return f"watcher_number({', '.join(_parts(element, compiler, **kw))})"


@compiles(Exact, "sqlite")
def _(element: Exact, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    # CAST alone would keep a column's COLLATE NOCASE
    return f"(CAST({x} AS TEXT) || '')"


_BLANKS: Final = "char(32, 9, 13, 10)"


@compiles(Zoned, "sqlite")
def _(element: Zoned, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"watcher_zoned(trim({x}, {_BLANKS}))"


@compiles(Wall, "sqlite")
def _(element: Wall, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"watcher_wall(trim({x}, {_BLANKS}))"


@compiles(Count, "sqlite")
def _(element: Count, compiler: SQLCompiler, **kw: Any) -> str:
    x, units = _parts(element, compiler, **kw)
    return f"watcher_count(trim({x}, {_BLANKS}), {units})"


@compiles(Digits, "sqlite")
def _(element: Digits, compiler: SQLCompiler, **kw: Any) -> str:
    (x,) = _parts(element, compiler, **kw)
    return f"({x} <> '' AND {x} NOT GLOB '*[^0-9]*')"
