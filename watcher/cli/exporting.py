"""Tables of a ledger as CSV files: one list of plain rows a table, written whole or not at all."""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Iterator, Mapping
from contextlib import suppress
from datetime import UTC, date, datetime
from fractions import Fraction
from pathlib import Path
from typing import Final

from watcher.answer import notice_json, rfc3339, standing_json
from watcher.errors import LedgerBusy, WatcherError
from watcher.ledger.store import Ledger
from watcher.ledger.terms import canonical_terms
from watcher.records import INTEGERS, Head, Standing, StoredTerm
from watcher.text import csv_cell

Row = Mapping[str, object]
_PAGE: Final = 400
_MANY: Final = 100_000_000
_TRIES: Final = 5


def write(ledger: Ledger, folder: Path) -> tuple[Head, dict[Path, int]]:
    """Write one CSV file a table into a folder, which is made if need be; (head, path -> rows).

    Raises LedgerBusy when looks kept being recorded while the tables were read, WatcherError when the folder cannot be
    written.
    """
    head, tables = _consistent(ledger)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        files = {folder / f"{name}.csv": rows for name, rows in tables.items()}
        for path, rows in files.items():
            _replace(path, _csv(rows, COLUMNS[path.stem]))
    except OSError as error:
        raise WatcherError(f"folder {str(folder)!r}: cannot be written ({error.strerror or error})") from error
    return head, {path: len(rows) for path, rows in files.items()}


def _consistent(ledger: Ledger) -> tuple[Head, dict[str, list[Row]]]:
    for _ in range(_TRIES):
        head = ledger.head()
        tables = {name: list(read(ledger)) for name, read in _TABLES.items()}
        if ledger.head() == head:
            return head, tables
    raise LedgerBusy(f"looks were recorded during each of {_TRIES} tries to read the tables; try again")


def _csv(rows: list[Row], columns: tuple[str, ...]) -> bytes:
    # pandas is loaded here and not above: every other command starts without it.
    import pandas as pd

    # Every cell passes the one function that makes outside text safe, column names are ours: nothing is left for pandas
    # to guess, neither numbers nor missing values.
    frame = pd.DataFrame(
        [[csv_cell(row[name]) for name in columns] for row in rows], columns=list(columns), dtype=object
    )
    return frame.to_csv(index=False, lineterminator="\r\n").encode()


def _replace(path: Path, content: bytes) -> None:
    beside = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        beside.write_bytes(content)
        beside.replace(path)
    except OSError:
        with suppress(OSError):
            beside.unlink()
        raise


def _when(epoch: int | None) -> str | None:
    return None if epoch is None else rfc3339(datetime.fromtimestamp(epoch, UTC))


def _promises(ledger: Ledger) -> Iterator[Row]:
    for term in ledger.terms(open_only=False):
        terms = term.terms
        yield {
            "promise": terms.promise,
            "version": terms.version,
            "model": terms.model,
            "source": terms.source,
            "measure": terms.measure,
            "tolerance": terms.tolerance,
            "risk": terms.risk,
            "released": _when(terms.released),
            "sealed_until": _when(term.sealed_until),
            "first_look": term.first_look,
            "closed_by": term.closed_by,
            "terms_digest": term.digest,
            "terms": canonical_terms(terms),
        }


def _counts(ledger: Ledger) -> Iterator[Row]:
    for term in ledger.terms(open_only=False):
        parts = {cell.key: cell.part for cell in ledger.cells(term.id)}
        for row in ledger.counts(term.id):
            part: Fraction = parts[row.column, row.value]
            yield {
                "promise": term.terms.promise,
                "version": term.terms.version,
                "column": row.column,
                "value": row.value,
                "part": f"{part.numerator}/{part.denominator}",
                "bucket": _when(row.bucket),
                "sealed": "yes" if row.bucket < term.sealed_until else "no",
                "level": row.level,
                **{name: getattr(row.counts, name) for name in INTEGERS},
                "newest_label": _when(row.counts.newest),
            }


def _verdicts(ledger: Ledger) -> Iterator[Row]:
    for term in ledger.terms(open_only=False):
        for cell in ledger.cells(term.id):
            for day, look, standing in reversed(_history(ledger, term, cell.column, cell.value)):
                yield {"day": day.isoformat(), "look": look, **_verdict(standing)}


def _history(ledger: Ledger, term: StoredTerm, column: str, value: str) -> list[tuple[date, int, Standing]]:
    found: list[tuple[date, int, Standing]] = []
    while True:
        before = found[-1][0] if found else None
        page = ledger.history(term.terms.promise, term.terms.version, column, value, before=before, limit=_PAGE)
        found += page
        if len(page) < _PAGE:
            return found


def _verdict(standing: Standing) -> Row:
    told = standing_json(standing)
    recent, support, breach = told["recent"] or {}, told["support"] or {}, told["breach"] or {}
    return {
        "promise": standing.promise,
        "version": standing.version,
        "column": standing.column,
        "value": standing.value,
        "state": standing.state,
        "flags": " ".join(standing.flags),
        "predictions": standing.predictions,
        "labels": standing.labels,
        "errors": told["errors"],
        "estimate": standing.estimate,
        "life_lower": standing.life.lower,
        "life_upper": standing.life.upper,
        "recent_since": recent.get("since"),
        "recent_lower": recent.get("lower"),
        "recent_upper": recent.get("upper"),
        "support_since": support.get("since"),
        "support_upper": support.get("upper"),
        "total": standing.total,
        "threshold": standing.threshold,
        "breach": breach.get("number"),
        "breach_noticed": breach.get("noticed"),
        "breach_since": breach.get("since"),
        "breach_lower": breach.get("lower"),
        "newest_label": told["newest_label"],
        "counted_until": told["counted_until"],
    }


def _events(ledger: Ledger) -> Iterator[Row]:
    for stored in reversed(ledger.events(limit=_MANY)):
        event = stored.event
        yield {
            "look": stored.look,
            "n": stored.n,
            "at": rfc3339(stored.at),
            "kind": event.kind,
            "promise": event.promise,
            "version": event.version,
            "column": event.column,
            "value": event.value,
            "bucket": _when(event.bucket),
            "facts": json.dumps(dict(event.facts), ensure_ascii=True, sort_keys=True),
            "acknowledged_by": stored.acknowledged_by,
        }


def _notices(ledger: Ledger) -> Iterator[Row]:
    yield from map(notice_json, reversed(ledger.notices(limit=_MANY)))


_NAMES: Final = ("promise", "version")
_CELL: Final = (*_NAMES, "column", "value")
_TABLES: Final[Mapping[str, Callable[[Ledger], Iterator[Row]]]] = {
    "promises": _promises,
    "counts": _counts,
    "verdicts": _verdicts,
    "events": _events,
    "notices": _notices,
}
COLUMNS: Final[Mapping[str, tuple[str, ...]]] = {
    "promises": (
        *_NAMES, "model", "source", "measure", "tolerance", "risk", "released", "sealed_until", "first_look", "closed_by",
        "terms_digest", "terms",
    ),
    "counts": (*_CELL, "part", "bucket", "sealed", "level", *INTEGERS, "newest_label"),
    "verdicts": (
        "day", "look", *_CELL, "state", "flags", "predictions", "labels", "errors", "estimate", "life_lower", "life_upper",
        "recent_since", "recent_lower", "recent_upper", "support_since", "support_upper", "total", "threshold", "breach",
        "breach_noticed", "breach_since", "breach_lower", "newest_label", "counted_until",
    ),
    "events": ("look", "n", "at", "kind", *_CELL, "bucket", "facts", "acknowledged_by"),
    "notices": (
        "key", "route", "kind", *_NAMES, "breach", "look", "event", "state", "tries", "next", "created", "answer",
    ),
}  # fmt: skip
"""File (without .csv) -> its columns, in order; docs/commands.md says what they mean."""
