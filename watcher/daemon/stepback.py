"""A clock that was set back: no look is made, and that is recorded and told, once for each time it happens."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

from watcher.bounds import METHOD
from watcher.errors import WatcherError
from watcher.ledger.store import Ledger
from watcher.look import ClockWentBack, Routing, draft_notices
from watcher.records import Entry, Event
from watcher.verdict import moment

KIND = "clock-went-back"


def record_step_back(ledger: Ledger, source: str, error: ClockWentBack, routings: Sequence[Routing], log: Any) -> bool:
    """Write the event behind the newest look and return True, unless it stands there already; an error is logged."""
    try:
        told = ledger.events(kinds=(KIND,), limit=1)
        if told and told[0].at == moment(error.newest):
            return False
        expected, _ = ledger.newest_look(source)
        facts = {"clock": moment(error.now).isoformat(), "newest": moment(error.newest).isoformat()}
        events = (Event(KIND, "", "", "", "", None, facts),)
        entry = Entry(
            source=source,
            # Times in the chain never fall: the event stands at the newest look, the clock's own time among its facts.
            at=error.newest,
            kind="pull",
            method=METHOD,
            expected=expected,
            terms=(),
            events=events,
            notices=tuple(draft_notices(events, (), routings)),
        )
        head = ledger.commit(entry)
        # By this clock the notices would be due in the future only.
        for routing in routings:
            waiting = [notice for notice in ledger.undelivered(routing.name) if notice.look == head.look]
            ledger.record_answers(replace(notice, next_at=moment(error.now)) for notice in waiting)
    except WatcherError as failure:
        log.warning("the step back of the clock could not be recorded", detail=str(failure))
        return False
    return True
