"""History through the very same look, in a ledger in memory: when what would have been said.

Nothing is recorded, nothing is sent. What is learnt here is how the rule behaves on such data, no evidence: history that
was used to choose tolerance, dates or slices cannot testify for them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime

from watcher.errors import UsageError
from watcher.ledger.store import Ledger
from watcher.look import Outcome, Watched, look
from watcher.records import Event, Standing, Terms
from watcher.report.snapshot import DayStanding
from watcher.sources.base import Source
from watcher.verdict import moment

LONGEST = 100_000
"""Looks of one rehearsal; more than that is a slip of the pen."""


@dataclass(frozen=True, slots=True)
class Pulled:
    """A source with the promises that rest on it."""

    source: Source
    watched: tuple[Watched, ...]
    slice_limit: int = 200


@dataclass(frozen=True, slots=True)
class Said:
    """What a look would have said, and when."""

    at: datetime
    event: Event
    terms: Terms | None


@dataclass(frozen=True, slots=True)
class Rehearsal:
    """What came of it."""

    since: datetime
    until: datetime
    """Times of the first and the last look."""
    looks: int
    said: tuple[Said, ...]
    """In order."""
    standings: tuple[Standing, ...]
    """After the last look."""
    terms: Mapping[tuple[str, str], Terms]
    histories: Mapping[tuple[str, str], tuple[DayStanding, ...]]
    """Of each promise version as a whole, the last standing of each day, the oldest first."""
    rejected: Mapping[str, Mapping[str, Mapping[str, int]]]
    """source -> promise -> reason -> rows that the last look could not use."""
    remarks: tuple[str, ...]


def moments(since: int, until: int, step: int) -> Sequence[int]:
    """Times of the looks, epoch seconds: every `step` (seconds, > 0) after `since`, and `until` itself.

    Raises UsageError when none fits or more than `LONGEST` do.
    """
    if step <= 0 or until <= since:
        raise UsageError(f"since = {moment(since).isoformat()} must lie before until = {moment(until).isoformat()}")
    if (until - since) // step > LONGEST:
        raise UsageError(f"step = {step} s gives more than {LONGEST:,} looks; take a longer one")
    found = list(range(since + step, until + 1, step))
    return found if found and found[-1] == until else [*found, until]


def rehearse(pulled: Sequence[Pulled], times: Sequence[int], tick: Callable[[], None] = lambda: None) -> Rehearsal:
    """Look at every source at every one of `times` (epoch seconds, ascending, at least one), in a ledger of its own.

    `tick` is called after each time. Raises what a look raises: a source that fails ends the rehearsal, for it would fail
    in the same way at every other time.
    """
    said: list[Said] = []
    remarks: dict[str, None] = {}
    last: list[Outcome] = []
    with Ledger.memory(new_id="rehearsal") as ledger:
        for now in times:
            last = [_look(ledger, each, now) for each in pulled]
            for outcome in last:
                said += [
                    Said(outcome.at, event, outcome.terms.get((event.promise, event.version)))
                    for event in outcome.events
                ]
                remarks |= dict.fromkeys(outcome.remarks)
            tick()
        terms = {name: each for outcome in last for name, each in outcome.terms.items()}
        return Rehearsal(
            since=moment(times[0]),
            until=moment(times[-1]),
            looks=len(times),
            said=tuple(said),
            standings=tuple(standing for outcome in last for standing in outcome.standings),
            terms=terms,
            histories={name: _history(ledger, name) for name in terms},
            rejected={outcome.source: outcome.rejected for outcome in last if outcome.rejected},
            remarks=tuple(remarks),
        )


def _look(ledger: Ledger, each: Pulled, now: int) -> Outcome:
    return look(ledger, each.source, each.watched, now, at_given=True, slice_limit=each.slice_limit)


def _history(ledger: Ledger, name: tuple[str, str]) -> tuple[DayStanding, ...]:
    rows = ledger.history(*name, limit=LONGEST)
    return tuple(DayStanding(*row) for row in reversed(rows))
