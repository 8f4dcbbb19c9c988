"""Digests: each look is bound to the one before it, to its sheet and to the verdicts that stand after it."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

from watcher.ledger import canon
from watcher.ledger.sheet import part_text
from watcher.records import Cell

DAY = 86400


@dataclass(frozen=True, slots=True)
class Header:
    """What a look says about itself besides its sheet and verdicts."""

    number: int
    source: str
    at: int
    kind: str
    method: int
    terms_digest: str


@dataclass(frozen=True, slots=True)
class VerdictRow:
    """One row of the verdict table with the names of its cell in place of the cell's id."""

    promise: str
    version: str
    column: str
    value: str
    day: int
    look: int
    body: str
    memory: str

    @property
    def line(self) -> str:
        """The canonical line that is hashed."""
        return canon.line(
            [self.promise, self.version, self.column, self.value, self.day, self.look, self.body, self.memory]
        )


def genesis(ledger_id: str) -> str:
    """What the first look has for a previous digest."""
    return canon.sha(canon.text(["watcher ledger", ledger_id]))


def chained(previous: str, header: Header, sheet_digest: str, verdict_digest: str) -> str:
    """SHA-256 of four lines: previous digest, header, digest of the sheet, digest of the verdicts."""
    h = header
    head = canon.text([h.number, h.source, h.at, h.kind, h.method, h.terms_digest])
    return canon.sha("\n".join((previous, head, sheet_digest, verdict_digest)))


def terms_and_parts(groups: Iterable[tuple[str, str, str, Sequence[Cell]]]) -> str:
    """The digest of (promise, version, digest of its terms, its cells) of every promise in a look."""
    lines = []
    for promise, version, digest, cells in groups:
        parts: list[list[Any]] = sorted([c.column, c.value, part_text(c.part), c.discovered] for c in cells)
        lines.append(canon.line([promise, version, digest, parts]))
    return canon.sha("\n".join(sorted(lines)))


def verdict_digest(lines: Iterable[str]) -> str:
    """The digest of all verdict rows of one source and UTC day, as they stand after a look."""
    return canon.sha("\n".join(sorted(lines)))


def mark(line: str) -> str:
    """The first 16 hex digits of a row's digest: it names the row when the digest of the whole day does not fit."""
    return canon.sha(line)[:16]


def day_of(at: int) -> int:
    """Days since 1970-01-01, UTC."""
    return at // DAY
