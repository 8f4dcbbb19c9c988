"""Ledgers for the web's tests: real looks over counted days, and a site around a ledger."""

from __future__ import annotations

import asyncio
import itertools
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import httpx
import uvicorn
from demo.counting import count

from watcher import settings
from watcher.assembly import watched
from watcher.demo.scenario import DAY, DAYS, RELEASED, generate
from watcher.demo.writing import configuration
from watcher.errors import UsageError
from watcher.ledger.store import Ledger
from watcher.look import Watched, attempt
from watcher.records import CellCounts, Counts, Entry, Event, Head, Question, RejectedRow, Slice, Tally
from watcher.sources.base import Survey
from watcher.web.app import Site, create_app

HOSTILE = (
    "</script><img src=x onerror=alert(1)>\x1b[31m\u202e\x00=cmd|'/C calc'!A0 \"><svg/onload=alert(2)>" + "A" * 300
)
"""A depot name that breaks out of HTML, scripts, terminals, spreadsheets and lines, if anything lets it."""
HOSTILE_PROMISE = "../<b>\"'&?#%41\\x/y"
FOREIGN = "http://evil.example"


class Days:
    """A source that knows the counts of every day of every cell; reading it costs nothing."""

    def __init__(self, name: str, cells: Mapping[tuple[str, str], Any], rejects: Sequence[RejectedRow] = ()) -> None:
        self._name, self._cells, self._rejects = name, cells, list(rejects)

    @property
    def name(self) -> str:
        return self._name

    def signature(self) -> None:
        return None

    def columns(self) -> list[str]:
        return ["decided_at", "depot", "carrier", "predicted", "observed"]

    def survey(self, question: Question | None = None) -> Survey:
        raise AssertionError("a look does not ask for a survey of counted days")

    def tally(self, questions: Sequence[Question]) -> list[Tally]:
        return [self._tally(question) for question in questions]

    def _tally(self, question: Question) -> Tally:
        found = []
        for (column, value), days in sorted(self._cells.items()):
            for day in range(len(days.labels)):
                start = question.released + day * DAY
                if not question.open_from <= start < question.now:
                    continue
                # Labels come in evenly over the lag: the newest days have few of theirs yet.
                share = min(1.0, (question.now - start) / (question.label_lag + DAY))
                labels = int(days.labels[day] * share)
                counts = Counts(
                    predictions=int(days.predictions[day]),
                    labels=labels,
                    errors=min(labels, int(days.errors[day] * share)),
                    newest=start + DAY - 1 if labels else None,
                )
                found.append(CellCounts(column, value, start, "", counts))
        rejected = {"unknown-label": len(self._rejects)} if self._rejects else {}
        return Tally(question.promise, question.version, tuple(found), rejected, 0, 0, 0)

    def rejected(self, question: Question, reason: str, limit: int = 20) -> list[RejectedRow]:
        return self._rejects[:limit]


def demo_promise() -> Watched:
    """The promise of the demo."""
    config = settings.parse(configuration(), Path(), {})
    return watched(config, config.source[0].name)[0]


def replay(
    ledger: Ledger, source: Days, promises: Sequence[Watched], *, every: int = 14, until: int = DAYS + 12
) -> None:
    """Look every so many days."""
    with ledger.writer():
        for day in range(every, until + 1, every):
            outcome = attempt(ledger, source, promises, RELEASED + day * DAY, time.monotonic, at_given=True)
            assert not outcome.failed, outcome.failed


def demo_ledger(path: Path) -> None:
    """The demo's rows, counted by day, looked at every two weeks."""
    with Ledger.open(f"sqlite:///{path}", new_id="0" * 32) as ledger:
        replay(ledger, Days("inspection-desk", count(generate(7))), [demo_promise()])


def hostile_ledger(path: Path) -> None:
    """The same rows under names that attack: promise, version, source, slice column and value, reject rows."""
    cells = dict(count(generate(7)))
    named = {key: days for key, days in cells.items() if key[0] != "carrier" and key != ("depot", "Cedar")}
    named["depot", HOSTILE] = cells["depot", "Cedar"]
    base = demo_promise()
    terms = replace(
        base.terms,
        promise=HOSTILE_PROMISE,
        version="..",
        source=HOSTILE[:60],
        classes=("damaged", HOSTILE),
        where=(("depot", HOSTILE),),
        slices=(Slice("depot", ("Alder", HOSTILE), ("1", "1")),),
    )
    row = RejectedRow(HOSTILE_PROMISE, "unknown-label", HOSTILE, 7, HOSTILE, {"label": HOSTILE, "=1+1": None})
    with Ledger.open(f"sqlite:///{path}", new_id="1" * 32) as ledger:
        replay(ledger, Days(HOSTILE[:60], named, [row]), [replace(base, terms=terms)], every=28, until=DAYS)


@dataclass
class Acknowledgements:
    """Stands for the daemon's function: commits a real entry and remembers who asked."""

    open: Callable[[], Ledger]
    seen: list[tuple[str, str, int, str, str]] = field(default_factory=list)

    def __call__(self, promise: str, version: str, number: int, who: str, why: str) -> Head:
        ledger = self.open()
        breach = next(
            (
                each
                for each in ledger.events(promise=promise, kinds=["breach"], limit=1000)
                if each.event.version == version and each.event.facts.get("number") == number
            ),
            None,
        )
        if breach is None:
            raise UsageError(f"breach = {number}: promise {promise!r} has no such breach")
        self.seen.append((promise, version, number, who, why))
        facts = {"look": breach.look, "event": breach.n, "who": who, "why": why}
        event = Event("acknowledged", promise, version, "", "", None, facts)
        source = next(t.terms.source for t in ledger.terms(open_only=False) if t.terms.promise == promise)
        expected, at = ledger.newest_look(source)
        return ledger.commit(Entry(source, at, "acknowledge", 1, expected, (), (event,)))


class Clock:
    """A clock that tests move."""

    def __init__(self) -> None:
        self.now = datetime(2026, 7, 6, tzinfo=UTC)

    def __call__(self) -> datetime:
        return self.now

    def forward(self, **span: float) -> None:
        self.now += timedelta(**span)


class Client:
    """Requests to an app in this process, one after the other; cookies are kept, redirects are not followed."""

    def __init__(self, app: Any, headers: Mapping[str, str], address: str = "127.0.0.1") -> None:
        transport = httpx.ASGITransport(app, raise_app_exceptions=False, client=(address, 50_000))
        # Off loopback there is TLS in front, and the cookie is for TLS only.
        self.origin = "https://localhost" if app.state.site.tokens_required else "http://localhost"
        self._client = httpx.AsyncClient(transport=transport, base_url=self.origin, headers=dict(headers))

    @property
    def cookies(self) -> httpx.Cookies:
        return self._client.cookies

    def request(self, method: str, path: str, **more: Any) -> httpx.Response:
        return asyncio.run(self._client.request(method, path, **more))

    def get(self, path: str, **more: Any) -> httpx.Response:
        return self.request("GET", path, **more)

    def post(self, path: str, **more: Any) -> httpx.Response:
        return self.request("POST", path, **more)

    def form(self, path: str, fields: Mapping[str, str]) -> httpx.Response:
        """As a browser sends one of our own forms."""
        return self.post(path, data=dict(fields), headers={"Origin": self.origin})


@dataclass
class House:
    """A site around a ledger, its app, and tokens of both roles."""

    site: Site
    ledger: Ledger
    clock: Clock
    acknowledged: Acknowledgements
    read: str
    act: str

    def client(self, token: str | None = None) -> Client:
        return Client(create_app(self.site), {"Authorization": f"Bearer {token}"} if token else {})


_names = itertools.count()


def house(path: Path, *, tokens_required: bool = False, render: Any = None, hosts: tuple[str, ...] = ()) -> House:
    """Everything around the ledger at `path`."""
    ledger = Ledger.open(f"sqlite:///{path}")
    clock, acknowledged = Clock(), Acknowledgements(lambda: ledger)
    name = next(_names)
    read = ledger.tokens.make(f"reader-{name}", "read", clock())
    act = ledger.tokens.make(f"maria-{name}", "act", clock())

    async def metrics(scope: Any, receive: Any, send: Any) -> None:
        await send({"type": "http.response.start", "status": 200, "headers": [(b"content-type", b"text/plain")]})
        await send({"type": "http.response.body", "body": b"watcher_ledger_look 1\n"})

    site = Site(
        ledger=lambda: ledger,
        clock=clock,
        units=lambda: {("damage-photos", "1"): "photo"},
        hosts=hosts,
        tokens_required=tokens_required,
        acknowledge=acknowledged,
        ready=lambda: (True, "ready"),
        metrics=metrics,
        render=render,
    )
    return House(site, ledger, clock, acknowledged, read, act)


@contextmanager
def serving(site: Site) -> Any:
    """The app on a real port of this machine; yields its origin."""
    config = uvicorn.Config(create_app(site), host="127.0.0.1", port=0, log_level="error", lifespan="off", ws="none")
    server = uvicorn.Server(config)
    thread = threading.Thread(target=server.run, daemon=True)
    thread.start()
    until = time.monotonic() + 30
    while not server.started and time.monotonic() < until:
        time.sleep(0.02)
    assert server.started
    try:
        yield f"http://127.0.0.1:{server.servers[0].sockets[0].getsockname()[1]}"
    finally:
        server.should_exit = True
        thread.join(20)
