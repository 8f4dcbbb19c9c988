"""One look: pull, judge, record. Every collaborator and the time are arguments; nothing is sent from here.

A look reads the newest look number of its source before the pull and commits only if it is unchanged. A look with no new
count, no sealing and no event writes nothing.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from typing import Any, Final

from watcher.book import Table, build, discovered, first_cells, next_sealing, sealing, table
from watcher.bounds import METHOD
from watcher.bounds.release import certify
from watcher.diagnosis import diagnose
from watcher.errors import SourceFailed, TermsChanged, UsageError, WatcherError
from watcher.ledger.store import Ledger
from watcher.ledger.terms import canonical_terms, terms_digest
from watcher.path import NOTHING, add, total
from watcher.records import (
    Cell,
    CellCounts,
    Counts,
    Entry,
    Event,
    Failure,
    Head,
    NoticeDraft,
    Question,
    RejectedRow,
    Remarks,
    SourceState,
    Standing,
    StoredTerm,
    Tally,
    TermDraft,
    Terms,
)
from watcher.sources.base import Source
from watcher.sources.normal import text_of
from watcher.verdict import Verdict, advance, moment

GAP: Final = 7
"""A look that seals more buckets than this at once makes up for a gap: it sends one notice a promise and route."""
GRAVEST: Final = ("breach", "support-lost", "warning", "supported", "warning-over")
SAMPLES: Final = 20
ONE_SIDED: Final = 1e-4
"""Chance of refusing a measure wrongly because no label of one side was met yet."""


class ClockWentBack(WatcherError):
    """The time of the look lies before the newest look of the ledger: no look was made."""

    def __init__(self, now: int, newest: int) -> None:
        self.now, self.newest = now, newest
        super().__init__(
            f"clock-went-back: it is {moment(now).isoformat()} and the newest look of the ledger was at "
            f"{moment(newest).isoformat()}; no look was made. Set the clock right, or use `watcher rehearse` to replay history"
        )


class NothingInCommon(UsageError):
    """Labels and predictions share no value: the columns are mapped wrongly, most likely."""

    def __init__(self, promise: str, predictions: Iterable[str], labels: Iterable[str]) -> None:
        self.predictions, self.labels = tuple(predictions), tuple(labels)
        super().__init__(
            f"promise {promise!r}: labels and predictions share no value. predictions: {', '.join(map(repr, self.predictions))}; "
            f"labels: {', '.join(map(repr, self.labels))}. Map the right columns, or declare classes"
        )


class WeakEvidence(UsageError):
    """The release evidence of a promise does not bear out its tolerance."""

    def __init__(self, promise: str, what: str, way_out: str) -> None:
        self.promise, self.what, self.way_out = promise, what, way_out
        super().__init__(f"promise {promise!r}: {what}. {way_out}")


class OneSided(UsageError):
    """The labels cannot support the measure: what would show the errors it counts is never labelled."""

    def __init__(self, promise: str, measure: str, labels: int, side: str) -> None:
        self.promise, self.measure = promise, measure
        super().__init__(
            f"promise {promise!r}: measure = {measure!r} is refused: of {labels:,} labelled samples none was predicted {side}, "
            f"although such predictions are made; a {measure.replace('-', ' ')} could never be seen. Label samples whatever was "
            'predicted, or give the promise a new version with measure = "error"'
        )


@dataclass(frozen=True, slots=True)
class Evidence:
    """The hold-out sample behind a tolerance."""

    labels: int
    errors: int
    models: int = 1
    """Among how many models, fixed beforehand, the released one was chosen on it."""


@dataclass(frozen=True, slots=True)
class Watched:
    """A promise as the configuration has it now."""

    terms: Terms
    stale_after: int
    uncertified: bool = False
    retired: bool = False
    evidence: Evidence | None = None


@dataclass(frozen=True, slots=True)
class Routing:
    """What a look must know of a route: which events it carries."""

    name: str
    events: frozenset[str]
    retrain: bool = False
    promises: frozenset[str] = frozenset()
    """Empty: all."""


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a look found."""

    source: str
    at: datetime
    head: Head
    written: bool
    """False: nothing new, or a dry run."""
    standings: tuple[Standing, ...]
    events: tuple[Event, ...]
    rejected: Mapping[str, Mapping[str, int]]
    """promise -> reason -> rows"""
    terms: Mapping[tuple[str, str], Terms] = field(default_factory=dict)
    """By promise and version."""
    failed: tuple[Failure, ...] = ()
    has_future: bool = False
    """A row lay in the future: it will count later although the source does not change."""
    remarks: tuple[str, ...] = ()
    """Sentences for the person who asked, for instance that today's labels are seen at an earlier time."""


@dataclass(frozen=True, slots=True)
class _Known:
    """A promise version as the ledger has it before this look."""

    watched: Watched
    stored: StoredTerm | None
    cells: tuple[Cell, ...]
    unlisted: bool = False
    supersedes: StoredTerm | None = None

    @property
    def sealed_until(self) -> int:
        return self.stored.sealed_until if self.stored else self.watched.terms.released


@dataclass(frozen=True, slots=True)
class _Result:
    """One promise version after judging, before the entry is made."""

    draft: TermDraft
    events: tuple[Event, ...]
    changed: bool
    rejected: Mapping[str, int] = field(default_factory=dict)
    samples: tuple[RejectedRow, ...] = ()


def look(
    ledger: Ledger,
    source: Source,
    watched: Sequence[Watched],
    now: int,
    *,
    at_given: bool = False,
    keep: bool = True,
    routes: Sequence[Routing] = (),
    slice_limit: int = 200,
    further: Sequence[Event] = (),
) -> Outcome:
    """One look at one source.

    `now` is in epoch seconds; `keep` False judges without writing; `further` events are recorded
    with it. Raises ClockWentBack, TermsChanged, SourceFailed, NothingInCommon, WeakEvidence, OneSided, LedgerBusy; in each
    case nothing was written.
    """
    refuse_weak_evidence(watched)
    if now < (newest := ledger.newest_at()):
        raise ClockWentBack(now, newest)
    expected, _ = ledger.newest_look(source.name)
    known = recognise(ledger, source.name, watched)
    questions = [
        question(each.watched.terms, each.sealed_until, now, at_given=at_given, slice_limit=slice_limit)
        for each in known
    ]
    tallies = source.tally(questions) if questions else []
    results = []
    for each, asked, tally in zip(known, questions, tallies, strict=True):
        if each.stored is None:
            _refuse_strangers(source, asked, tally)
        results.append(_judge(ledger, source, each, asked, tally, now))
    changed = bool(further) or any(result.changed for result in results)
    entry = _entry(ledger, source.name, now, expected, known, results, routes, further)
    head = ledger.commit(entry) if changed and keep else ledger.head()
    return Outcome(
        source=source.name,
        at=moment(now),
        head=head,
        written=changed and keep,
        standings=tuple(standing for result in results for standing in result.draft.standings),
        events=entry.events,
        rejected={result.draft.promise: result.rejected for result in results if result.rejected},
        terms={(each.watched.terms.promise, each.watched.terms.version): each.watched.terms for each in known},
        remarks=tuple(_remarks(known, at_given)),
        has_future=any(tally.has_future for tally in tallies),
    )


def quiet_until(ledger: Ledger, source: str, watched: Sequence[Watched], has_future: bool) -> int:
    """The time (epoch seconds) before which a look at unchanged files could find nothing new; 0: look anyway.

    That is when the next bucket is due to be sealed or a promise grows stale, whichever is first.
    """
    known = recognise(ledger, source, watched)
    if has_future or any(each.stored is None or each.watched.retired for each in known):
        return 0
    moments = []
    for each in known:
        terms = each.watched.terms
        whole = next((s for s in ledger.standings(promise=terms.promise, version=terms.version) if not s.column), None)
        if whole is None:
            return 0
        moments.append(next_sealing(terms, each.sealed_until))
        newest = terms.released if whole.newest_label is None else int(whole.newest_label.timestamp())
        if "stale" not in whole.flags:
            moments.append(newest + each.watched.stale_after + 1)
    return min(moments, default=0)


def recognise(ledger: Ledger, source: str, watched: Sequence[Watched]) -> list[_Known]:
    """Match the configuration with the frozen terms of a source. Raises TermsChanged."""
    stored = {(term.terms.promise, term.terms.version): term for term in ledger.terms(open_only=False)}
    known: list[_Known] = []
    taken = set()
    for each in watched:
        name = (each.terms.promise, each.terms.version)
        found = stored.get(name)
        if found is not None:
            refuse_changes(found.terms, each.terms)
            taken.add(name)
            if found.closed_by is None and not each.retired:
                known.append(_Known(each, found, tuple(ledger.cells(found.id))))
            continue
        if each.retired:
            continue
        older = [t for t in stored.values() if t.terms.promise == each.terms.promise and t.closed_by is None]
        older = [
            t
            for t in older
            if (t.terms.promise, t.terms.version) not in {(w.terms.promise, w.terms.version) for w in watched}
        ]
        known.append(_Known(each, None, first_cells(each.terms), supersedes=older[0] if older else None))
    replaced = {known_one.supersedes.id for known_one in known if known_one.supersedes}
    for name, term in stored.items():
        if name in taken or term.closed_by is not None or term.terms.source != source or term.id in replaced:
            continue
        kept = Watched(term.terms, max(7 * 86400, 2 * term.terms.label_lag))
        known.append(_Known(kept, term, tuple(ledger.cells(term.id)), unlisted=True))
    return known


def refuse_changes(frozen: Terms, wanted: Terms) -> None:
    """Raise TermsChanged for the first term that differs."""
    if canonical_terms(frozen) == canonical_terms(wanted):
        return
    for name in Terms.__dataclass_fields__:
        before, after = getattr(frozen, name), getattr(wanted, name)
        if before != after:
            raise TermsChanged(wanted.promise, wanted.version, name, _shown(before), _shown(after))


def _shown(value: Any) -> str:
    if isinstance(value, tuple):
        return "[" + ", ".join(map(_shown, value)) + "]"
    if hasattr(value, "__dataclass_fields__"):
        pairs = ((name, getattr(value, name)) for name in value.__dataclass_fields__)
        return "{" + ", ".join(f"{name} = {_shown(part)}" for name, part in pairs if part is not None) + "}"
    return repr(value)


def question(terms: Terms, open_from: int, now: int, *, at_given: bool = False, slice_limit: int = 200) -> Question:
    """What a source is asked about one promise whose buckets before `open_from` are sealed."""
    return Question(
        promise=terms.promise,
        version=terms.version,
        columns=terms.columns,
        time_format=terms.time_format,
        source_time_zone=terms.source_time_zone,
        where=terms.where,
        classes=terms.classes,
        positive=terms.positive,
        measure=terms.measure,
        slices=tuple(each.column for each in terms.slices),
        weight_levels=terms.weight_levels,
        n_max=terms.n_max,
        cluster_span=terms.cluster_span,
        labelling_probabilities=terms.labelling_probabilities,
        time_zone=terms.time_zone,
        bucket=terms.bucket,
        released=terms.released,
        open_from=open_from,
        label_lag=terms.label_lag,
        now=now,
        at_given=at_given,
        slice_limit=slice_limit,
    )


def _refuse_strangers(source: Source, asked: Question, tally: Tally) -> None:
    whole = [row.counts for row in tally.cells if row.column == ""]
    labels, errors = sum(c.labels for c in whole), sum(c.errors for c in whole)
    if asked.columns.label is None or asked.classes or not labels or errors < labels:
        return
    survey = source.survey(asked)
    if survey.disjoint:
        raise NothingInCommon(asked.promise, (v for v, _ in survey.predictions), (v for v, _ in survey.labels))


def weak_evidence(terms: Terms, evidence: Evidence) -> WeakEvidence | None:
    """Why release evidence does not bear out the tolerance of a promise (method.md section 6); None when it does."""
    if terms.measure == "loss":
        what = "release_evidence counts errors and cannot bear out a promise about a loss"
        return WeakEvidence(terms.promise, what, "Leave it out; the promise is then shown as uncertified")
    found = certify(evidence.labels, evidence.errors, terms.risk, evidence.models)
    if found.bears_out(terms.tolerance):
        return None
    best = f", the best of {evidence.models:,} models," if evidence.models > 1 else ""
    least = f"{math.ceil(found.exact * 1e5) / 1e5:.5f}".rstrip("0")
    return WeakEvidence(
        terms.promise,
        f"{evidence.errors:,} errors in {evidence.labels:,} labels{best} bear out a tolerance of {least} at risk {terms.risk}, not "
        f"{terms.tolerance}",
        f"Promise {least}, bring more labels, or set uncertified = true, which every page then shows",
    )


def refuse_weak_evidence(watched: Iterable[Watched]) -> None:
    """Raise WeakEvidence for the first promise whose release evidence does not bear it out, unless it is uncertified."""
    for each in watched:
        if each.evidence is not None and not each.uncertified and not each.retired:
            weak = weak_evidence(each.terms, each.evidence)
            if weak is not None:
                raise weak


def refuse_one_sided(source: Source, asked: Question, sealed: Counts) -> None:
    """Raise OneSided when all labels of the sealed buckets are on the side of the predictions that cannot err as measured.

    If labels were drawn whatever was predicted, a false refusal EVER has chance below 1e-4: it takes as many labels as make
    it that unlikely to have met none of the other side.
    """
    misses = asked.measure == "miss"
    if not sealed.labels or not (misses or asked.measure == "false-alarm"):
        return
    positive = sealed.positives - sealed.misses + sealed.false_alarms
    if (sealed.labels - positive if misses else positive) > 0:
        return
    known = source.survey(asked).predictions
    every = sum(rows for _, rows in known)
    likewise = sum(rows for value, rows in known if value == text_of(asked.positive))
    other = every - likewise if misses else likewise
    if other and sealed.labels * math.log1p(-min(other / every, 1.0 - 1e-12)) < math.log(ONE_SIDED):
        raise OneSided(asked.promise, asked.measure, sealed.labels, "negative" if misses else "positive")


def sealed_counts(counts: Table, until: int) -> Counts:
    """Everything of the whole in the buckets before `until`."""
    found = NOTHING
    for start, levels in counts.get(("", ""), {}).items():
        found = add(found, total(levels)) if start < until else found
    return found


def _judge(ledger: Ledger, source: Source, known: _Known, asked: Question, tally: Tally, now: int) -> _Result:
    terms = known.watched.terms
    new_cells = discovered(known.cells, tally.cells)
    cells = (*known.cells, *new_cells)
    before = known.sealed_until
    fresh = table(tally.cells)
    stored = table(ledger.counts(known.stored.id)) if known.stored else {}
    counts, gone = _changes(stored, tally.cells, before)
    sealed, until = sealing(terms, before, now)
    memories = ledger.memories(known.stored.id) if known.stored else {}
    previous = _previous(ledger, known)
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
    return _Result(draft, tuple(events), changed, rejected, samples)


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


def _previous(ledger: Ledger, known: _Known) -> tuple[Standing, ...]:
    if known.stored is None:
        return ()
    return tuple(ledger.standings(promise=known.watched.terms.promise, version=known.watched.terms.version))


def _flags(found: Verdict | Sequence[Standing]) -> set[tuple[str, str, tuple[str, ...]]]:
    standings = found.standings if isinstance(found, Verdict) else found
    return {(s.column, s.value, s.flags) for s in standings}


def _own_events(
    known: _Known,
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


def _entry(
    ledger: Ledger,
    source: str,
    now: int,
    expected: int,
    known: Sequence[_Known],
    results: Sequence[_Result],
    routes: Sequence[Routing],
    further: Sequence[Event] = (),
) -> Entry:
    drafts: list[TermDraft] = []
    events: list[Event] = list(further)
    for each, result in zip(known, results, strict=True):
        if each.supersedes is not None:
            closing, ended = _close(ledger, each.supersedes, each.watched.terms, now)
            drafts.append(closing)
            events += ended
        drafts.append(result.draft)
        events += result.events
    return Entry(
        source=source,
        at=now,
        kind="pull",
        method=METHOD,
        expected=expected,
        terms=tuple(drafts),
        events=tuple(events),
        notices=tuple(draft_notices(events, drafts, routes)),
        rejected=tuple(row for result in results for row in result.samples),
        rejected_counts={result.draft.promise: result.rejected for result in results},
    )


def _close(ledger: Ledger, old: StoredTerm, new: Terms, now: int) -> tuple[TermDraft, list[Event]]:
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


def draft_notices(events: Sequence[Event], drafts: Sequence[TermDraft], routes: Sequence[Routing]) -> list[NoticeDraft]:
    """Which events leave over which routes.

    A first look or one that makes up for a long gap sends at most one notice a promise and route: the gravest.
    A retraining route carries breaches only, one notice a breach number.
    """
    catching_up = {
        (draft.promise, draft.version) for draft in drafts if draft.new_terms is not None or len(draft.sealed) > GAP
    }
    found = []
    for route in routes:
        chosen: dict[str, int] = {}
        for n, event in enumerate(events):
            if event.kind not in route.events or (route.promises and event.promise not in route.promises):
                continue
            if route.retrain:
                if event.kind == "breach":
                    found.append(NoticeDraft(route.name, n, int(event.facts["number"])))
            elif (event.promise, event.version) in catching_up:
                best = chosen.get(event.promise)
                if best is None or _gravity(event) <= _gravity(events[best]):
                    chosen[event.promise] = n
            else:
                found.append(NoticeDraft(route.name, n))
        found += [NoticeDraft(route.name, n) for n in chosen.values()]
    return found


def _gravity(event: Event) -> int:
    return GRAVEST.index(event.kind) if event.kind in GRAVEST else len(GRAVEST)


def _remarks(known: Sequence[_Known], at_given: bool) -> Iterable[str]:
    for each in known:
        if at_given and each.watched.terms.columns.labelled_at is None:
            yield (
                f"promise {each.watched.terms.promise!r}: no labelled_at column is mapped, so today's labels are seen "
                "although an earlier time was asked for"
            )
        if each.watched.terms.columns.id is None:
            yield f"promise {each.watched.terms.promise!r}: no id column is mapped, so repeated rows cannot be told apart"


def record_failure(state: SourceState, reason: str, detail: str, at: datetime, duration: float) -> SourceState:
    """The state of a source after a pull that failed."""
    return replace(
        state,
        last_try=at,
        failures=state.failures + 1,
        failures_total=state.failures_total + 1,
        reason=reason,
        detail=detail,
        failing_since=state.failing_since or at,
        duration=duration,
    )


def record_success(state: SourceState, signature: str | None, at: datetime, duration: float) -> SourceState:
    """The state of a source after a pull that gave an answer."""
    return replace(
        state,
        last_try=at,
        last_success=at,
        failures=0,
        reason=None,
        detail=None,
        failing_since=None,
        duration=duration,
        signature=signature,
    )


def attempt(
    ledger: Ledger,
    source: Source,
    watched: Sequence[Watched],
    now: int,
    timer: Callable[[], float],
    *,
    at_given: bool = False,
    keep: bool = True,
    routes: Sequence[Routing] = (),
    slice_limit: int = 200,
) -> Outcome:
    """A look that outlives its source: a pull that fails is recorded, shown and announced, and the counts stay.

    `timer` gives seconds that only grow. Other errors than SourceFailed are raised as by `look`.
    """
    state, begun = ledger.source_state(source.name), timer()
    try:
        signature = source.signature()
        restored = _restored(source.name, state)
        outcome = look(
            ledger,
            source,
            watched,
            now,
            at_given=at_given,
            keep=keep,
            routes=routes,
            slice_limit=slice_limit,
            further=restored,
        )
    except SourceFailed as failure:
        return _failed(ledger, source.name, state, failure, now, timer() - begun, routes if keep else None)
    if keep:
        kept = None if outcome.has_future else signature
        ledger.save_source_state(record_success(state, kept, moment(now), timer() - begun))
    return outcome


def _restored(source: str, state: SourceState) -> tuple[Event, ...]:
    if state.failing_since is None:
        return ()
    facts = {"source": source, "since": state.failing_since.isoformat(), "failures": state.failures}
    return (Event("source-restored", "", "", "", "", None, facts),)


def _failed(
    ledger: Ledger,
    source: str,
    state: SourceState,
    failure: SourceFailed,
    now: int,
    duration: float,
    routes: Sequence[Routing] | None,
) -> Outcome:
    after = record_failure(state, failure.reason, failure.detail, moment(now), duration)
    assert after.failing_since is not None
    events: tuple[Event, ...] = ()
    head = ledger.head()
    if routes is not None:
        if state.failing_since is None:
            facts = {"source": source, "reason": failure.reason, "detail": failure.detail[:500]}
            events = (Event("source-failed", "", "", "", "", None, facts),)
            head = ledger.commit(_entry(ledger, source, now, ledger.newest_look(source)[0], (), (), routes, events))
        ledger.save_source_state(after)
    return Outcome(
        source=source,
        at=moment(now),
        head=head,
        written=bool(events),
        standings=(),
        events=events,
        rejected={},
        failed=(Failure(source, failure.reason, failure.detail, after.failing_since),),
    )


def acknowledge(ledger: Ledger, promise: str, version: str, number: int, who: str, why: str, now: int) -> Head:
    """Record who knows of a breach and why it may stand; it stops the daily reminder and nothing else.

    Raises UsageError when there is no such breach, or without a name and a reason.
    """
    if not who.strip() or not why.strip():
        raise UsageError("an acknowledgement needs a name and a reason: who = ..., why = ...")
    stored = [t for t in ledger.terms(open_only=False) if (t.terms.promise, t.terms.version) == (promise, version)]
    if not stored:
        raise UsageError(f"promise {promise!r} version {version!r}: the ledger knows no such promise")
    cells = ledger.standings(promise=promise, version=version)
    numbers = {standing.breach.number for standing in cells if standing.breach}
    if number not in numbers:
        known = ", ".join(map(str, sorted(numbers))) or "none"
        raise UsageError(f"promise {promise!r} version {version!r}: breach {number} does not stand; standing: {known}")
    source = stored[0].terms.source
    raised = [
        stored_event
        for stored_event in ledger.events(promise=promise, kinds=("breach",), limit=100_000)
        if stored_event.event.version == version and stored_event.event.facts.get("number") == number
    ]
    facts: dict[str, Any] = {"number": number, "who": who.strip()[:200], "note": why.strip()[:2000]}
    if raised:
        facts |= {"look": raised[-1].look, "event": raised[-1].n}
    entry = Entry(
        source=source,
        at=max(now, ledger.newest_at()),
        kind="acknowledge",
        method=METHOD,
        expected=ledger.newest_look(source)[0],
        terms=(),
        events=(Event("acknowledged", promise, version, "", "", None, facts),),
    )
    return ledger.commit(entry)
