"""What a look adds to the ledger, and which of its events leave over which routes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from watcher.bounds import METHOD
from watcher.ledger.store import Ledger
from watcher.look.judged import Result, close_term
from watcher.look.promises import Known
from watcher.records import (
    Entry,
    Event,
    NoticeDraft,
    TermDraft,
)

GAP: Final = 7
"""A look that seals more buckets than this at once makes up for a gap: it sends one notice a promise and route."""
GRAVEST: Final = ("breach", "support-lost", "warning", "supported", "warning-over")


@dataclass(frozen=True, slots=True)
class Routing:
    """What a look must know of a route: which events it carries."""

    name: str
    events: frozenset[str]
    retrain: bool = False
    promises: frozenset[str] = frozenset()
    """Empty: all."""


def make_entry(
    ledger: Ledger,
    source: str,
    now: int,
    expected: int,
    known: Sequence[Known],
    results: Sequence[Result],
    routes: Sequence[Routing],
    further: Sequence[Event] = (),
) -> Entry:
    """Everything that the look found as one entry; superseded versions are closed in it."""
    drafts: list[TermDraft] = []
    events: list[Event] = list(further)
    for each, result in zip(known, results, strict=True):
        if each.supersedes is not None:
            closing, ended = close_term(ledger, each.supersedes, each.watched.terms, now)
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
