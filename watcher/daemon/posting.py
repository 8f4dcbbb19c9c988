"""Notices as the daemon sends them: their own job, from the ledger, never from inside a look."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, Final
from urllib.parse import quote

import structlog

from watcher.assembly import units
from watcher.daemon.hooks import Hooks
from watcher.daemon.parts import Parts
from watcher.errors import WatcherError
from watcher.ledger.keys import message_key, period_key
from watcher.ledger.store import Ledger
from watcher.notices.base import Attachment, Message, RouteSpec
from watcher.notices.booked import Booked
from watcher.notices.due import Due, OpenBreach, due_now, notice_of
from watcher.notices.message import Writer
from watcher.notices.outbox import send_due
from watcher.records import Head, Notice, Standing
from watcher.text import safe


class Poster:
    """Sends what waits in the outbox and adds what falls due by the calendar."""

    def __init__(self, hooks: Hooks, log: Any, stopping: Callable[[], bool], address: Callable[[], str]) -> None:
        self._hooks = hooks
        self._log = log
        self._stopping = stopping
        self._address = address
        self._added: set[tuple[str, str]] = set()
        """(route, key) of what this process has added by the calendar."""
        self._unanswered: tuple[Head, list[OpenBreach]] | None = None
        """The breaches that nobody has acknowledged, as of a head of the chain: reading all standings has its price."""

    def send(self, ledger: Ledger, parts: Parts, route: RouteSpec) -> None:
        """One pass over what waits for a route; never raises."""
        structlog.contextvars.clear_contextvars()
        names = units(parts.settings)
        booked = Booked(ledger, message_key)
        write = Writer(
            booked,
            _link(parts, self._address()),
            lambda promise, version: names.get((promise, version), "sample"),
            lambda notice: _report(ledger, notice),
        )

        def pointed(to: RouteSpec, message_id: str, notices: Sequence[Notice]) -> Message:
            message = write(to, message_id, notices)
            self._hooks.at_point("before-send")
            return message

        try:
            done = send_due(
                _Pointed(booked, self._hooks.at_point),
                (route,),
                parts.senders,
                pointed,
                clock=self._hooks.clock,
                may_send=lambda: self._may_send(ledger),
            )
        except WatcherError as error:
            self._log.warning("notices wait", route=route.name, detail=str(error))
        except Exception:  # noqa: BLE001 - logged with its trace; the daemon must outlive it
            self._log.exception("sending failed unexpectedly; the notices wait", route=route.name)
        else:
            for tried in done.attempts:
                self._log.info(
                    "message tried",
                    route=tried.route,
                    message=tried.message,
                    notices=len(tried.keys),
                    look=tried.look,
                    outcome=tried.outcome,
                    answer=safe(tried.answer, 200),
                )

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
        structlog.contextvars.clear_contextvars()
        now = self._hooks.clock()
        try:
            head = ledger.head()
            structlog.contextvars.bind_contextvars(look=head.look, head=head.digest)
            if self._unanswered is None or self._unanswered[0] != head:
                self._unanswered = (head, _unacknowledged(ledger))
            due = due_now(parts.routes, self._unanswered[1], (), now)
            keyed = [notice_of(each, _key(ledger, each), head.look, now) for each in due]
            fresh = [notice for notice in keyed if (notice.route, notice.key) not in self._added]
            if fresh:
                ledger.add_notices(fresh)
                self._added.update((notice.route, notice.key) for notice in fresh)
        except WatcherError as error:
            self._log.warning("heartbeats and reminders could not be added", detail=str(error))
        except Exception:  # noqa: BLE001 - logged with its trace; the daemon must outlive it
            self._log.exception("heartbeats and reminders failed unexpectedly")


def _key(ledger: Ledger, due: Due) -> str:
    return period_key(ledger.id, due.route, due.kind, due.subject, due.period_start)


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


def _link(parts: Parts, address: str) -> Callable[[str, str], str]:
    base = (parts.settings.web.public_url or address).rstrip("/")

    def link(promise: str, version: str) -> str:
        if not promise:
            return f"{base}/"
        return f"{base}/promises/{quote(promise, safe='')}/{quote(version, safe='')}"

    return link


MEDIA: Final = {".html": "text/html", ".csv": "text/csv"}
"""What a mail carries of a report: the page and its figures."""


def _report(ledger: Ledger, notice: Notice) -> tuple[Attachment, ...]:
    """The newest report that was archived by the time of the notice."""
    listed = [stored for stored in ledger.reports.listed() if stored.created <= notice.created]
    if not listed:
        return ()
    newest = (listed[0].week, listed[0].revision)
    found = []
    for stored in listed:
        media = MEDIA.get(stored.name[stored.name.rfind(".") :])
        if media is not None and (stored.week, stored.revision) == newest:
            content = ledger.reports.content(stored.week, stored.revision, stored.name)
            found.append(Attachment(stored.name, media, (content or b"").decode("utf-8")))
    return tuple(found)
