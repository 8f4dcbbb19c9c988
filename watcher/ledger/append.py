"""What one entry adds: checked against what stands, then written in the caller's transaction."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, bindparam, delete, func, insert, select, update

from watcher.errors import LedgerBusy, UsageError
from watcher.ledger import canon, chain, outbox, rejects
from watcher.ledger.counts import integers_of
from watcher.ledger.rows import find_term, read_cells, read_head, upsert, upsert_plain, write_head
from watcher.ledger.sheet import event_facts, pack, part_text, sheet_text
from watcher.ledger.standing import standing_body
from watcher.ledger.tables import BUCKET, CELL, EVENT, LOOK, TERM, VERDICT
from watcher.ledger.terms import canonical_terms, terms_digest
from watcher.records import INTEGERS, Cell, CellCounts, Entry, Head, TermDraft, Terms

Point = Callable[[str], None]
"""Called at named points inside a commit, so that a test can die there."""

_DELETE_BUCKET = delete(BUCKET).where(
    BUCKET.c.cell == bindparam("b_cell"), BUCKET.c.start == bindparam("b_start"), BUCKET.c.level == bindparam("b_level")
)
_SEAL_BUCKET = (
    update(BUCKET)
    .where(
        BUCKET.c.cell.in_(select(CELL.c.id).where(CELL.c.term == bindparam("b_term"))),
        BUCKET.c.start == bindparam("b_start"),
    )
    .values(sealed_by=bindparam("b_look"))
)


@dataclass(frozen=True, slots=True)
class _Term:
    """A promise version of the entry with its ids, new cells included."""

    id: int
    terms: Terms
    digest: str
    draft: TermDraft
    cells: tuple[tuple[int, Cell], ...]

    def ids(self) -> dict[tuple[str, str], int]:
        return {cell.key: cell_id for cell_id, cell in self.cells}


def append(connection: Connection, ledger_id: str, entry: Entry, point: Point) -> Head:
    """Write an entry behind the head.

    Raises LedgerBusy when the source moved on, ValueError for an entry that does not fit what the ledger holds.
    """
    head = read_head(connection, lock=True)
    _check_source(connection, entry)
    number = head.look + 1
    point("begun")
    terms = _write_terms(connection, entry, number)
    point("terms")
    for term in terms:
        _write_buckets(connection, term, number)
    point("buckets")
    verdicts = _write_verdicts(connection, entry, terms, number)
    point("verdicts")
    _write_events(connection, entry, number)
    point("events")
    new = _write_look(connection, entry, terms, head, number, verdicts)
    point("look")
    outbox.write_drafts(connection, ledger_id, entry, number)
    rejects.replace(connection, entry, number)
    write_head(connection, new)
    point("head")
    return new


def newest_look(connection: Connection, source: str) -> tuple[int, int]:
    """(number, at) of the newest look of a source; (0, 0) without any."""
    statement = select(LOOK.c.number, LOOK.c.at).where(LOOK.c.source == source).order_by(LOOK.c.number.desc()).limit(1)
    row = connection.execute(statement).one_or_none()
    return (0, 0) if row is None else (row.number, row.at)


def _check_source(connection: Connection, entry: Entry) -> None:
    number, at = newest_look(connection, entry.source)
    if number != entry.expected:
        raise LedgerBusy(
            f"source {entry.source!r} moved on: this look began after look {entry.expected}, the newest is {number}; "
            "nothing was written, the next look counts again"
        )
    if entry.at < at:
        raise UsageError(f"source {entry.source!r}: a look at {entry.at} lies before the newest one, at {at}")


def _write_terms(connection: Connection, entry: Entry, number: int) -> list[_Term]:
    next_term = _next_id(connection, TERM.c.id)
    next_cell = _next_id(connection, CELL.c.id)
    seen = set()
    resolved = []
    for draft in entry.terms:
        name = f"promise {draft.promise!r} version {draft.version!r}"
        if (draft.promise, draft.version) in seen:
            raise ValueError(f"{name} stands twice in the entry")
        seen.add((draft.promise, draft.version))
        term_id, terms, digest = _write_term(connection, entry, draft, number, next_term, name)
        next_term = max(next_term, term_id + 1)
        old = read_cells(connection, term_id)
        # Numbered in an order that the sheet repeats, so that audit knows which id each cell must have.
        fresh = sorted(draft.new_cells, key=lambda c: (c.discovered, c.column, c.value))
        new = [(next_cell + i, cell) for i, cell in enumerate(fresh)]
        next_cell += len(new)
        _write_cells(connection, term_id, old, new, name)
        cells = tuple(sorted([*old, *new], key=lambda c: c[1].key))
        resolved.append(_Term(term_id, terms, digest, draft, cells))
    return resolved


def _write_term(
    connection: Connection, entry: Entry, draft: TermDraft, number: int, next_id: int, name: str
) -> tuple[int, Terms, str]:
    stored = find_term(connection, draft.promise, draft.version)
    closed_by = number if draft.closed else None
    if stored is not None:
        _check_term(entry, draft, stored.terms, name, closed_by=stored.closed_by, frozen=True)
        values = {"sealed_until": draft.sealed_until, "closed_by": closed_by}
        connection.execute(update(TERM).where(TERM.c.id == stored.id).values(values))
        return stored.id, stored.terms, stored.digest
    if draft.new_terms is None:
        raise ValueError(f"{name} is not in the ledger: its first look must give new_terms")
    terms = draft.new_terms
    _check_term(entry, draft, terms, name, closed_by=None, frozen=False)
    digest = terms_digest(terms)
    row = {
        "id": next_id,
        "promise": terms.promise,
        "version": terms.version,
        "source": terms.source,
        "terms": canonical_terms(terms),
        "digest": digest,
        "first_look": number,
        "closed_by": closed_by,
        "sealed_until": draft.sealed_until,
    }
    connection.execute(insert(TERM).values(row))
    return next_id, terms, digest


def _check_term(
    entry: Entry, draft: TermDraft, terms: Terms, name: str, *, closed_by: int | None, frozen: bool
) -> None:
    if frozen and draft.new_terms is not None:
        raise ValueError(f"{name} has frozen terms already: new_terms is given at the first look only")
    if (terms.promise, terms.version) != (draft.promise, draft.version):
        raise ValueError(f"{name}: its terms speak of {terms.promise!r} version {terms.version!r}")
    if terms.source != entry.source:
        raise ValueError(f"{name} belongs to source {terms.source!r}, the entry to {entry.source!r}")
    if closed_by is not None:
        raise ValueError(f"{name} was closed by look {closed_by}")


def _write_cells(
    connection: Connection, term_id: int, old: Sequence[tuple[int, Cell]], new: Sequence[tuple[int, Cell]], name: str
) -> None:
    keys = [cell.key for _, cell in [*old, *new]]
    if len(set(keys)) != len(keys):
        raise ValueError(f"{name}: a cell of new_cells is known already or stands twice")
    if ("", "") not in keys:
        raise ValueError(f"{name}: the whole, ('', ''), must be among the cells of the first look")
    rows = [
        {
            "id": cell_id,
            "term": term_id,
            "column": cell.column,
            "value": cell.value,
            "part": part_text(cell.part),
            "discovered": cell.discovered,
        }
        for cell_id, cell in new
    ]
    if rows:
        connection.execute(insert(CELL), rows)


def _next_id(connection: Connection, column: Any) -> int:
    return int(connection.execute(select(func.coalesce(func.max(column), 0))).scalar_one()) + 1


def _write_buckets(connection: Connection, term: _Term, number: int) -> None:
    ids = term.ids()
    try:
        rows = [_bucket_row(ids, counted) for counted in term.draft.counts]
        gone = [
            {"b_cell": ids[column, value], "b_start": bucket, "b_level": level}
            for column, value, bucket, level in term.draft.gone
        ]
    except KeyError as error:
        raise ValueError(f"promise {term.draft.promise!r}: counts of {error.args[0]}, which is no cell") from error
    upsert_plain(connection, BUCKET, 3, ("cell", "start", "level", *INTEGERS, "newest"), rows)
    if gone:
        connection.execute(_DELETE_BUCKET, gone)
    if term.draft.sealed:
        sealed = [{"b_term": term.id, "b_start": start, "b_look": number} for start in term.draft.sealed]
        connection.execute(_SEAL_BUCKET, sealed)


def _bucket_row(ids: dict[tuple[str, str], int], counted: CellCounts) -> tuple[Any, ...]:
    counts = counted.counts
    key = (ids[counted.column, counted.value], counted.bucket, counted.level)
    return (*key, *integers_of(counts), counts.newest)


def _write_verdicts(connection: Connection, entry: Entry, terms: Sequence[_Term], number: int) -> str:
    day = chain.day_of(entry.at)
    lines: dict[int, str] = {}
    rows = []
    for term in terms:
        for cell_id, row in _verdicts_of(term, day, number):
            line = row.line
            lines[cell_id] = line
            rows.append(
                {
                    "cell": cell_id,
                    "day": day,
                    "look": number,
                    "body": row.body,
                    "memory": row.memory,
                    "mark": chain.mark(line),
                }
            )
    upsert(connection, VERDICT, ("cell", "day"), rows)
    standing = stored_verdicts(connection, entry.source, day)
    return chain.verdict_digest([*lines.values(), *(v.line for cell, v in standing if cell not in lines)])


def _verdicts_of(term: _Term, day: int, number: int) -> list[tuple[int, chain.VerdictRow]]:
    draft = term.draft
    name = f"promise {draft.promise!r} version {draft.version!r}"
    if len(draft.memories) != len(draft.standings):
        raise ValueError(f"{name}: {len(draft.standings)} standings but {len(draft.memories)} memories")
    if sorted((s.column, s.value) for s in draft.standings) != [cell.key for _, cell in term.cells]:
        raise ValueError(f"{name}: an entry gives exactly one standing for every cell, new ones included")
    by_key = {cell.key: (cell_id, cell) for cell_id, cell in term.cells}
    rows = []
    for standing, memory in zip(draft.standings, draft.memories, strict=True):
        cell_id, cell = by_key[standing.column, standing.value]
        told = (standing.promise, standing.version, standing.terms, standing.tolerance, standing.risk, standing.part)
        known = (draft.promise, draft.version, term.digest, term.terms.tolerance, term.terms.risk, float(cell.part))
        if told != known:
            raise ValueError(f"{name}: the standing of {cell.key} says {told}, its terms and cell say {known}")
        body = canon.text(standing_body(standing))
        memory_text = canon.text(dict(memory))
        row = chain.VerdictRow(draft.promise, draft.version, *cell.key, day, number, body, memory_text)
        rows.append((cell_id, row))
    return rows


def stored_verdicts(connection: Connection, source: str, day: int) -> list[tuple[int, chain.VerdictRow]]:
    """All rows of one source and day with their cell ids, as stored."""
    columns = (TERM.c.promise, TERM.c.version, CELL.c.column, CELL.c.value)
    statement = (
        select(VERDICT, *columns)
        .join_from(VERDICT, CELL, CELL.c.id == VERDICT.c.cell)
        .join(TERM, TERM.c.id == CELL.c.term)
        .where(VERDICT.c.day == day, TERM.c.source == source)
    )
    return [
        (r.cell, chain.VerdictRow(r.promise, r.version, r.column, r.value, r.day, r.look, r.body, r.memory))
        for r in connection.execute(statement)
    ]


def _write_events(connection: Connection, entry: Entry, number: int) -> None:
    rows = [
        {
            "look": number,
            "n": n,
            "kind": e.kind,
            "promise": e.promise,
            "version": e.version,
            "column": e.column,
            "value": e.value,
            "bucket": e.bucket,
            "facts": event_facts(e),
        }
        for n, e in enumerate(entry.events)
    ]
    if rows:
        connection.execute(insert(EVENT), rows)


def _write_look(
    connection: Connection, entry: Entry, terms: Sequence[_Term], head: Head, number: int, verdicts: str
) -> Head:
    sheet = sheet_text(entry)
    packed = pack(sheet)
    groups = ((t.draft.promise, t.draft.version, t.digest, [cell for _, cell in t.cells]) for t in terms)
    header = chain.Header(number, entry.source, entry.at, entry.kind, entry.method, chain.terms_and_parts(groups))
    sheet_digest = canon.sha(sheet)
    digest = chain.chained(head.digest, header, sheet_digest, verdicts)
    row = {
        "number": number,
        "source": entry.source,
        "at": entry.at,
        "kind": entry.kind,
        "method": entry.method,
        "terms_digest": header.terms_digest,
        "sheet": packed,
        "packed_digest": canon.sha(packed),
        "sheet_digest": sheet_digest,
        "verdict_digest": verdicts,
        "previous": head.digest,
        "digest": digest,
    }
    connection.execute(insert(LOOK).values(row))
    return Head(number, digest)
