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

from rich.text import Text

from watcher import assembly, settings, wording
from watcher.cli import show
from watcher.daemon import logs
from watcher.daemon.service import Hooks, Service
from watcher.demo.scenario import DAY, DAYS, RELEASED, Row, generate
from watcher.demo.writing import append, prepare
from watcher.errors import WatcherError
from watcher.settings import Settings

TICK = 0.25
TOLD = frozenset({"breach", "warning", "warning-over", "supported", "support-lost", "source-failed", "stale"})


class Clock:
    """Runs a day a second through the scenario, and at the usual pace after it."""

    def __init__(self, end: int, timer: Callable[[], float] = time.monotonic) -> None:
        self._timer, self._begun = timer, timer()
        self._span = end - RELEASED

    def __call__(self) -> datetime:
        """The simulated time."""
        spent = self._timer() - self._begun
        ahead = min(spent * DAY, self._span) + max(0.0, spent - self._span / DAY)
        return datetime.fromtimestamp(RELEASED + int(ahead), UTC)

    @property
    def over(self) -> bool:
        """Whether the scenario has been played."""
        return (self._timer() - self._begun) * DAY >= self._span


def play(folder: Path, seed: int) -> None:
    """Write the configuration, feed the rows day by day to the real daemon and tell what happens, until Ctrl-C."""
    logs.configure()
    logging.getLogger().setLevel(logging.WARNING)
    path = prepare(folder)
    rows = generate(seed)
    lag = settings.read(path).promise[0].label_lag
    asyncio.run(_play(path, rows, Clock(RELEASED + DAYS * DAY + lag + DAY)))


async def _play(path: Path, rows: tuple[Row, ...], clock: Clock) -> None:
    out = show.console()
    feeder = _Feeder(path, rows, clock)
    feeder.feed()

    def started(address: str) -> None:
        out.print(Text(f"The invented parcel network lies in {path.parent}/; a simulated day passes every second."))
        out.print(Text(f"Look at {address}/ (the board) and {address}/metrics; Ctrl-C ends the demo."))

    service = Service(path, Hooks(clock=clock, started=started, adjust=_hurried, at_point=feeder.before_look))
    telling = asyncio.create_task(_tell(path, clock))
    try:
        await service.run()
    finally:
        telling.cancel()
        with contextlib.suppress(asyncio.CancelledError):
            await telling
    out.print(Text("Stopped. The folder stays: `watcher status`, `explain` and `audit` read it."))


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
        now = max(self._clock().timestamp(), RELEASED + DAY)
        first = self._next
        while self._next < len(self._rows) and self._rows[self._next].arrived <= now:
            self._next += 1
        append(self._folder, self._rows[first : self._next])

    def before_look(self, point: str) -> None:
        """Write before the daemon reads: a file that changes under a pull would put the look off."""
        if point == "before-look":
            self.feed()


async def _tell(path: Path, clock: Clock) -> None:
    out, seen, told_over = show.console(), (0, -1), False
    config = settings.read(path)
    while True:
        await asyncio.sleep(TICK)
        with contextlib.suppress(WatcherError), assembly.open_ledger(config, write=False) as ledger:
            events = [e for e in reversed(ledger.events(limit=50)) if (e.look, e.n) > seen]
            for stored in events:
                seen = (stored.look, stored.n)
                if stored.event.kind in TOLD:
                    out.print(Text(f"{stored.at:%d %b %Y}  {wording.event_sentence(stored.event)}"))
        if clock.over and not told_over:
            told_over = True
            out.print(Text("The scenario is over; the daemon goes on at the usual pace until Ctrl-C."))
