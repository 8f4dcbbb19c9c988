"""An outbox and archive in memory, the same in behaviour as the ledger's as far as notices go."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from typing import Any

from watcher.notices.base import Item, Message
from watcher.records import (
    Breach,
    CellCounts,
    Columns,
    Counts,
    Event,
    Head,
    Interval,
    Notice,
    Standing,
    StoredEvent,
    Terms,
)

T0 = datetime(2026, 12, 1, 6, 0, tzinfo=UTC)
LEDGER = "0a1b2c3d"
DIGEST = "ab" * 32


class Clock:
    """A clock that moves when it is told to."""

    def __init__(self, now: datetime = T0) -> None:
        self.now = now

    def __call__(self) -> datetime:
        return self.now

    def forward(self, **span: float) -> None:
        self.now += timedelta(**span)


class Memory:
    """Outbox and Archive. `before_record` stands for whatever may happen between an answer and its record."""

    def __init__(self) -> None:
        self.notices: dict[str, Notice] = {}
        self.events: dict[tuple[int, int], StoredEvent] = {}
        self.withdrawn_keys: set[str] = set()
        self.known_terms: dict[tuple[str, str], Terms] = {}
        self.known_standings: dict[tuple[str, str], list[Standing]] = {}
        self.known_counts: dict[tuple[str, str], list[CellCounts]] = {}
        self.before_record: Any = lambda: None

    ledger_id = LEDGER

    def happen(
        self, event: Event, look: int, n: int, at: datetime, *routes: str, number: int | None = None
    ) -> list[str]:
        """An event of a look, with a notice for each route."""
        self.events[look, n] = StoredEvent(look, n, at, event)
        return [self._add(route, event.kind, event.promise, event.version, look, n, at, number) for route in routes]

    def periodic(self, route: str, kind: str, look: int, at: datetime, promise: str = "", version: str = "") -> str:
        return self._add(route, kind, promise, version, look, None, at, 1 if kind == "reminder" else None)

    def _add(
        self,
        route: str,
        kind: str,
        promise: str,
        version: str,
        look: int,
        n: int | None,
        at: datetime,
        number: int | None,
    ) -> str:
        key = digest(LEDGER, route, str(look), str(n), kind, at.isoformat() if n is None else "")
        self.notices[key] = Notice(key, route, kind, promise, version, look, n, "waiting", 0, at, at, None, number)
        return key

    def waiting(self, route: str) -> Sequence[Notice]:
        return [n for n in self.notices.values() if n.route == route and n.state == "waiting"]

    def ended(self, route: str, mark: str) -> bool:
        mine = [n for n in self.notices.values() if n.route == route and n.state == "dead"]
        return any((n.answer or "").startswith(mark) for n in mine)

    def withdrawn(self, notice: Notice) -> bool:
        return notice.key in self.withdrawn_keys

    def message_id(self, route: str, look: int) -> str:
        return digest(LEDGER, route, str(look))

    def settle(self, notices: Sequence[Notice]) -> None:
        self.before_record()
        self.notices.update({notice.key: notice for notice in notices})

    def send_again(self, key: str) -> None:
        """As `watcher notices` does it: waiting, due at once, the earlier answer kept."""
        self.notices[key] = replace(self.notices[key], state="waiting", tries=0, next_at=self.notices[key].created)

    def head(self) -> Head:
        return Head(max((n.look for n in self.notices.values()), default=0), DIGEST)

    def event(self, look: int, n: int) -> StoredEvent:
        return self.events[look, n]

    def terms(self, promise: str, version: str) -> Terms:
        return self.known_terms.get((promise, version)) or some_terms(promise, version)

    def standings(self, promise: str, version: str) -> Sequence[Standing]:
        return self.known_standings.get((promise, version)) or [some_standing(promise, version)]

    def counts(self, promise: str, version: str) -> Sequence[CellCounts]:
        return self.known_counts.get((promise, version), [])

    def states(self) -> list[str]:
        return [notice.state for notice in self.notices.values()]


def digest(*parts: str) -> str:
    return hashlib.sha256("\x1f".join(parts).encode()).hexdigest()


def some_event(kind: str = "warning", promise: str = "damage-photos", **facts: Any) -> Event:
    return Event(kind, promise, "1", facts.pop("column", ""), facts.pop("value", ""), facts.pop("bucket", None), facts)


def breach_event(promise: str = "damage-photos", column: str = "", value: str = "") -> Event:
    """With the facts that the verdict records."""
    facts = {
        "number": 1,
        "at": "2026-11-30T00:00:00+00:00",
        "since": "2026-11-12T00:00:00+00:00",
        "lower": "0.0312",
        "window_labels": 812,
        "window_errors": "51",
        "window": 10,
    }
    return Event("breach", promise, "1", column, value, 1795910400, facts)


def some_terms(promise: str = "damage-photos", version: str = "1") -> Terms:
    return Terms(
        promise=promise,
        model="",
        version=version,
        source="inspection-desk",
        where=(),
        columns=Columns(time="decided_at", prediction="predicted", label="observed"),
        time_format="rfc3339",
        source_time_zone=None,
        classes=(),
        positive=None,
        measure="error",
        tolerance=0.03,
        risk=0.001,
        released=1793577600,  # 2026-11-02T00:00:00Z
        service_life=52 * 604800,
        bucket=86400,
        time_zone="UTC",
        label_lag=864000,
        count="sealed",
        slices=(),
        weight_levels=(),
        n_max=None,
        cluster_span=None,
        labelling_probabilities=(),
        label_noise=None,
        window_at_least=None,
        support_at_least=604800,
        warn_every=1095 * 86400,
    )


def some_standing(promise: str = "damage-photos", version: str = "1", column: str = "", value: str = "") -> Standing:
    return Standing(
        promise=promise,
        version=version,
        column=column,
        value=value,
        state="breached",
        flags=("warning",),
        tolerance=0.03,
        risk=0.001,
        part=1.0,
        terms="cd" * 32,
        predictions=9000,
        labels=2000,
        errors=70.0,
        provisional_labels=100,
        provisional_errors=4.0,
        provisional_predictions=700,
        late_labels=0,
        estimate=0.035,
        life=Interval(0.021, 0.052),
        recent=None,
        support=None,
        total=7.5,
        threshold=6.907755,
        breach=Breach(1, T0, T0, T0 - timedelta(days=18), 0.0312),
        to_decide=None,
        newest_label=T0,
        counted_until=T0,
    )


def some_counts(bucket: int, column: str = "", value: str = "", **counts: int) -> CellCounts:
    return CellCounts(column, value, bucket, "", Counts(**counts))


def some_message(message_id: str = "", **changes: Any) -> Message:
    item = Item(
        "k1", "breach", "damage-photos", "1", "depot", "Birch", T0, "It broke.", "Now so.", "Look.", "", {"number": 1}
    )
    message = Message(
        id=message_id or digest("m"),
        route="desk",
        type="watcher.notices",
        source=f"urn:watcher:{LEDGER}",
        subject="damage-photos/1",
        title="damage-photos: breach [look 7]",
        time=T0,
        look=7,
        head=Head(7, DIGEST),
        items=(item,),
    )
    return replace(message, **changes)
