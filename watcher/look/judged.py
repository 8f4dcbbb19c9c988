"""One promise version in a look: from the tally to standings, memories and events."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any, Final

from watcher.book import Table, build, discovered, sealing, table
from watcher.diagnosis import diagnose
from watcher.ledger.store import Ledger
from watcher.ledger.terms import terms_digest
from watcher.look.promises import Known
from watcher.look.refusals import refuse_one_sided, sealed_counts
from watcher.path import NOTHING, total
from watcher.records import (
    CellCounts,
    Event,
    Question,
    RejectedRow,
    Remarks,
    Standing,
    StoredTerm,
    Tally,
    TermDraft,
    Terms,
)
from watcher.sources.base import Source
from watcher.verdict import Verdict, advance, moment

SAMPLES: Final = 20


@dataclass(frozen=True, slots=True)
class Result:
    """One promise version after judging, before the entry is made."""

    draft: TermDraft
    events: tuple[Event, ...]
    changed: bool
    rejected: Mapping[str, int] = field(default_factory=dict)
    samples: tuple[RejectedRow, ...] = ()


def judge_term(ledger: Ledger, source: Source, known: Known, asked: Question, tally: Tally, now: int) -> Result:
    """Judge one promise version with what its source counted; nothing is written."""
    terms = known.watched.terms
    new_cells = discovered(known.cells, tally.cells)
    cells = (*known.cells, *new_cells)
    before = known.sealed_until
    fresh = table(tally.cells)
    stored = table(ledger.counts(known.stored.id)) if known.stored else {}
    counts, gone = _changes(stored, tally.cells, before)
    sealed, until = sealing(terms, before, now)
    memories = ledger.memories(known.stored.id) if known.stored else {}
    previous = previous_standings(ledger, known)
    remarks = Remarks(
        unlisted=known.unlisted,
        uncertified=known.watched.uncertified,
        stale_after=known.watched.stale_after,
        late_labels=tally.late_labels,
    )
    digest = known.stored.digest if known.stored else terms_digest(terms)
    merged = _merge(stored, fresh, before)
    if not known.unlisted:
        refuse_one_sided(source, asked, sealed_counts(merged, until))
    verdict = advance(build(terms, digest, cells, merged, before, until, memories, stored), now, remarks)
    verdict = replace(verdict, standings=diagnose(terms, merged, until, now, verdict.standings, verdict.memories))
    known_rejects = ledger.rejects(terms.promise)[0] if known.stored else {}
    events = [*_own_events(known, stored, fresh, previous, tally, known_rejects), *verdict.events]
    draft = TermDraft(
        promise=terms.promise,
        version=terms.version,
        new_terms=None if known.stored else terms,
        new_cells=new_cells if known.stored else cells,
        counts=counts,
        gone=gone,
        sealed=sealed,
        sealed_until=until,
        remarks=remarks,
        standings=verdict.standings,
        memories=verdict.memories,
    )
    rejected = {reason: count for reason, count in tally.rejected.items() if count}
    changed = bool(counts or gone or sealed or events or new_cells or known.stored is None) or _flags(
        verdict
    ) != _flags(previous)
    samples = _samples(source, asked, rejected, known_rejects)
    return Result(draft, tuple(events), changed, rejected, samples)


def _changes(
    stored: Table, cells: Sequence[CellCounts], before: int
) -> tuple[tuple[CellCounts, ...], tuple[tuple[str, str, int, str], ...]]:
    """What entered or changed among the open buckets, and what had counts and has none any more."""
    seen, changed = set(), []
    for row in cells:
        seen.add((row.column, row.value, row.bucket, row.level))
        if stored.get((row.column, row.value), {}).get(row.bucket, {}).get(row.level) != row.counts:
            changed.append(row)
    gone = [
        (*key, start, level)
        for key, buckets in stored.items()
        for start, levels in buckets.items()
        if start >= before
        for level in levels
        if (*key, start, level) not in seen
    ]
    return tuple(changed), tuple(sorted(gone))


def _merge(stored: Table, fresh: Table, before: int) -> Table:
    """Sealed counts from the ledger, open ones from the tally."""
    merged: Table = {}
    for key, buckets in stored.items():
        merged[key] = {start: levels for start, levels in buckets.items() if start < before}
    for key, buckets in fresh.items():
        merged.setdefault(key, {}).update(buckets)
    return merged


def previous_standings(ledger: Ledger, known: Known) -> tuple[Standing, ...]:
    """Where the promise version stood after the look before; empty at its first."""
    if known.stored is None:
        return ()
    return tuple(ledger.standings(promise=known.watched.terms.promise, version=known.watched.terms.version))


def _flags(found: Verdict | Sequence[Standing]) -> set[tuple[str, str, tuple[str, ...]]]:
    standings = found.standings if isinstance(found, Verdict) else found
    return {(s.column, s.value, s.flags) for s in standings}


def _own_events(
    known: Known,
    stored: Table,
    fresh: Table,
    previous: Sequence[Standing],
    tally: Tally,
    rejects: Mapping[str, int],
) -> list[Event]:
    """Events that the verdict does not know of: about rows, labels and versions."""
    terms = known.watched.terms
    events = []

    def happened(kind: str, bucket: int | None, facts: Mapping[str, Any]) -> None:
        events.append(Event(kind, terms.promise, terms.version, "", "", bucket, facts))

    if known.stored is None:
        happened("released", None, {"released": moment(terms.released).isoformat()})
    whole = stored.get(("", ""), {})
    for start in sorted(whole):
        if start < known.sealed_until:
            continue
        then, now = total(whole[start]), total(fresh.get(("", ""), {}).get(start) or {"": NOTHING})
        if now.predictions < then.predictions or now.labels < then.labels:
            facts = {"predictions": [then.predictions, now.predictions], "labels": [then.labels, now.labels]}
            happened("evidence-shrank", start, facts)
    more = {reason: n for reason, n in sorted(tally.rejected.items()) if n > rejects.get(reason, 0)}
    if more:
        happened("rows-rejected", None, more)
    late = max((s.late_labels for s in previous if s.column == ""), default=0)
    if tally.late_labels > late:
        happened("late-labels", None, {"before": late, "now": tally.late_labels})
    return events


def _samples(
    source: Source, asked: Question, rejected: Mapping[str, int], before: Mapping[str, int]
) -> tuple[RejectedRow, ...]:
    """Samples of rejected rows, read again only where a count changed."""
    changed = [reason for reason, count in sorted(rejected.items()) if count != before.get(reason, 0)]
    return tuple(row for reason in changed for row in source.rejected(asked, reason, SAMPLES))


def close_term(ledger: Ledger, old: StoredTerm, new: Terms, now: int) -> tuple[TermDraft, list[Event]]:
    """The superseded version with its final verdict: what had been counted, judged once more at the time of the look."""
    terms = old.terms
    counts, cells = table(ledger.counts(old.id)), ledger.cells(old.id)
    late = max((s.late_labels for s in ledger.standings(promise=terms.promise, version=terms.version)), default=0)
    remarks = Remarks(stale_after=max(7 * 86400, 2 * terms.label_lag), late_labels=late)
    book = build(terms, old.digest, cells, counts, old.sealed_until, old.sealed_until, ledger.memories(old.id))
    verdict = advance(book, now, remarks)
    draft = TermDraft(
        promise=terms.promise,
        version=terms.version,
        new_terms=None,
        new_cells=(),
        counts=(),
        gone=(),
        sealed=(),
        sealed_until=old.sealed_until,
        remarks=remarks,
        standings=diagnose(terms, counts, old.sealed_until, now, verdict.standings, verdict.memories),
        memories=verdict.memories,
        closed=True,
    )
    breaches = sorted({s.breach.number for s in verdict.standings if s.breach})
    facts: dict[str, Any] = {"by": new.version, "released": moment(new.released).isoformat()}
    facts |= {"breach": breaches[-1]} if breaches else {}
    return draft, [Event("superseded", terms.promise, terms.version, "", "", None, facts), *verdict.events]
