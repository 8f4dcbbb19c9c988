"""The canonical integer form of a standing: what a verdict row holds."""

from __future__ import annotations

import math
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Any

from watcher.ledger import canon
from watcher.records import Breach, Cell, Interval, Recent, Standing, Support, Terms, ToDecide


def standing_body(standing: Standing) -> dict[str, Any]:
    """A standing without floats and without what its term and cell say already.

    Rates are integers in 1e-9: lower limits rounded down, upper limits and the threshold up, estimates to the nearest; the
    total is in micro-nats, down. Raises ValueError for a NaN.
    """
    body: dict[str, Any] = {
        "state": standing.state,
        "flags": list(standing.flags),
        "predictions": standing.predictions,
        "labels": standing.labels,
        "errors": canon.amount(standing.errors),
        "provisional": [
            standing.provisional_predictions,
            standing.provisional_labels,
            canon.amount(standing.provisional_errors),
        ],
        "late": standing.late_labels,
        "estimate": None if standing.estimate is None else canon.nearest(standing.estimate),
        "life": _interval(standing.life),
        "total": None if standing.total == -math.inf else canon.down(standing.total, canon.MICRO),
        "threshold": canon.up(standing.threshold),
        "newest": _epoch(standing.newest_label),
        "until": _epoch(standing.counted_until),
    }
    if standing.recent is not None:
        r = standing.recent
        body["recent"] = [_epoch(r.since), r.labels, canon.amount(r.errors), canon.down(r.lower), canon.up(r.upper)]
    if standing.support is not None:
        s = standing.support
        body["support"] = [_epoch(s.since), _epoch(s.until), canon.up(s.upper)]
    if standing.breach is not None:
        b = standing.breach
        body["breach"] = [b.number, _epoch(b.at), _epoch(b.noticed), _epoch(b.since), canon.down(b.lower)]
    if standing.to_decide is not None:
        body["decide"] = [standing.to_decide.median, standing.to_decide.p90]
    if standing.diagnostics:
        body["diagnostics"] = canon.plain(standing.diagnostics)
    return body


def standing_from(body: Mapping[str, Any], *, terms: Terms, digest: str, cell: Cell) -> Standing:
    """The inverse of `standing_body`: floats within 1e-9 on the safe side.

    `breach.lower` is never below the tolerance: a breach stands exactly when it is at or above it (method.md section 2).
    """
    predictions, labels, errors = body["provisional"]
    lower, upper = body["life"]
    return Standing(
        promise=terms.promise,
        version=terms.version,
        column=cell.column,
        value=cell.value,
        state=body["state"],
        flags=tuple(body["flags"]),
        tolerance=terms.tolerance,
        risk=terms.risk,
        part=float(cell.part),
        terms=digest,
        predictions=body["predictions"],
        labels=body["labels"],
        errors=canon.amount_from(body["errors"]),
        provisional_labels=labels,
        provisional_errors=canon.amount_from(errors),
        provisional_predictions=predictions,
        late_labels=body["late"],
        estimate=None if body["estimate"] is None else body["estimate"] / canon.NANO,
        life=Interval(lower / canon.NANO, upper / canon.NANO),
        recent=_recent(body.get("recent")),
        support=_support(body.get("support")),
        total=-math.inf if body["total"] is None else body["total"] / canon.MICRO,
        threshold=body["threshold"] / canon.NANO,
        breach=_breach(body.get("breach"), terms.tolerance),
        to_decide=ToDecide(*body["decide"]) if "decide" in body else None,
        newest_label=_moment(body["newest"]),
        counted_until=_moment(body["until"]),
        diagnostics=canon.unplain(body.get("diagnostics", {})),
    )


def instant(epoch: int) -> datetime:
    """Epoch seconds as an aware datetime."""
    return datetime.fromtimestamp(epoch, UTC)


def _epoch(moment: datetime | None) -> int | None:
    return None if moment is None else math.floor(moment.timestamp())


def _moment(epoch: int | None) -> datetime | None:
    return None if epoch is None else instant(epoch)


def _interval(interval: Interval) -> list[int]:
    return [canon.down(interval.lower), canon.up(interval.upper)]


def _recent(found: list[Any] | None) -> Recent | None:
    if found is None:
        return None
    since, labels, errors, lower, upper = found
    return Recent(instant(since), labels, canon.amount_from(errors), lower / canon.NANO, upper / canon.NANO)


def _support(found: list[int] | None) -> Support | None:
    if found is None:
        return None
    since, until, upper = found
    return Support(instant(since), instant(until), upper / canon.NANO)


def _breach(found: list[int] | None, tolerance: float) -> Breach | None:
    if found is None:
        return None
    number, at, noticed, since, lower = found
    return Breach(number, instant(at), instant(noticed), instant(since), max(tolerance, lower / canon.NANO))
