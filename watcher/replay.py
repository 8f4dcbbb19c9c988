"""Recorded looks repeated from their sheets, through the very same book and verdict as the live look."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Final, Self

from watcher.book import Table, build
from watcher.bounds import METHOD
from watcher.diagnosis import diagnose
from watcher.errors import UsageError
from watcher.judging import Book, Key
from watcher.ledger.audit import Replayed, audit
from watcher.ledger.store import Ledger
from watcher.ledger.terms import terms_digest
from watcher.records import Cell, Entry, Event, Standing, TermDraft, Terms
from watcher.verdict import advance

DERIVED: Final = frozenset(
    {
        "breach",
        "breach-withdrawn",
        "warning",
        "warning-over",
        "supported",
        "support-lost",
        "stale",
        "labels-resumed",
    }
)
"""Events that follow from counts, terms and time; the others are recorded facts about rows, sources and versions."""


@dataclass(slots=True)
class _State:
    """One promise version as the sheets up to now have built it."""

    terms: Terms
    digest: str
    sealed_until: int
    cells: list[Cell] = field(default_factory=list)
    counts: Table = field(default_factory=dict)
    memories: Mapping[Key, Mapping[str, Any]] = field(default_factory=dict)

    def apply(self, draft: TermDraft) -> int:
        """Take the counts of a draft in; return where the sealed buckets ended before."""
        before, self.sealed_until = self.sealed_until, draft.sealed_until
        self.cells += draft.new_cells
        for column, value, start, level in draft.gone:
            levels = self.counts.get((column, value), {}).get(start, {})
            levels.pop(level, None)
            if not levels:
                self.counts.get((column, value), {}).pop(start, None)
        for row in draft.counts:
            self.counts.setdefault((row.column, row.value), {}).setdefault(row.bucket, {})[row.level] = row.counts
        return before

    def pairs(self) -> Table | None:
        """The counts as they are now, kept apart from what a draft changes; None where nobody needs them."""
        if self.terms.count != "arriving":
            return None
        return {key: {start: dict(levels) for start, levels in b.items()} for key, b in self.counts.items()}

    def book(self, before: int, previous: Table | None = None) -> Book:
        """The book after the newest draft."""
        return build(
            self.terms, self.digest, self.cells, self.counts, before, self.sealed_until, self.memories, previous
        )


class Replay:
    """Repeats looks one after the other, in the order of the chain; the protocol of `watcher.ledger.findings.Replay`.

    `step` is told after each look; after `limit` looks the state stays as it is.
    """

    method: int = METHOD
    derives: frozenset[str] = DERIVED

    def __init__(self, step: Callable[[], None] | None = None, *, limit: int | None = None) -> None:
        self._states: dict[tuple[str, str], _State] = {}
        self._step = step
        self._left = limit

    @classmethod
    def until(cls, ledger: Ledger, number: int) -> Self:
        """The state after the look of that number. Raises UsageError for a number that the ledger does not have."""
        newest = ledger.head().look
        if number > newest:
            raise UsageError(f"look {number}: the ledger has looks up to {newest}")
        replay = cls(limit=number)
        audit(ledger, replay=replay)
        return replay

    def book(self, promise: str, version: str) -> Book:
        """The book of a promise version as of the newest repeated look. Raises UsageError when it was not known then."""
        state = self._states.get((promise, version))
        if state is None:
            raise UsageError(f"promise {promise!r} version {version!r} was not watched yet at that look")
        return state.book(state.sealed_until)

    def look(self, entry: Entry) -> Replayed:
        """What the look must have found, given its sheet; only events of the kinds in `derives`."""
        standings: list[Standing] = []
        memories: list[Mapping[str, Any]] = []
        events: list[Event] = []
        for draft in self._open(entry):
            state = self._state(draft)
            previous = state.pairs()
            before = state.apply(draft)
            verdict = advance(state.book(before, previous), entry.at, draft.remarks)
            judged = diagnose(
                state.terms, state.counts, state.sealed_until, entry.at, verdict.standings, verdict.memories
            )
            state.memories = {(s.column, s.value): m for s, m in zip(judged, verdict.memories, strict=True)}
            standings += judged
            memories += verdict.memories
            events += verdict.events
        if self._step is not None:
            self._step()
        return Replayed(tuple(standings), tuple(memories), tuple(events))

    def adopt(self, entry: Entry, standings: tuple[Standing, ...], memories: tuple[Mapping[str, Any], ...]) -> None:
        """Take over an entry that another method judged: its counts, and what was recorded of it."""
        recorded = {(s.promise, s.version, s.column, s.value): m for s, m in zip(standings, memories, strict=True)}
        for draft in self._open(entry):
            state = self._state(draft)
            state.apply(draft)
            kept = {key[2:]: m for key, m in recorded.items() if key[:2] == (draft.promise, draft.version)}
            state.memories = kept or state.memories

    def _open(self, entry: Entry) -> list[TermDraft]:
        """The drafts to be taken in: none beyond the limit."""
        if self._left is not None:
            if self._left == 0:
                return []
            self._left -= 1
        return list(entry.terms)

    def _state(self, draft: TermDraft) -> _State:
        name = (draft.promise, draft.version)
        if draft.new_terms is not None:
            terms = draft.new_terms
            self._states[name] = _State(terms, terms_digest(terms), terms.released)
        return self._states[name]
