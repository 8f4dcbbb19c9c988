"""Proof that a ledger holds what its chain says: sheets and digests look by look, then every table against the sheets."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from sqlalchemy import Connection, select, type_coerce
from sqlalchemy.types import NullType

from watcher.ledger import canon, chain
from watcher.ledger.audit_tables import compare_tables
from watcher.ledger.audit_verdicts import VerdictAudit
from watcher.ledger.expected import Expected
from watcher.ledger.findings import Audit, Finding, Findings, Replay, Replayed
from watcher.ledger.rows import HEAD, LEDGER, SCHEMA_NUMBER, head_from
from watcher.ledger.sheet import Sheet, parse_sheet, unpack
from watcher.ledger.store import Ledger
from watcher.ledger.tables import LOOK, META, SCHEMA
from watcher.records import Entry, Head

__all__ = ["Audit", "Finding", "Replay", "Replayed", "audit"]

PAGE = 200
_UNREADABLE = (ValueError, TypeError, KeyError, IndexError, AttributeError, OverflowError)
"""What a changed row can bring about before its digest is looked at."""


def audit(ledger: Ledger, *, head: Head | None = None, replay: Replay | None = None) -> Audit:
    """Verify a ledger; nothing is written, and it may be in use.

    `head` is one kept elsewhere: without it a cut tail or a wholly rewritten chain cannot be seen. `replay` derives the
    verdicts of the looks of its method again; without it only their digests are verified. One changed, removed, added or
    exchanged row or byte in meta, term, cell, look, bucket, verdict or event is found and named.
    """
    with ledger.reading() as connection:
        return audit_connection(connection, head=head, replay=replay)


def audit_connection(connection: Connection, *, head: Head | None, replay: Replay | None) -> Audit:
    """The same inside a transaction that the caller has begun."""
    return _Audit(connection, replay).run(head)


class _Audit:
    """One pass over the chain."""

    def __init__(self, connection: Connection, replay: Replay | None) -> None:
        self._connection = connection
        self._found = Findings()
        self._expected = Expected()
        self._verdicts = VerdictAudit(connection, self._found, self._expected, replay)
        self._last = Head(0, "")
        self._count = 0
        self._broken = False
        """A look could not be read: what the tables must hold is no longer known."""

    def run(self, kept: Head | None) -> Audit:
        meta = self._meta()
        self._last = Head(0, chain.genesis(meta.get(LEDGER, "")))
        met = kept is None or kept == self._last
        for row in self._looks():
            self._look(row)
            met = met or (kept is not None and kept == self._last)
        if kept is not None and not met:
            self._found.add(
                "look", kept.look, f"the head kept elsewhere, {kept}, is not in the chain: cut or rewritten"
            )
        head = self._head(meta)
        if not self._broken:
            self._verdicts.finish()
            compare_tables(self._connection, self._found, self._expected)
        v = self._verdicts
        return Audit(
            findings=self._found.all(),
            head=head,
            looks=self._count,
            rederived=v.rederived,
            other_method=v.other_method,
            not_rederived=self._count - v.rederived - v.other_method,
            kept_head=kept is not None,
        )

    def _meta(self) -> dict[str, str]:
        meta = {row.name: row.value for row in self._connection.execute(select(META))}
        for name in (SCHEMA_NUMBER, LEDGER, HEAD):
            if name not in meta:
                self._found.add("meta", name, "is missing")
        for name in sorted(set(meta) - {SCHEMA_NUMBER, LEDGER, HEAD}):
            self._found.add("meta", name, "does not belong here")
        if meta.get(SCHEMA_NUMBER, str(SCHEMA)) != str(SCHEMA):
            self._found.add("meta", SCHEMA_NUMBER, f"is {meta[SCHEMA_NUMBER]!r}, this program writes {SCHEMA}")
        return meta

    def _looks(self) -> Iterator[Any]:
        # The sheet is fetched raw: the type's own conversion would raise on a value that is no blob.
        columns = [c if c is not LOOK.c.sheet else type_coerce(c, NullType()).label("sheet") for c in LOOK.c]
        after = None
        while True:
            statement = select(*columns).order_by(LOOK.c.number).limit(PAGE)
            page = self._connection.execute(
                statement if after is None else statement.where(LOOK.c.number > after)
            ).fetchall()
            yield from page
            if len(page) < PAGE:
                return
            after = page[-1].number

    def _look(self, row: Any) -> None:
        for missing in range(self._last.look + 1, min(row.number, self._last.look + PAGE)):
            self._found.add("look", missing, "is missing")
            self._broken = True
        if row.number <= self._last.look:
            self._found.add("look", row.number, "look numbers begin at 1")
            self._broken = True
        self._count += 1
        if row.previous != self._last.digest:
            self._previous(row)
        sheet = self._sheet(row)
        self._last = Head(row.number, row.digest)
        if sheet is None:
            self._broken = True
        if sheet is not None and not self._broken:
            self._enter(row, sheet)

    def _previous(self, row: Any) -> None:
        if row.number == 1 and self._chained(row):
            # The look itself is whole, so it is the id under which it was written that has changed.
            self._found.add("meta", LEDGER, "is not the id that the chain begins with")
        self._found.add("look", row.number, f"does not continue look {self._last.look}: `previous` is not its digest")

    def _chained(self, row: Any) -> bool:
        header = chain.Header(row.number, row.source, row.at, row.kind, row.method, row.terms_digest)
        return bool(chain.chained(row.previous, header, row.sheet_digest, row.verdict_digest) == row.digest)

    def _sheet(self, row: Any) -> Sheet | None:
        number = row.number
        try:
            if not self._chained(row):
                self._found.add("look", number, "its header and digests do not give its digest")
            if canon.sha(row.sheet) != row.packed_digest:
                self._found.add("look", number, "the packed bytes of the sheet do not give packed_digest")
            text = unpack(row.sheet)
            if canon.sha(text) != row.sheet_digest:
                self._found.add("look", number, "the sheet does not give sheet_digest")
            return parse_sheet(text)
        except _UNREADABLE as error:
            self._found.add("look", number, f"cannot be read: {error}")
            return None

    def _enter(self, row: Any, sheet: Sheet) -> None:
        number, at = self._expected.newest.get(row.source, (0, 0))
        try:
            if row.at < at:
                self._found.add("look", row.number, f"lies before look {number} of its source")
            self._verdicts.before(row.source, row.at)
            digest = self._expected.apply(row.number, row.source, row.at, sheet)
        except _UNREADABLE as error:
            self._found.add("look", row.number, f"its sheet does not fit the looks before it: {error}")
            self._broken = True
            return
        if digest != row.terms_digest:
            self._found.add("look", row.number, "terms and parts do not give terms_digest")
        entry = Entry(
            source=row.source,
            at=row.at,
            kind=row.kind,
            method=row.method,
            expected=number,
            terms=sheet.terms,
            events=sheet.events,
            rejected_counts=sheet.rejected_counts,
        )
        self._verdicts.look(row.number, entry, row.verdict_digest)

    def _head(self, meta: dict[str, str]) -> Head:
        try:
            head = head_from(meta.get(HEAD, ""))
        except ValueError:
            head = None
        if head is not None and head.look > self._last.look:
            self._found.add(
                "look", head.look, f"is missing: the head names it, the chain ends with look {self._last.look}"
            )
        if head != self._last:
            self._found.add("meta", HEAD, f"is {meta.get(HEAD)!r}, the chain ends with {self._last}")
        return self._last
