"""A small invented world for tests of the ledger: terms, looks, and a rule far simpler than the real verdict."""

from __future__ import annotations

import math
import random
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from fractions import Fraction
from typing import Any

from watcher.ledger.audit import Replayed
from watcher.ledger.terms import terms_digest
from watcher.records import (
    Breach,
    Cell,
    CellCounts,
    Columns,
    Counts,
    Entry,
    Event,
    Interval,
    NoticeDraft,
    Remarks,
    Slice,
    Standing,
    TermDraft,
    Terms,
    ToDecide,
)

DAY = 86400
RELEASED = 1_793_577_600  # 2026-11-02T00:00:00Z, computed
METHOD = 1


def make_terms(promise: str = "damage-photos", version: str = "1", source: str = "desk", **changes: Any) -> Terms:
    terms = Terms(
        promise=promise,
        model="",
        version=version,
        source=source,
        where=(("version", "2026.11"),),
        columns=Columns(time="decided_at", prediction="predicted", id="parcel", label="observed"),
        time_format="rfc3339",
        source_time_zone=None,
        classes=("intact", "damaged"),
        positive="damaged",
        measure="error",
        tolerance=0.03,
        risk=0.001,
        released=RELEASED,
        service_life=364 * DAY,
        bucket=DAY,
        time_zone="UTC",
        label_lag=2 * DAY,
        count="sealed",
        slices=(Slice("depot", ("Alder", "Birch"), ("1", "1")),),
        weight_levels=(),
        n_max=None,
        cluster_span=None,
        labelling_probabilities=(),
        label_noise=None,
        window_at_least=None,
        support_at_least=7 * DAY,
        warn_every=1095 * DAY,
    )
    return replace(terms, **changes)


def declared_cells(terms: Terms) -> tuple[Cell, ...]:
    values = [(s.column, v) for s in terms.slices for v in s.values]
    return (Cell("", "", Fraction(1, 2), 0), *(Cell(c, v, Fraction(2, 5 * len(values)), 0) for c, v in values))


def moment(epoch: int | None) -> datetime | None:
    return None if epoch is None else datetime.fromtimestamp(epoch, UTC)


@dataclass
class Book:
    """What the simple rule knows of one promise version."""

    terms: Terms
    cells: list[Cell] = field(default_factory=list)
    counts: dict[tuple[str, str, int, str], Counts] = field(default_factory=dict)
    sealed: set[int] = field(default_factory=set)
    breached: dict[tuple[str, str], tuple[int, int]] = field(default_factory=dict)


class SimpleReplay:
    """A cell is breached for good once more than 4% of at least 20 sealed labels are errors; no statistics in it."""

    method = METHOD
    derives = frozenset({"breach"})

    def __init__(self) -> None:
        self.books: dict[tuple[str, str], Book] = {}
        self.adopted: list[int] = []

    def look(self, entry: Entry) -> Replayed:
        standings: list[Standing] = []
        memories: list[Mapping[str, Any]] = []
        events: list[Event] = []
        for draft in entry.terms:
            book = self._enter(draft)
            for cell in sorted(book.cells, key=lambda c: c.key):
                standing, memory = self._judge(book, cell, draft, entry.at, events)
                standings.append(standing)
                memories.append(memory)
        return Replayed(tuple(standings), tuple(memories), tuple(events))

    def adopt(self, entry: Entry, standings: tuple[Standing, ...], memories: tuple[Mapping[str, Any], ...]) -> None:
        self.adopted.append(entry.at)
        for draft in entry.terms:
            self._enter(draft)
        for standing, memory in zip(standings, memories, strict=True):
            if memory["breached"] is not None:
                book = self.books[standing.promise, standing.version]
                book.breached[standing.column, standing.value] = (memory["breached"], memory["noticed"])

    def _enter(self, draft: TermDraft) -> Book:
        key = (draft.promise, draft.version)
        if draft.new_terms is not None:
            self.books[key] = Book(draft.new_terms)
        book = self.books[key]
        book.cells += draft.new_cells
        book.counts |= {(c.column, c.value, c.bucket, c.level): c.counts for c in draft.counts}
        for gone in draft.gone:
            del book.counts[gone]
        book.sealed |= set(draft.sealed)
        return book

    def _judge(
        self, book: Book, cell: Cell, draft: TermDraft, at: int, events: list[Event]
    ) -> tuple[Standing, Mapping[str, Any]]:
        terms = book.terms
        mine = [(k[2], c) for k, c in book.counts.items() if k[:2] == cell.key]
        counted = [c for start, c in mine if start in book.sealed]
        labels, errors = sum(c.labels for c in counted), sum(c.errors for c in counted)
        open_ones = [c for start, c in mine if start not in book.sealed]
        rate = errors / labels if labels else None
        if labels >= 20 and errors > 0.04 * labels and cell.key not in book.breached:
            book.breached[cell.key] = (1, at)
            facts = {"errors": errors, "labels": labels, "rate": rate, "total": f"{errors / 3:.6f}"}
            events.append(
                Event("breach", terms.promise, terms.version, *cell.key, max(draft.sealed, default=None), facts)
            )
        standing = book.breached.get(cell.key)
        breach = None
        if standing is not None:
            breach = Breach(1, moment(standing[1]), moment(standing[1]), moment(terms.released), 0.0312345678912)
        return (
            Standing(
                promise=terms.promise,
                version=terms.version,
                column=cell.column,
                value=cell.value,
                state="breached" if breach else "undecided",
                flags=("unlisted",) if draft.remarks.unlisted else (),
                tolerance=terms.tolerance,
                risk=terms.risk,
                part=float(cell.part),
                terms=terms_digest(terms),
                predictions=sum(c.predictions for c in counted),
                labels=labels,
                errors=float(errors),
                provisional_labels=sum(c.labels for c in open_ones),
                provisional_errors=sum(c.errors for c in open_ones),
                provisional_predictions=sum(c.predictions for c in open_ones),
                late_labels=draft.remarks.late_labels,
                estimate=rate,
                life=Interval(max(0.0, (rate or 0.0) / 3), min(1.0, (rate or 0.3) * 3)),
                recent=None,
                support=None,
                total=math.floor(errors / 3 * 1e6) / 1e6,
                threshold=-math.log(terms.risk * float(cell.part)),
                breach=breach,
                to_decide=None if breach else ToDecide(4473, None),
                newest_label=moment(max((c.newest for _, c in mine if c.newest), default=None)),
                counted_until=moment(max(book.sealed) + terms.bucket if book.sealed else None),
                diagnostics={"labelled_share": labels / 7 if labels else None},
            ),
            {"breached": standing and standing[0], "noticed": standing and standing[1], "seen": labels},
        )


class World:
    """Makes entries one after another, as the look would: every count is drawn, the verdict is the simple rule's."""

    def __init__(self, seed: int = 1, *, promises: tuple[Terms, ...] | None = None, rate: float = 0.02) -> None:
        self.random = random.Random(seed)
        self.rule = SimpleReplay()
        self.promises = promises or (make_terms(),)
        self.rate = rate
        self.known: dict[tuple[str, str], set[int]] = {}

    def entry(
        self, at: int, expected: int, *, source: str = "desk", extra: tuple[Event, ...] = (), **more: Any
    ) -> Entry:
        """One look at `at`: the open buckets grow, those that are due are sealed."""
        drafts = tuple(self._draft(t, at) for t in self.promises if t.source == source)
        return self.judged(Entry(source, at, "pull", METHOD, expected, drafts, (), **more), extra)

    def judged(self, entry: Entry, extra: tuple[Event, ...] = ()) -> Entry:
        """The entry with the standings, memories and events of the rule, and a notice for each breach."""
        said = self.rule.look(entry)
        drafts = []
        for draft in entry.terms:
            mine = [i for i, s in enumerate(said.standings) if (s.promise, s.version) == (draft.promise, draft.version)]
            drafts.append(
                replace(
                    draft,
                    standings=tuple(said.standings[i] for i in mine),
                    memories=tuple(said.memories[i] for i in mine),
                )
            )
        events = (*said.events, *extra)
        notices = [NoticeDraft("log", n) for n in range(len(events))]
        notices += [NoticeDraft("retraining", n, 1) for n, e in enumerate(events) if e.kind == "breach"]
        return replace(entry, terms=tuple(drafts), events=events, notices=tuple(notices))

    def _draft(self, terms: Terms, at: int) -> TermDraft:
        key = (terms.promise, terms.version)
        new = key not in self.known
        sealed_before = self.known.setdefault(key, set())
        starts = range(terms.released, at, DAY)
        due = tuple(s for s in starts if s + DAY + terms.label_lag <= at and s not in sealed_before)
        counts = [
            self._counted(cell, start, at)
            for cell in declared_cells(terms)
            for start in starts
            if start not in sealed_before
        ]
        sealed_before |= set(due)
        return TermDraft(
            promise=terms.promise,
            version=terms.version,
            new_terms=terms if new else None,
            new_cells=declared_cells(terms) if new else (),
            counts=tuple(counts),
            gone=(),
            sealed=due,
            sealed_until=max((s + DAY for s in sealed_before), default=terms.released),
            remarks=Remarks(uncertified=True),
            standings=(),
            memories=(),
        )

    def _counted(self, cell: Cell, start: int, at: int) -> CellCounts:
        labels = self.random.randrange(20, 40)
        errors = sum(self.random.random() < self.rate for _ in range(labels))
        counts = Counts(predictions=labels + 5, labels=labels, errors=errors, newest=min(at, start + DAY) - 1)
        return CellCounts(cell.column, cell.value, start, "", counts)
