"""Archived weekly reports: files by week and revision, stored together with the notices that announce them."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, func, insert, select

from watcher.ledger import outbox
from watcher.ledger.rows import epoch_of
from watcher.ledger.standing import instant
from watcher.ledger.tables import REPORT
from watcher.records import Head, Notice

Transaction = Callable[[], AbstractContextManager[Connection]]


@dataclass(frozen=True, slots=True)
class StoredReport:
    """One file of an archived report, without its bytes."""

    week: str
    """2026-W48."""
    revision: int
    """0 for the first report of a week, then 1, 2, ..."""
    name: str
    head: Head
    """As of which look."""
    created: datetime
    final: bool


class Reports:
    """The report table of a ledger."""

    def __init__(self, reading: Transaction, writing: Transaction) -> None:
        self._reading = reading
        self._writing = writing

    def add(
        self,
        week: str,
        files: Iterable[tuple[str, bytes]],
        *,
        head: Head,
        created: datetime,
        final: bool,
        notices: Sequence[Notice] = (),
    ) -> int:
        """Archive the files (name, bytes) of a report and its notices in one transaction; the revision it became."""
        with self._writing() as connection:
            newest = select(func.coalesce(func.max(REPORT.c.revision), -1)).where(REPORT.c.week == week)
            revision = int(connection.execute(newest).scalar_one()) + 1
            rows = [
                {
                    "week": week,
                    "revision": revision,
                    "name": name,
                    "look": head.look,
                    "digest": head.digest,
                    "created": epoch_of(created),
                    "final": final,
                    "content": content,
                }
                for name, content in files
            ]
            connection.execute(insert(REPORT), rows)
            outbox.add(connection, notices)
            return revision

    def listed(self) -> list[StoredReport]:
        """Newest week and revision first, then by file name."""
        columns = [column for column in REPORT.c if column is not REPORT.c.content]
        with self._reading() as connection:
            found = [_stored(row) for row in connection.execute(select(*columns))]
        # The outer sort is stable, also in reverse: names stay in order.
        return sorted(sorted(found, key=lambda r: r.name), key=lambda r: (r.week, r.revision), reverse=True)

    def content(self, week: str, revision: int, name: str) -> bytes | None:
        """The bytes of one file; None when there is none."""
        where = (REPORT.c.week == week, REPORT.c.revision == revision, REPORT.c.name == name)
        with self._reading() as connection:
            found = connection.execute(select(REPORT.c.content).where(*where)).scalar_one_or_none()
        return None if found is None else bytes(found)


def _stored(row: Any) -> StoredReport:
    return StoredReport(
        row.week, row.revision, row.name, Head(row.look, row.digest), instant(row.created), bool(row.final)
    )
