"""The life of the daemon: wait for the ledger, look on schedule, send what waits, serve, and stop cleanly."""

from __future__ import annotations

import asyncio
import contextlib
import signal
import time
from collections.abc import Awaitable, Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any, Final

import structlog
from apscheduler.schedulers.asyncio import AsyncIOScheduler

from watcher import settings as configuration
from watcher.assembly import open_ledger
from watcher.daemon import parts as building
from watcher.daemon.children import Cancelled, Children, Renderer
from watcher.daemon.looking import Looker
from watcher.daemon.posting import Poster
from watcher.daemon.reporting import Reporting
from watcher.daemon.serving import Server, web_app
from watcher.errors import LedgerBusy, SchemaMismatch, SettingsError, UsageError, WatcherError
from watcher.ledger.store import Ledger
from watcher.look import recognise
from watcher.settings import Settings

RENEW: Final = 3.0
"""Seconds between checks of the lease, which runs out after 10."""
POST: Final = 5.0
PERIODIC: Final = 30.0
GRACE: Final = 300
"""Seconds by which a job may be late and still run."""
WAITS: Final = (1, 2, 5, 10, 30)
"""Seconds between tries to open the ledger; the last one repeats."""
STOPPING: Final = 25.0
"""Seconds that a look under way gets to finish its commit."""


def _nowhere(point: str) -> None:
    """The point at which nothing happens."""


def wall_clock() -> datetime:
    """The machine's clock in UTC."""
    return datetime.now(UTC)


@dataclass(frozen=True, slots=True)
class Hooks:
    """What is passed in: the clock, the timer, and what to call at named points (tests kill the process there)."""

    clock: Callable[[], datetime] = wall_clock
    timer: Callable[[], float] = time.monotonic
    at_point: Callable[[str], None] = _nowhere
    started: Callable[[str], None] = _nowhere
    """Called once with the address when page and metrics are served."""
    adjust: Callable[[Settings], Settings] = field(default=lambda settings: settings)
    """Applied to every configuration that is read; the demo looks more often than its file says."""


class Service:
    """One daemon on one configuration file."""

    def __init__(self, path: Path, hooks: Hooks | None = None) -> None:
        self._path = path
        self._hooks = hooks or Hooks()
        self._log = structlog.get_logger("watcher.daemon")
        self._children, self._renderer = Children(), Renderer()
        self._ledger: Ledger | None = None
        self._stop = asyncio.Event()
        self._parts = self._build(self._read())
        self._looker = Looker(self._hooks, self._log)
        self._poster = Poster(self._hooks, self._log, self._stop.is_set)
        self._reporting = Reporting(self._hooks, self._log, self._children, lambda: self.ready()[0])
        self._scheduler: AsyncIOScheduler | None = None
        self._why_waiting = "the ledger was not opened yet"
        self._busy: set[asyncio.Task[Any]] = set()

    # --- life

    async def run(self) -> None:
        """Serve until SIGTERM or SIGINT. Raises SchemaMismatch, and UsageError where the address cannot be bound."""
        loop = asyncio.get_running_loop()
        for number in (signal.SIGTERM, signal.SIGINT):
            loop.add_signal_handler(number, self.stop)
        loop.add_signal_handler(signal.SIGHUP, lambda: self._keep(self._reload()))
        server = Server(web_app(self), self._parts.settings.web)
        try:
            address = await server.start()
            self._hooks.started(address)
            self._log.info("serving page and metrics", address=address)
            await self._work()
        finally:
            await self._wind_down()
            await server.stop()
            self._renderer.close()
            self._log.info("stopped")

    def stop(self) -> None:
        """Cancel pulls, let a commit under way finish, and end `run`."""
        self._stop.set()
        self._children.stop()

    async def _work(self) -> None:
        while not self._stop.is_set():
            ledger = await self._open()
            if ledger is None:
                return
            try:
                with ledger.writer():
                    await self._watch(ledger)
            except LedgerBusy as error:
                self._why_waiting = str(error)
                self._log.warning("another process writes the ledger; waiting", detail=str(error))
                await self._pause(WAITS[2])
            finally:
                self._ledger = None
                ledger.close()

    async def _open(self) -> Ledger | None:
        """The ledger, however long it takes; None when the daemon stops meanwhile. Raises SchemaMismatch."""
        tries = 0
        while not self._stop.is_set():
            try:
                ledger = await asyncio.to_thread(open_ledger, self._parts.settings, write=True)
                ledger.at_point = self._hooks.at_point
                return ledger
            except SchemaMismatch:
                raise
            except WatcherError as error:
                self._why_waiting = str(error)
                self._log.warning("the ledger cannot be opened; trying again", detail=str(error))
                await self._pause(WAITS[min(tries, len(WAITS) - 1)])
                tries += 1
        return None

    async def _watch(self, ledger: Ledger) -> None:
        """Run the jobs until the daemon stops or the lease is lost."""
        self._ledger = ledger
        self._scheduler = AsyncIOScheduler(
            timezone=UTC, job_defaults={"coalesce": True, "max_instances": 1, "misfire_grace_time": GRACE}
        )
        self._schedule()
        lost = asyncio.Event()
        self._every(POST, self._post, "outbox")
        self._every(PERIODIC, self._periodic, "periodic")
        self._every(60.0, self._rest, "rest")
        self._every(RENEW, lambda: self._renew(ledger, lost), "lease")
        self._scheduler.start()
        try:
            waiting = [asyncio.create_task(event.wait()) for event in (self._stop, lost)]
            await asyncio.wait(waiting, return_when=asyncio.FIRST_COMPLETED)
            for task in waiting:
                task.cancel()
        finally:
            self._scheduler.shutdown(wait=False)
            self._scheduler = None
            await self._finish()

    async def _finish(self) -> None:
        """Let what is under way come to its end: a pull is killed, a commit is finished."""
        if self._stop.is_set():
            self._children.stop()
        if self._busy:
            await asyncio.wait(set(self._busy), timeout=STOPPING)

    async def _wind_down(self) -> None:
        self.stop()
        await self._finish()

    async def _pause(self, seconds: float) -> None:
        with contextlib.suppress(TimeoutError):
            await asyncio.wait_for(self._stop.wait(), seconds)

    def _keep(self, work: Awaitable[None]) -> asyncio.Task[None]:
        async def guarded() -> None:
            try:
                await work
            except Exception:  # noqa: BLE001 - logged with its trace; the daemon must outlive it
                self._log.exception("a job failed; the daemon goes on")

        task = asyncio.ensure_future(guarded())
        self._busy.add(task)
        task.add_done_callback(self._busy.discard)
        return task

    # --- jobs

    def _every(self, seconds: float, work: Callable[[], Awaitable[None]], name: str) -> None:
        assert self._scheduler is not None

        async def job() -> None:
            await self._keep(work())

        now = datetime.now(UTC)
        self._scheduler.add_job(
            job, "interval", seconds=seconds, id=name, next_run_time=now, replace_existing=True, start_date=now
        )

    def _schedule(self) -> None:
        """One job a source; those of sources that are gone are taken away."""
        assert self._scheduler is not None
        wanted = {f"look {name}" for name in self._parts.watches}
        for job in self._scheduler.get_jobs():
            if job.id.startswith("look ") and job.id not in wanted:
                job.remove()
        for name, watch in self._parts.watches.items():
            self._every(float(watch.table.every), lambda name=name: self._look(name), f"look {name}")  # type: ignore[misc]

    async def _look(self, name: str) -> None:
        ledger, watch = self._ledger, self._parts.watches.get(name)
        if ledger is None or watch is None or self._stop.is_set():
            return
        try:
            again = await asyncio.to_thread(self._looker.look, ledger, watch, self._parts.routings)
        except Cancelled:
            return
        if again is not None and self._scheduler is not None:
            when = datetime.now(UTC) + timedelta(seconds=again)
            with contextlib.suppress(LookupError):
                self._scheduler.modify_job(f"look {name}", next_run_time=when)

    async def _post(self) -> None:
        if self._ledger is not None:
            await asyncio.to_thread(self._poster.send, self._ledger, self._parts)

    async def _periodic(self) -> None:
        if self._ledger is not None:
            await asyncio.to_thread(self._poster.periodic, self._ledger, self._parts)
        if self._ledger is not None:
            await asyncio.to_thread(self._reporting.make_due, self._ledger, self._parts)

    async def _rest(self) -> None:
        await asyncio.to_thread(self._renderer.rest)

    async def _renew(self, ledger: Ledger, lost: asyncio.Event) -> None:
        try:
            await asyncio.to_thread(ledger.renew)
        except LedgerBusy as error:
            self._log.warning("the lease of the ledger was lost", detail=str(error))
            lost.set()
        except WatcherError as error:
            self._log.warning("the lease could not be renewed; trying again", detail=str(error))

    # --- configuration

    def _read(self) -> Settings:
        return self._hooks.adjust(configuration.read(self._path))

    def _build(self, settings: Settings) -> building.Parts:
        return building.build(settings, self._children, self._hooks.at_point, self._hooks.clock)

    async def _reload(self) -> None:
        """SIGHUP: take the new configuration, or say why not and go on with the old one."""
        try:
            parts = await asyncio.to_thread(self._acceptable)
        except (SettingsError, UsageError) as error:
            self._log.error("the new configuration was refused; the old one goes on", detail=str(error))
            return
        old, self._parts = self._parts, parts
        self._looker.forget()
        if self._scheduler is not None:
            self._schedule()
        if old.settings.web != parts.settings.web or old.settings.ledger != parts.settings.ledger:
            self._log.warning("[web] and [ledger] are taken over at the next start only")
        self._log.info("the new configuration is in force", sources=len(parts.watches), routes=len(parts.routes))

    def _acceptable(self) -> building.Parts:
        parts = self._build(self._read())
        if self._ledger is not None:
            for name, watch in parts.watches.items():
                recognise(self._ledger, name, watch.promises)
        return parts

    # --- what the web asks

    @property
    def parts(self) -> building.Parts:
        """The parts in force."""
        return self._parts

    @property
    def hooks(self) -> Hooks:
        """What was passed in."""
        return self._hooks

    @property
    def renderer(self) -> Renderer:
        """Draws charts in a child."""
        return self._renderer

    @property
    def lease_held(self) -> bool:
        """Whether this process writes the ledger."""
        return self._ledger is not None and self._ledger.held

    def ready(self) -> tuple[bool, str]:
        """Ledger reached, schema right, and every source tried once."""
        if self._ledger is None:
            return False, self._why_waiting
        untried = [name for name in self._parts.watches if name not in self._looker.tried]
        if untried:
            return False, f"{len(untried)} sources were not tried yet"
        return True, "ready"

    def writing(self) -> Ledger:
        """The ledger to write to. Raises LedgerBusy while this process does not hold it."""
        if self._ledger is None:
            raise LedgerBusy(f"this daemon does not hold the ledger: {self._why_waiting}")
        return self._ledger
