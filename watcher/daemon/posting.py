"""Notices as the daemon sends them: their own job, from the ledger, never from inside a look."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, Any
from urllib.parse import quote

import structlog

from watcher.assembly import units
from watcher.daemon.parts import Parts
from watcher.errors import WatcherError
from watcher.ledger.keys import message_key, period_key
from watcher.ledger.store import Ledger
from watcher.notices.base import Message, RouteSpec
from watcher.notices.booked import Booked
from watcher.notices.due import OpenBreach, due_now, notice_of
from watcher.notices.message import Writer
from watcher.notices.outbox import send_due
from watcher.records import Notice, Standing

if TYPE_CHECKING:
    from watcher.daemon.service import Hooks


class Poster:
    """Sends what waits in the outbox and adds what falls due by the calendar."""

    def __init__(self, hooks: Hooks, log: Any, stopping: Callable[[], bool]) -> None:
        self._hooks = hooks
        self._log = log
        self._stopping = stopping

    def send(self, ledger: Ledger, parts: Parts) -> None:
        """One pass over the routes; never raises."""
        structlog.contextvars.clear_contextvars()
        names = units(parts.settings)
        booked = Booked(ledger, message_key)
        write = Writer(booked, _link(parts), lambda promise, version: names.get((promise, version), "sample"))

        def pointed(route: RouteSpec, message_id: str, notices: Sequence[Notice]) -> Message:
            message = write(route, message_id, notices)
            self._hooks.at_point("before-send")
            return message

        try:
            done = send_due(
                _Pointed(booked, self._hooks.at_point),
                parts.routes,
                parts.senders,
                pointed,
                clock=self._hooks.clock,
                may_send=lambda: self._may_send(ledger),
            )
        except WatcherError as error:
            self._log.warning("notices wait", detail=str(error))
        except Exception:  # noqa: BLE001 - logged with its trace; the daemon must outlive it
            self._log.exception("sending failed unexpectedly; the notices wait")
        else:
            for tried in done.attempts:
                self._log.info("notice tried", **{name: getattr(tried, name) for name in tried.__dataclass_fields__})

    def _may_send(self, ledger: Ledger) -> bool:
        if self._stopping():
            return False
        try:
            ledger.renew()
        except WatcherError:
            return False
        return True

    def periodic(self, ledger: Ledger, parts: Parts) -> None:
        """Add the heartbeats and reminders whose period has begun; the outbox keeps each once."""
        now = self._hooks.clock()
        try:
            head = ledger.head()
            due = due_now(parts.routes, _unacknowledged(ledger), (), now)
            keyed = [
                notice_of(
                    each, period_key(ledger.id, each.route, each.kind, each.subject, each.period_start), head.look, now
                )
                for each in due
            ]
            ledger.add_notices(keyed)
        except WatcherError as error:
            self._log.warning("heartbeats and reminders could not be added", detail=str(error))


class _Pointed:
    """The outbox with the named points around its record; everything else is the ledger's."""

    def __init__(self, inner: Booked, at_point: Callable[[str], None]) -> None:
        self._inner = inner
        self._at_point = at_point

    def settle(self, notices: Sequence[Notice]) -> None:
        """Record what became of these notices."""
        self._at_point("after-send")
        self._inner.settle(notices)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._inner, name)


def _unacknowledged(ledger: Ledger) -> list[OpenBreach]:
    breached: dict[tuple[str, str, int], Standing] = {}
    for standing in ledger.standings(open_only=True):
        if standing.breach is not None:
            breached.setdefault((standing.promise, standing.version, standing.breach.number), standing)
    if not breached:
        return []
    known = {
        (e.event.promise, e.event.version, int(e.event.facts.get("number", 0)))
        for e in ledger.events(kinds=("acknowledged",), limit=100_000)
    }
    return [
        OpenBreach(*key, standing.breach.noticed)
        for key, standing in breached.items()
        if key not in known and standing.breach is not None
    ]


def _link(parts: Parts) -> Callable[[str, str], str]:
    web = parts.settings.web
    base = web.public_url or f"http://{web.listen}"

    def link(promise: str, version: str) -> str:
        if not promise:
            return f"{base}/"
        return f"{base}/promises/{quote(promise, safe='')}/{quote(version, safe='')}"

    return link
