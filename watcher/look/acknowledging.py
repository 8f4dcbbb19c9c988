"""Somebody knows of a breach: recorded beside the looks, changing no state."""

from __future__ import annotations

from typing import Any

from watcher.bounds import METHOD
from watcher.errors import UsageError
from watcher.ledger.store import Ledger
from watcher.records import (
    Entry,
    Event,
    Head,
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
