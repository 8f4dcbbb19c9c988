"""Rows that could not be used: bounded samples and the counts of the newest look, outside the chain and deletable."""

from __future__ import annotations

from sqlalchemy import Connection, delete, insert, select

from watcher.ledger import canon
from watcher.ledger.tables import REJECT, REJECT_COUNT
from watcher.records import Entry, RejectedRow

SAMPLES = 20


def replace(connection: Connection, entry: Entry, look: int) -> None:
    """Put the counts of the promises of an entry in place of the earlier ones, and the samples a reason brought."""
    for promise, reasons in entry.rejected_counts.items():
        connection.execute(delete(REJECT_COUNT).where(REJECT_COUNT.c.promise == promise))
        rows = [{"promise": promise, "reason": r, "rows": n, "look": look} for r, n in sorted(reasons.items()) if n]
        if rows:
            connection.execute(insert(REJECT_COUNT), rows)
    groups: dict[tuple[str, str], list[RejectedRow]] = {}
    for row in entry.rejected:
        groups.setdefault((row.promise, row.reason), []).append(row)
    for (promise, reason), samples in groups.items():
        connection.execute(delete(REJECT).where(REJECT.c.promise == promise, REJECT.c.reason == reason))
        connection.execute(
            insert(REJECT),
            [
                {
                    "promise": promise,
                    "reason": reason,
                    "n": n,
                    "file": row.file,
                    "line": row.line,
                    "row_id": row.id,
                    "fields": canon.text(dict(row.values)),
                }
                for n, row in enumerate(samples[:SAMPLES])
            ],
        )


def read(connection: Connection, promise: str) -> tuple[dict[str, int], list[RejectedRow]]:
    """(reason -> rows of the newest look, samples by reason)."""
    counts = {
        row.reason: int(row.rows)
        for row in connection.execute(select(REJECT_COUNT).where(REJECT_COUNT.c.promise == promise))
    }
    rows = connection.execute(select(REJECT).where(REJECT.c.promise == promise).order_by(REJECT.c.reason, REJECT.c.n))
    samples = [RejectedRow(r.promise, r.reason, r.file, r.line, r.row_id, canon.parse(r.fields)) for r in rows]
    return counts, samples


def counts(connection: Connection) -> dict[str, dict[str, int]]:
    """Promise -> reason -> rows of its newest look."""
    found: dict[str, dict[str, int]] = {}
    for row in connection.execute(select(REJECT_COUNT)):
        found.setdefault(row.promise, {})[row.reason] = int(row.rows)
    return found


def forget(connection: Connection, promise: str | None) -> int:
    """Delete the samples of a promise, or all; how many rows these were. The counts stay."""
    statement = delete(REJECT)
    if promise is not None:
        statement = statement.where(REJECT.c.promise == promise)
    return connection.execute(statement).rowcount
