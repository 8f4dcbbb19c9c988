"""The tables of the ledger, in portable types: SQLite and PostgreSQL read the same definitions."""

from __future__ import annotations

import re
from typing import Any, Final

from sqlalchemy import (
    BigInteger,
    Boolean,
    Column,
    Float,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    PrimaryKeyConstraint,
    Table,
    Text,
    UniqueConstraint,
)
from sqlalchemy.engine import Dialect
from sqlalchemy.types import TypeDecorator

from watcher.records import INTEGERS

SCHEMA: Final = 1
"""Raised with every change of the tables; `upgrade` knows the way from each earlier number."""

_AWKWARD: Final = re.compile("[\\\\\x00\ud800-\udfff]")
_ESCAPED: Final = re.compile(r"\\(\\|u[0-9a-f]{4})")


class OutsideText(TypeDecorator[str]):
    """Text from outside: a NUL (refused by PostgreSQL) and half a surrogate pair (refused by both) are escaped."""

    impl = Text
    cache_ok = True

    def process_bind_param(self, value: str | None, dialect: Dialect) -> str | None:
        """Escape what a database would refuse."""
        del dialect
        return None if value is None else _AWKWARD.sub(_escape, value)

    def process_result_value(self, value: Any | None, dialect: Dialect) -> Any:
        """Bring back what was given."""
        del dialect
        return _ESCAPED.sub(_unescape, value) if isinstance(value, str) else value


def _escape(match: re.Match[str]) -> str:
    found = match.group()
    return "\\\\" if found == "\\" else f"\\u{ord(found):04x}"


def _unescape(match: re.Match[str]) -> str:
    found = match.group(1)
    return "\\" if found == "\\" else chr(int(found[1:], 16))


METADATA: Final = MetaData()

META: Final = Table("meta", METADATA, Column("name", Text, primary_key=True), Column("value", Text, nullable=False))

TERM: Final = Table(
    "term",
    METADATA,
    Column("id", Integer, primary_key=True, autoincrement=False),
    Column("promise", OutsideText, nullable=False),
    Column("version", OutsideText, nullable=False),
    Column("source", OutsideText, nullable=False),
    Column("terms", Text, nullable=False),
    Column("digest", Text, nullable=False),
    Column("first_look", BigInteger, nullable=False),
    Column("closed_by", BigInteger),
    Column("sealed_until", BigInteger, nullable=False),
    UniqueConstraint("promise", "version"),
)

CELL: Final = Table(
    "cell",
    METADATA,
    Column("id", Integer, primary_key=True, autoincrement=False),
    Column("term", Integer, nullable=False),
    Column("column", OutsideText, nullable=False),
    Column("value", OutsideText, nullable=False),
    Column("part", Text, nullable=False),
    Column("discovered", Integer, nullable=False),
    UniqueConstraint("term", "column", "value"),
)

LOOK: Final = Table(
    "look",
    METADATA,
    Column("number", BigInteger, primary_key=True, autoincrement=False),
    Column("source", OutsideText, nullable=False),
    Column("at", BigInteger, nullable=False),
    Column("kind", Text, nullable=False),
    Column("method", Integer, nullable=False),
    Column("terms_digest", Text, nullable=False),
    Column("sheet", LargeBinary, nullable=False),
    # The digest of the packed bytes is outside the chain: zlib has bits that do not matter, and audit names any byte.
    Column("packed_digest", Text, nullable=False),
    Column("sheet_digest", Text, nullable=False),
    Column("verdict_digest", Text, nullable=False),
    Column("previous", Text, nullable=False),
    Column("digest", Text, nullable=False),
    Index("look_by_source", "source", "number"),
)

BUCKET: Final = Table(
    "bucket",
    METADATA,
    Column("cell", Integer, nullable=False),
    Column("start", BigInteger, nullable=False),
    Column("level", Text, nullable=False),
    *(Column(name, BigInteger, nullable=False) for name in INTEGERS),
    Column("newest", BigInteger),
    Column("sealed_by", BigInteger),
    PrimaryKeyConstraint("cell", "start", "level"),
    sqlite_with_rowid=False,
)

VERDICT: Final = Table(
    "verdict",
    METADATA,
    Column("cell", Integer, nullable=False),
    Column("day", Integer, nullable=False),
    Column("look", BigInteger, nullable=False),
    Column("body", Text, nullable=False),
    Column("memory", Text, nullable=False),
    Column("mark", Text, nullable=False),
    PrimaryKeyConstraint("cell", "day"),
    Index("verdict_by_day", "day", "cell"),
)

EVENT: Final = Table(
    "event",
    METADATA,
    Column("look", BigInteger, nullable=False),
    Column("n", Integer, nullable=False),
    Column("kind", Text, nullable=False),
    Column("promise", OutsideText, nullable=False),
    Column("version", OutsideText, nullable=False),
    Column("column", OutsideText, nullable=False),
    Column("value", OutsideText, nullable=False),
    Column("bucket", BigInteger),
    Column("facts", Text, nullable=False),
    PrimaryKeyConstraint("look", "n"),
    Index("event_by_promise", "promise", "look", "n"),
)

NOTICE: Final = Table(
    "notice",
    METADATA,
    Column("route", OutsideText, nullable=False),
    Column("key", Text, nullable=False),
    Column("kind", Text, nullable=False),
    Column("promise", OutsideText, nullable=False),
    Column("version", OutsideText, nullable=False),
    Column("look", BigInteger, nullable=False),
    Column("event", Integer),
    Column("state", Text, nullable=False),
    Column("tries", Integer, nullable=False),
    Column("next_at", BigInteger, nullable=False),
    Column("created", BigInteger, nullable=False),
    Column("answer", OutsideText),
    Column("breach_number", Integer),
    PrimaryKeyConstraint("route", "key"),
    Index("notice_waiting", "route", "state", "next_at"),
)

SOURCE_STATE: Final = Table(
    "source_state",
    METADATA,
    Column("source", OutsideText, primary_key=True),
    Column("last_try", BigInteger),
    Column("last_success", BigInteger),
    Column("failures", Integer, nullable=False),
    Column("failures_total", BigInteger, nullable=False),
    Column("reason", OutsideText),
    Column("detail", OutsideText),
    Column("failing_since", BigInteger),
    Column("duration", Float),
    Column("signature", OutsideText),
)

REJECT_COUNT: Final = Table(
    "reject_count",
    METADATA,
    Column("promise", OutsideText, primary_key=True),
    Column("reason", Text, primary_key=True),
    Column("rows", BigInteger, nullable=False),
    Column("look", BigInteger, nullable=False),
)

REJECT: Final = Table(
    "reject",
    METADATA,
    Column("promise", OutsideText, primary_key=True),
    Column("reason", Text, primary_key=True),
    Column("n", Integer, primary_key=True, autoincrement=False),
    Column("file", OutsideText, nullable=False),
    Column("line", BigInteger),
    Column("row_id", OutsideText),
    Column("fields", Text, nullable=False),
)

REPORT: Final = Table(
    "report",
    METADATA,
    Column("week", Text, primary_key=True),
    Column("revision", Integer, primary_key=True, autoincrement=False),
    Column("name", OutsideText, primary_key=True),
    Column("look", BigInteger, nullable=False),
    Column("digest", Text, nullable=False),
    Column("created", BigInteger, nullable=False),
    Column("final", Boolean, nullable=False),
    Column("content", LargeBinary, nullable=False),
)

TOKEN: Final = Table(
    "token",
    METADATA,
    Column("name", OutsideText, primary_key=True),
    Column("role", Text, nullable=False),
    Column("digest", Text, nullable=False, unique=True),
    Column("created", BigInteger, nullable=False),
    Column("revoked", BigInteger),
)

LEASE: Final = Table(
    "lease",
    METADATA,
    Column("name", Text, primary_key=True),
    Column("holder", OutsideText, nullable=False),
    Column("token", Text, nullable=False),
    Column("until", Float, nullable=False),
)
