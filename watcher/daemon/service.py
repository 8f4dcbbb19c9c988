"""The life of the daemon: wait for the ledger, look on schedule, send what waits, serve, and stop cleanly."""

from __future__ import annotations

import asyncio
import contextlib
import signal
import time
from collections.abc import Awaitable, Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any, Final

import structlog
from apscheduler.schedulers.asyncio import AsyncIOScheduler

from watcher import settings as configuration
from watcher.daemon import children
from watcher.daemon import parts as building
from watcher.daemon.children import Cancelled, Children, Renderer
from watcher.daemon.holding import Held, check_terms, hold
from watcher.daemon.hooks import Hooks
from watcher.daemon.looking import Looker
from watcher.daemon.posting import Poster
from watcher.daemon.reporting import Reporting
from watcher.daemon.serving import Server, web_app
from watcher.daemon.steps import Steps
from watcher.daemon.threads import in_thread
from watcher.errors import LedgerBusy, SchemaMismatch, TermsChanged, UsageError, WatcherError
from watcher.ledger.engine import parse_url
from watcher.ledger.store import Ledger
from watcher.notices.base import RouteSpec
from watcher.settings import Settings

__all__ = ["Hooks", "Service"]

RENEW: Final = 3.0
"""Seconds between checks of the lease, which runs out after 10."""
POST: Final = 5.0
PERIODIC: Final = 30.0
TIDY: Final = 60.0
CLOCK: Final = 2.0
"""Seconds between two comparisons of the machine's clock with one that only grows."""
WAITS: Final = (1.0, 2.0, 5.0, 10.0, 30.0)
"""Seconds between tries to open the ledger; the last one repeats."""
HELD: Final = 5.0
"""Seconds between tries while another process holds the ledger."""
STOPPING: Final = 20.0
"""Seconds that a look under way gets to finish its commit; with the server's 3 it stays below 30."""


class Service:
    """One daemon on one configuration file."""

    def __init__(self, path: Path, hooks: Hooks | None = None) -> None:
        """Read the configuration and build the parts. Raises SettingsError or UsageError for what cannot be used."""
        self._path = path
        self._hooks = hooks or Hooks()
        self._log = structlog.get_logger("watcher.daemon")
        self._children = Children(started=lambda: self._hooks.at_point("mid-pull"))
        self._renderer = Renderer()
        self._ledger: Ledger | None = None
        self._stop = asyncio.Event()
        self._parts = self._build(self._read())
        parse_url(self._parts.settings.ledger_url())
        self._looker = Looker(self._hooks, self._log)
        self._poster = Poster(self._hooks, self._log, self._stop.is_set, lambda: self._address)
        self._reporting = Reporting(self._hooks, self._log, self._children, lambda: self.ready()[0])
        self._scheduler: AsyncIOScheduler | None = None
        self._why_waiting = "the ledger was not opened yet"
        self._address = ""
        self._checked = False
        """The terms of the configuration were compared with those of the ledger."""
        self._busy: set[asyncio.Task[Any]] = set()
        self._sending: set[str] = set()
        """Routes that are being served: one that hangs does not hold up the others."""

    # --- life

    async def run(self) -> None:
        """Serve until SIGTERM or SIGINT.

        Raises SchemaMismatch, TermsChanged, and UsageError where the address cannot be bound: what no waiting can mend.
        """
        loop = asyncio.get_running_loop()
        for number in (signal.SIGTERM, signal.SIGINT):
            loop.add_signal_handler(number, self.stop)
        loop.add_signal_handler(signal.SIGHUP, lambda: self._keep(self._reload()))
        children.prepare()
        server = Server(web_app(self), self._parts.settings.web)
        try:
            self._address = await server.start()
            self._hooks.started(self._address)
            self._log.info("serving page and metrics", address=self._address)
            await self._work()
        finally:
            self.stop()
            await self._finish()
            await server.stop()
            self._renderer.close()
            self._log.info("stopped")

    def stop(self) -> None:
        """Cancel pulls, let a commit under way finish, and end `run`."""
        self._stop.set()
        self._children.stop()

    async def _work(self) -> None:
        while not self._stop.is_set():
            held = await self._hold()
            if held is None:
                return
            try:
                if not self._checked:
                    await self._check(held.ledger)
                await self._watch(held.ledger)
            finally:
                self._ledger = None
                self._why_waiting = "the ledger was given back"
                await in_thread(held.close)

    async def _hold(self) -> Held | None:
        """The ledger to write to, however long it takes; None when the daemon stops meanwhile. Raises SchemaMismatch."""
        tries, said = 0, ""
        while not self._stop.is_set():
            try:
                return await in_thread(hold, self._parts.settings, self._hooks.at_point)
            except SchemaMismatch:
                raise
            except LedgerBusy as error:
                self._hooks.at_point("held-by-another")
                self._why_waiting, pause = str(error), HELD
                told = "another process holds the ledger; waiting until it lets go"
            except Exception as error:  # noqa: BLE001 - whatever keeps the ledger away, the daemon waits for it
                self._why_waiting, pause = _reason(error), WAITS[min(tries, len(WAITS) - 1)]
                told = "the ledger cannot be opened; trying again"
            if self._why_waiting != said:
                said = self._why_waiting
                self._log.warning(told, detail=said)
            await self._pause(pause)
            tries += 1
        return None

    async def _check(self, ledger: Ledger) -> None:
        """Refuse to start with terms that differ from the frozen ones. Raises TermsChanged."""
        try:
            await in_thread(check_terms, ledger, self._parts)
            self._checked = True
        except TermsChanged:
            raise
        except UsageError as error:
            self._checked = True
            self._log.error("a promise is not looked at", detail=str(error))
        except WatcherError as error:
            self._log.warning("the terms could not be compared; each look compares them again", detail=str(error))

    async def _watch(self, ledger: Ledger) -> None:
        """Run the jobs until the daemon stops or the lease is lost."""
        self._ledger = ledger
        # No grace: a look that is late because the machine slept or was busy is made late, and once.
        self._scheduler = AsyncIOScheduler(
            timezone=UTC, job_defaults={"coalesce": True, "max_instances": 1, "misfire_grace_time": None}
        )
        lost = asyncio.Event()
        self._schedule(ledger, lost)
        self._scheduler.start()
        steps = asyncio.create_task(self._keep_time(ledger, lost))
        try:
            waiting = [asyncio.create_task(event.wait()) for event in (self._stop, lost)]
            await asyncio.wait(waiting, return_when=asyncio.FIRST_COMPLETED)
            for task in waiting:
                task.cancel()
        finally:
            steps.cancel()
            self._scheduler.shutdown(wait=False)
            self._scheduler = None
            await self._finish()

    async def _finish(self) -> None:
        """Let what is under way come to its end: a pull is killed if the daemon stops, a commit is finished."""
        busy, self._busy = self._busy, set()
        if busy:
            _, late = await asyncio.wait(busy, timeout=STOPPING)
            if late:
                self._log.warning(
                    "work under way is left behind; what it had not recorded is done again", jobs=len(late)
                )

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
            # Shielded: the scheduler cancels its jobs when it is shut down, and a commit must come to its end.
            with contextlib.suppress(asyncio.CancelledError):
                await asyncio.shield(self._keep(work()))

        now = datetime.now(UTC)
        self._scheduler.add_job(
            job, "interval", seconds=seconds, id=name, next_run_time=now, replace_existing=True, start_date=now
        )

    def _schedule(self, ledger: Ledger, lost: asyncio.Event) -> None:
        """All jobs, beginning now: outbox, calendar, lease, and one a source."""
        assert self._scheduler is not None
        self._every(POST, self._post, "outbox")
        self._every(PERIODIC, self._periodic, "periodic")
        self._every(TIDY, self._tidy, "tidy")
        if not self._parts.settings.ledger_url().startswith("sqlite"):
            self._every(RENEW, lambda: self._renew(ledger, lost), "lease")
        self._schedule_looks()

    def _schedule_looks(self) -> None:
        """One job a source; those of sources that are gone are taken away."""
        assert self._scheduler is not None
        wanted = {f"look {name}" for name in self._parts.watches}
        for job in self._scheduler.get_jobs():
            if job.id.startswith("look ") and job.id not in wanted:
                job.remove()
        for name, watch in self._parts.watches.items():
            self._every(float(watch.table.every), lambda name=name: self._look(name), f"look {name}")  # type: ignore[misc]

    async def _keep_time(self, ledger: Ledger, lost: asyncio.Event) -> None:
        """The schedule goes by the machine's clock; when somebody sets that, everything is due at once and counted anew."""
        steps = Steps(time.time, time.monotonic)
        while True:
            await asyncio.sleep(CLOCK)
            moved = steps.moved()
            if moved and self._scheduler is not None:
                self._log.warning("the machine's clock was set", seconds=round(moved))
                self._schedule(ledger, lost)

    async def _look(self, name: str) -> None:
        ledger, watch = self._ledger, self._parts.watches.get(name)
        if ledger is None or watch is None or self._stop.is_set():
            return
        try:
            looked = await in_thread(self._looker.look, ledger, watch, self._parts.routings)
        except Cancelled:
            return
        if looked.written:
            await self._post()
        if looked.again is not None and self._scheduler is not None:
            when = datetime.now(UTC) + timedelta(seconds=looked.again)
            with contextlib.suppress(LookupError):
                self._scheduler.modify_job(f"look {name}", next_run_time=when)

    async def _post(self) -> None:
        for route in self._parts.routes:
            if route.name not in self._sending:
                self._keep(self._send(route))

    async def _send(self, route: RouteSpec) -> None:
        ledger = self._ledger
        if ledger is None or self._stop.is_set():
            return
        self._sending.add(route.name)
        try:
            await in_thread(self._poster.send, ledger, self._parts, route)
        finally:
            self._sending.discard(route.name)

    async def _periodic(self) -> None:
        if self._ledger is not None:
            await in_thread(self._poster.periodic, self._ledger, self._parts)
        if self._ledger is not None and not self._stop.is_set():
            await in_thread(self._reporting.make_due, self._ledger, self._parts)

    async def _tidy(self) -> None:
        await in_thread(self._renderer.rest)

    async def _renew(self, ledger: Ledger, lost: asyncio.Event) -> None:
        try:
            await in_thread(ledger.renew)
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
            parts = await in_thread(self._acceptable)
        except WatcherError as error:
            self._log.error("the new configuration was refused; the old one goes on", detail=str(error))
            return
        old, self._parts = self._parts, parts
        for name, watch in parts.watches.items():
            before = old.watches.get(name)
            if before is None or (before.table, before.promises) != (watch.table, watch.promises):
                self._looker.forget(name)
        if self._scheduler is not None:
            self._schedule_looks()
        if old.settings.web != parts.settings.web or old.settings.ledger != parts.settings.ledger:
            self._log.warning("[web] and [ledger] are taken over at the next start only")
        self._log.info("the new configuration is in force", sources=len(parts.watches), routes=len(parts.routes))

    def _acceptable(self) -> building.Parts:
        parts = self._build(self._read())
        if self._ledger is None:
            raise WatcherError(
                f"its terms cannot be compared with the frozen ones ({self._why_waiting}); send SIGHUP again later"
            )
        check_terms(self._ledger, parts)
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


def _reason(error: Exception) -> str:
    return str(error) if isinstance(error, WatcherError) else f"{type(error).__name__}: {error}"
