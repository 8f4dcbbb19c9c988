"""Keys of notices: derived from what they are about, never drawn, so that a repetition has the same key."""

from __future__ import annotations

from watcher.ledger import canon


def event_key(ledger_id: str, route: str, look: int, event: int) -> str:
    """The key of one event on one route."""
    return _key("event", ledger_id, route, look, event)


def retraining_key(ledger_id: str, route: str, promise: str, version: str, breach_number: int) -> str:
    """The key of the one notice that starts retraining for a breach number."""
    return _key("retrain", ledger_id, route, promise, version, breach_number)


def period_key(ledger_id: str, route: str, kind: str, subject: str, start: int) -> str:
    """The key of a heartbeat, reminder or report of the period that begins at `start` (epoch seconds)."""
    return _key("period", ledger_id, route, kind, subject, start)


def message_key(ledger_id: str, route: str, look: int) -> str:
    """The id of the message that carries the waiting notices of one look over one route."""
    return _key("message", ledger_id, route, look)


def _key(*parts: str | int) -> str:
    return canon.sha(canon.text(list(parts)))
