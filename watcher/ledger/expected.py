"""What the tables must hold, worked out from the sheets alone."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from watcher.ledger import chain
from watcher.ledger.sheet import Sheet, event_facts
from watcher.ledger.terms import canonical_terms, terms_digest
from watcher.records import INTEGERS, Cell, Event, TermDraft, Terms

Bucket = list[int | None]
"""The nine integers, newest, sealed_by: the columns of the bucket table after its key."""


@dataclass(slots=True)
class ExpectedTerm:
    """One promise version."""

    id: int
    terms: Terms
    text: str
    digest: str
    first_look: int
    closed_by: int | None
    sealed_until: int
    cells: dict[tuple[str, str], tuple[int, Cell]] = field(default_factory=dict)

    def row(self) -> tuple[Any, ...]:
        """As the term table holds it."""
        t = self.terms
        return (
            *(self.id, t.promise, t.version, t.source, self.text, self.digest),
            *(self.first_look, self.closed_by, self.sealed_until),
        )


class Expected:
    """Grows look by look. `apply` raises ValueError or KeyError when a sheet does not fit what stood before it."""

    def __init__(self) -> None:
        self.terms: dict[tuple[str, str], ExpectedTerm] = {}
        self.cells: dict[int, tuple[ExpectedTerm, Cell]] = {}
        self.buckets: dict[int, dict[int, dict[str, Bucket]]] = {}
        """cell -> start -> level -> columns"""
        self.events: dict[tuple[int, int], tuple[Any, ...]] = {}
        self.verdicts: dict[tuple[int, int], int] = {}
        """(cell, day) -> look"""
        self.days: dict[tuple[str, int], int] = {}
        """(source, day) -> the last look, whose verdict digest stands"""
        self.newest: dict[str, tuple[int, int]] = {}
        """source -> (look, at)"""

    def apply(self, number: int, source: str, at: int, sheet: Sheet) -> str:
        """Enter a sheet; the digest of terms and parts its look must have."""
        for draft in sheet.terms:
            self._apply_draft(number, source, at, draft)
        for n, event in enumerate(sheet.events):
            self.events[number, n] = event_row(number, n, event)
        self.days[source, chain.day_of(at)] = number
        self.newest[source] = (number, at)
        terms = [self.terms[d.promise, d.version] for d in sheet.terms]
        return chain.terms_and_parts(
            (t.terms.promise, t.terms.version, t.digest, [cell for _, cell in t.cells.values()]) for t in terms
        )

    def source_terms(self, source: str) -> list[ExpectedTerm]:
        """The terms of a source."""
        return [term for term in self.terms.values() if term.terms.source == source]

    def name(self, cell_id: Any, rest: str) -> str:
        """How a finding calls a row of a cell."""
        if cell_id not in self.cells:
            return f"cell {cell_id} {rest}"
        term, cell = self.cells[cell_id]
        slice_name = f"{cell.column}={cell.value!r}" if cell.column else "whole"
        return f"{term.terms.promise!r} version {term.terms.version!r} {slice_name} {rest}"

    def _apply_draft(self, number: int, source: str, at: int, draft: TermDraft) -> None:
        key = (draft.promise, draft.version)
        if draft.new_terms is not None:
            if key in self.terms:
                raise ValueError(f"the terms of {key} stand twice in the chain")
            terms = draft.new_terms
            self.terms[key] = ExpectedTerm(
                len(self.terms) + 1, terms, canonical_terms(terms), terms_digest(terms), number, None, 0
            )
        term = self.terms[key]
        if term.terms.source != source:
            raise ValueError(f"the terms of {key} belong to source {term.terms.source!r}")
        term.sealed_until = draft.sealed_until
        term.closed_by = number if draft.closed else None
        for cell in draft.new_cells:
            cell_id = len(self.cells) + 1
            term.cells[cell.key] = (cell_id, cell)
            self.cells[cell_id] = (term, cell)
        self._apply_counts(number, term, draft)
        for cell_id, _ in term.cells.values():
            self.verdicts[cell_id, chain.day_of(at)] = number

    def _apply_counts(self, number: int, term: ExpectedTerm, draft: TermDraft) -> None:
        for c in draft.counts:
            levels = self.buckets.setdefault(term.cells[c.column, c.value][0], {}).setdefault(c.bucket, {})
            sealed_by = levels[c.level][-1] if c.level in levels else None
            levels[c.level] = [*(getattr(c.counts, name) for name in INTEGERS), c.counts.newest, sealed_by]
        for column, value, bucket, level in draft.gone:
            self.buckets[term.cells[column, value][0]][bucket].pop(level, None)
        for start in draft.sealed:
            for cell_id, _ in term.cells.values():
                for columns in self.buckets.get(cell_id, {}).get(start, {}).values():
                    columns[-1] = number


def event_row(number: int, n: int, event: Event) -> tuple[Any, ...]:
    """As the event table holds it."""
    e = event
    return (number, n, e.kind, e.promise, e.version, e.column, e.value, e.bucket, event_facts(e))
