"""The JSON of a look, as contracts promise it: rates are fractions, evidence in nats, times RFC 3339 UTC."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from datetime import UTC, datetime
from typing import Any

from watcher.records import Breach, Event, Failure, Head, Notice, Recent, Standing, StoredEvent, Support


def rfc3339(moment: datetime | None) -> str | None:
    """An aware datetime as RFC 3339 in UTC, whole seconds."""
    return None if moment is None else moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def look_json(
    at: datetime,
    head: Head,
    standings: Iterable[Standing],
    rejected: Mapping[str, Mapping[str, Mapping[str, int]]],
    failed: Sequence[Failure],
) -> dict[str, Any]:
    """The answer of one look, or of `status`."""
    return {
        "at": rfc3339(at),
        "look": head.look,
        "head": head.digest,
        "promises": [standing_json(standing) for standing in standings],
        "rejected": {source: {name: dict(n) for name, n in each.items()} for source, each in rejected.items()},
        "failed": [
            {"source": f.source, "reason": f.reason, "detail": f.detail, "since": rfc3339(f.since)} for f in failed
        ],
    }


def standing_json(standing: Standing) -> dict[str, Any]:
    """Where a promise or slice stands."""
    whole = standing.column == ""
    return {
        "promise": standing.promise,
        "version": standing.version,
        "slice": None if whole else {"column": standing.column, "value": standing.value},
        "state": standing.state,
        "flags": list(standing.flags),
        "tolerance": standing.tolerance,
        "risk": standing.risk,
        "part": standing.part,
        "terms": standing.terms,
        "predictions": standing.predictions,
        "labels": standing.labels,
        "errors": _number(standing.errors),
        "provisional": {
            "predictions": standing.provisional_predictions,
            "labels": standing.provisional_labels,
            "errors": _number(standing.provisional_errors),
        },
        "late_labels": standing.late_labels,
        "estimate": standing.estimate,
        "life": {"lower": standing.life.lower, "upper": standing.life.upper},
        "recent": _recent(standing.recent),
        "support": _support(standing.support),
        "total": standing.total,
        "threshold": standing.threshold,
        "breach": _breach(standing.breach),
        "labels_to_decide": None
        if standing.to_decide is None
        else {"median": standing.to_decide.median, "p90": standing.to_decide.p90},
        "newest_label": rfc3339(standing.newest_label),
        "counted_until": rfc3339(standing.counted_until),
        "diagnostics": dict(standing.diagnostics),
    }


def event_json(stored: StoredEvent) -> dict[str, Any]:
    """One event with its place in the ledger."""
    event: Event = stored.event
    return {
        "look": stored.look,
        "n": stored.n,
        "at": rfc3339(stored.at),
        "kind": event.kind,
        "promise": event.promise,
        "version": event.version,
        "slice": {"column": event.column, "value": event.value} if event.column else None,
        "bucket": None if event.bucket is None else rfc3339(datetime.fromtimestamp(event.bucket, UTC)),
        "facts": dict(event.facts),
        "acknowledged_by": stored.acknowledged_by,
    }


def notice_json(notice: Notice) -> dict[str, Any]:
    """One row of the outbox."""
    return {
        "key": notice.key,
        "route": notice.route,
        "kind": notice.kind,
        "promise": notice.promise,
        "version": notice.version,
        "breach": notice.breach_number,
        "look": notice.look,
        "event": notice.event,
        "state": notice.state,
        "tries": notice.tries,
        "next": rfc3339(notice.next_at) if notice.state == "waiting" else None,
        "created": rfc3339(notice.created),
        "answer": notice.answer,
    }


def _number(value: float) -> int | float:
    return int(value) if float(value).is_integer() else value


def _recent(recent: Recent | None) -> dict[str, Any] | None:
    if recent is None:
        return None
    return {
        "since": rfc3339(recent.since),
        "labels": recent.labels,
        "errors": _number(recent.errors),
        "lower": recent.lower,
        "upper": recent.upper,
    }


def _support(support: Support | None) -> dict[str, Any] | None:
    if support is None:
        return None
    return {"since": rfc3339(support.since), "until": rfc3339(support.until), "upper": support.upper}


def _breach(breach: Breach | None) -> dict[str, Any] | None:
    if breach is None:
        return None
    return {
        "number": breach.number,
        "at": rfc3339(breach.at),
        "noticed": rfc3339(breach.noticed),
        "since": rfc3339(breach.since),
        "lower": breach.lower,
    }
