"""The demo through the real daemon: about a simulated day a second, page and metrics following."""

from __future__ import annotations

import asyncio
import contextlib
import logging
import socket
import time
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

from rich.console import Console
from rich.text import Text

from watcher import assembly, settings, wording
from watcher.cli import show
from watcher.daemon import logs
from watcher.daemon.service import Hooks, Service
from watcher.demo.scenario import CAMERA_DAY, CAMERA_DEPOT, DAY, DAYS, RELEASED, Row, generate
from watcher.demo.writing import append, prepare
from watcher.errors import WatcherError
from watcher.ledger.store import Ledger
from watcher.records import Event, Standing
from watcher.settings import Settings

AHEAD: Final = 1.5
"""Days that the simulated clock may be ahead of the newest look: a busy machine plays more slowly, not another story."""
TOLD: Final = frozenset({"breach", "breach-withdrawn", "warning", "warning-over", "supported", "support-lost", "stale"})
WEEK: Final = 7 * DAY


class Clock:
    """Runs a day a second through the scenario, never far ahead of the looks, and at the usual pace after it."""

    def __init__(self, end: int, timer: Callable[[], float] = time.monotonic) -> None:
        self._timer, self._last = timer, timer()
        self._end = end
        self._now = float(RELEASED)
        self._most = RELEASED + AHEAD * DAY

    def __call__(self) -> datetime:
        """The simulated time."""
        at = self._timer()
        spent, self._last = at - self._last, at
        if self.over:
            self._now += spent
        else:
            self._now = max(self._now, min(self._now + spent * DAY, self._most, self._end))
        return datetime.fromtimestamp(int(self._now), UTC)

    def looked(self) -> None:
        """A look begins: time may go on."""
        self._most = max(self._most, self().timestamp() + AHEAD * DAY)

    @property
    def over(self) -> bool:
        """Whether the scenario has been played."""
        return self._now >= self._end


def play(folder: Path, seed: int) -> None:
    """Write the configuration, feed the rows day by day to the real daemon and tell what happens, until Ctrl-C."""
    logs.configure()
    logging.getLogger().setLevel(logging.WARNING)
    path = prepare(folder)
    rows = generate(seed)
    lag = settings.read(path).promise[0].label_lag
    asyncio.run(_play(path, rows, Clock(RELEASED + DAYS * DAY + lag + DAY)))


async def _play(path: Path, rows: tuple[Row, ...], clock: Clock) -> None:
    out, loop, news = show.console(), asyncio.get_running_loop(), asyncio.Event()
    feeder = _Feeder(path, rows, clock)
    feeder.feed()

    def at_point(point: str) -> None:
        if point == "before-look":
            # Written before the daemon reads: a file that changes under a pull would put the look off.
            clock.looked()
            feeder.feed()
        elif point == "committed":
            loop.call_soon_threadsafe(news.set)

    def started(address: str) -> None:
        _greet(out, path, address)

    service = Service(path, Hooks(clock=clock, started=started, adjust=_hurried, at_point=at_point))
    telling = asyncio.create_task(_tell(out, path, clock, news))
    try:
        await service.run()
    finally:
        telling.cancel()
        with contextlib.suppress(asyncio.CancelledError):
            await telling
    _leave(out, path)


def _greet(out: Console, path: Path, address: str) -> None:
    out.print(Text("watcher demo", style="bold"), Text("— an invented parcel network, a simulated day every second"))
    out.print()
    out.print(
        Text(
            "A classifier says of every parcel's photo whether it shows damage. It was released with a promise: it errs in at most "
            "3% of the photos; the chance that a breach is ever announced wrongly is at most 0.1%. An inspection desk tells days "
            f"later what was in the parcel. In week {CAMERA_DAY // 7 + 1} one of three depots gets a new camera."
        )
    )
    out.print()
    out.print(Text(f"  board    {address}/"))
    out.print(Text(f"  metrics  {address}/metrics"))
    out.print(Text(f"  data     {path.parent}/   (configuration: {path.name})"))
    out.print()
    out.print(Text("Ctrl-C ends it. A day is counted ten days after its end, when its labels are in.", style="dim"))
    out.print()


def _leave(out: Console, path: Path) -> None:
    out.print()
    out.print(Text(f"Stopped. {path.parent}/ stays; what was recorded can be read and checked:"))
    explain = f"watcher explain {path} damage-photos --slice depot={CAMERA_DEPOT}"
    for command in (f"watcher status {path}", explain, f"watcher audit {path}"):
        out.print(Text(f"  {command}", style="bold"))


def _hurried(read: Settings) -> Settings:
    """A look every second, as befits a day that lasts one; another port where the usual one is taken."""
    source = read.source[0].model_copy(update={"every": 1})
    web = read.web
    with socket.socket() as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind((web.host, web.port))
        except OSError:
            web = web.model_copy(update={"listen": f"{web.host}:0"})
    return read.model_copy(update={"source": (source,), "web": web})


class _Feeder:
    """Appends the rows that have arrived by the simulated time."""

    def __init__(self, path: Path, rows: tuple[Row, ...], clock: Clock) -> None:
        self._folder, self._rows, self._clock = path.parent, rows, clock
        self._next = 0

    def feed(self) -> None:
        """Append what is due; the first rows at once, so that the source has a file."""
        now = max(self._clock().timestamp(), self._rows[0].arrived)
        first = self._next
        while self._next < len(self._rows) and self._rows[self._next].arrived <= now:
            self._next += 1
        append(self._folder, self._rows[first : self._next])


async def _tell(out: Console, path: Path, clock: Clock, news: asyncio.Event) -> None:
    """Say what each look brought: events as they come, the figures once a simulated week."""
    config, teller = settings.read(path), _Teller(out)
    await news.wait()
    with assembly.open_ledger(config, write=False) as ledger:
        while not clock.over:
            news.clear()
            with contextlib.suppress(WatcherError):
                teller.tell(ledger)
            with contextlib.suppress(TimeoutError):
                await asyncio.wait_for(news.wait(), 5)
    out.print()
    out.print(Text("The scenario is over; the daemon goes on at the usual pace until Ctrl-C."))


class _Teller:
    """Prints what has not been told yet."""

    def __init__(self, out: Console) -> None:
        self._out = out
        self._seen = (0, -1)
        self._week = 0

    def tell(self, ledger: Ledger) -> None:
        """The events since the last time, oldest first, and a line of figures when a week has passed."""
        fresh = [stored for stored in ledger.events(limit=100) if (stored.look, stored.n) > self._seen]
        for stored in reversed(fresh):
            self._seen = (stored.look, stored.n)
            if stored.event.kind in TOLD:
                self._out.print(Text(f"{stored.at:%d %b %Y}  ").append(_sentence(stored.event)))
        week = (ledger.newest_at() - RELEASED) // WEEK
        if week > self._week:
            self._week = week
            self._out.print(Text(_figures(week, ledger.standings(promise="damage-photos")), style="dim"))


def _sentence(event: Event) -> Text:
    return Text(wording.event_sentence(event), style="bold" if event.kind == "breach" else "")


def _figures(week: int, standings: list[Standing]) -> str:
    whole = next(standing for standing in standings if standing.column == "")
    if whole.estimate is None:
        return f"week {week:2}      no day is old enough to be counted yet"
    worst = max((s for s in standings if s.column == "depot"), key=lambda s: s.total)
    told = "broken" if worst.breach else f"{worst.total:.1f} of {worst.threshold:.1f} nats"
    return (
        f"week {week:2}      {whole.labels:,} labels, {wording.percent(whole.estimate)} wrong "
        f"({wording.span(whole.life.lower, whole.life.upper)}), {whole.state}. Worst depot {worst.value}: {told}"
    )
