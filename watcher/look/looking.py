"""One look, and the attempt that outlives its source."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime

from watcher.errors import SourceFailed
from watcher.ledger.store import Ledger
from watcher.look.entry import Routing, make_entry
from watcher.look.judged import judge_term
from watcher.look.promises import Known, Watched, question, recognise
from watcher.look.refusals import ClockWentBack, refuse_strangers, refuse_weak_evidence
from watcher.records import (
    Event,
    Failure,
    Head,
    SourceState,
    Standing,
    Terms,
)
from watcher.sources.base import Source
from watcher.verdict import moment


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
            refuse_strangers(source, asked, tally)
        results.append(judge_term(ledger, source, each, asked, tally, now))
    changed = bool(further) or any(result.changed for result in results)
    entry = make_entry(ledger, source.name, now, expected, known, results, routes, further)
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


def _remarks(known: Sequence[Known], at_given: bool) -> Iterable[str]:
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
            head = ledger.commit(make_entry(ledger, source, now, ledger.newest_look(source)[0], (), (), routes, events))
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
