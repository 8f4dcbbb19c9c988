"""Page, API and metrics inside the daemon's own event loop."""

from __future__ import annotations

import asyncio
import contextlib
import socket
import threading
from collections.abc import Callable, Iterator
from importlib.metadata import version
from typing import TYPE_CHECKING, Any

import uvicorn
from prometheus_client import CollectorRegistry, ProcessCollector, make_asgi_app

from watcher import assembly
from watcher.errors import UsageError, WatcherError
from watcher.ledger.store import Ledger
from watcher.look import acknowledge
from watcher.metrics import LedgerCollector, Snapshot
from watcher.records import Head, Standing
from watcher.settings import WebTable
from watcher.web.app import Site, create_app

if TYPE_CHECKING:
    from watcher.daemon.service import Service


class Reader:
    """A read-only handle of the ledger, opened when it is first asked for and again after it was lost."""

    def __init__(self, open_it: Callable[[], Ledger]) -> None:
        self._open_it = open_it
        self._handle: Ledger | None = None
        self._lock = threading.Lock()

    def __call__(self) -> Ledger:
        """The handle. Raises WatcherError while there is no ledger."""
        with self._lock:
            if self._handle is None:
                self._handle = self._open_it()
            return self._handle

    def close(self) -> None:
        """Give the handle back."""
        with self._lock:
            handle, self._handle = self._handle, None
        if handle is not None:
            handle.close()


class _Asgi:
    """Starlette treats a function as a request handler; an instance it treats as an application."""

    def __init__(self, inner: Any) -> None:
        self._inner = inner

    async def __call__(self, scope: Any, receive: Any, send: Any) -> None:
        await self._inner(scope, receive, send)


class Snapshots:
    """What a scrape shows; the part that only looks can change is read again when the newest look changed."""

    def __init__(self, service: Service, reader: Reader) -> None:
        self._service = service
        self._reader = reader
        self._known: tuple[Head, list[Standing], dict[str, dict[str, int]]] | None = None

    def __call__(self) -> Snapshot | None:
        """A snapshot; None while the ledger cannot be read."""
        parts = self._service.parts
        try:
            ledger = self._reader()
            head = ledger.head()
            if self._known is None or self._known[0] != head:
                self._known = (head, ledger.standings(open_only=True), ledger.reject_counts())
            _, standings, rejects = self._known
            states = {state.source: state for state in ledger.source_states()}
            notices, size = ledger.notice_counts(), ledger.size_bytes()
        except WatcherError:
            return None
        seen = {(standing.promise, standing.version) for standing in standings}
        terms = [promise.terms for watch in parts.watches.values() for promise in watch.promises if not promise.retired]
        owner = {each.promise: each.source for each in terms}
        from watcher.records import SourceState

        return Snapshot(
            standings=standings,
            waiting=[each for each in terms if (each.promise, each.version) not in seen],
            sources=[states.get(name, SourceState(name)) for name in parts.watches],
            rejected={(owner.get(promise, ""), promise): reasons for promise, reasons in rejects.items()},
            notices=notices,
            routes=[route.name for route in parts.routes],
            lease_held=self._service.lease_held,
            head=head,
            ledger_bytes=size,
            version=version("promise-watcher"),
        )


def web_app(service: Service) -> Any:
    """The application with everything it needs of the daemon."""
    settings = service.parts.settings
    reader = Reader(lambda: assembly.open_ledger(settings, write=False))
    registry = CollectorRegistry()
    registry.register(LedgerCollector(Snapshots(service, reader), slices=settings.metrics.slices))
    ProcessCollector(registry=registry)

    def acknowledged(promise: str, promise_version: str, number: int, who: str, why: str) -> Head:
        now = int(service.hooks.clock().timestamp())
        return acknowledge(service.writing(), promise, promise_version, number, who, why, now)

    loopback = settings.web.host in ("127.0.0.1", "::1", "localhost")
    site = Site(
        ledger=reader,
        clock=service.hooks.clock,
        units=lambda: assembly.units(service.parts.settings),
        hosts=settings.web.hosts,
        tokens_required=not loopback,
        acknowledge=acknowledged,
        ready=service.ready,
        metrics=_Asgi(make_asgi_app(registry=registry)),
        render=service.renderer.svg,
        fdr=settings.report.fdr,
    )
    return create_app(site)


class _Quiet(uvicorn.Server):
    """The daemon handles signals itself."""

    @contextlib.contextmanager
    def capture_signals(self) -> Iterator[None]:
        yield


class Server:
    """uvicorn on a socket that is bound first, so that a taken address is said at once."""

    def __init__(self, app: Any, web: WebTable) -> None:
        self._web = web
        self._app = app
        self._server: _Quiet | None = None
        self._task: asyncio.Task[None] | None = None

    async def start(self) -> str:
        """Bind and serve; returns the address. Raises UsageError when it cannot be bound, or is unsafe."""
        web = self._web
        loopback = web.host in ("127.0.0.1", "::1", "localhost")
        if not loopback and not (web.tls_certificate and web.tls_key) and not web.behind_proxy:
            raise UsageError(
                f"web.listen = {web.listen!r} is not loopback: give tls_certificate and tls_key, or set behind_proxy = true "
                "when a proxy in front speaks TLS"
            )
        family = socket.AF_INET6 if ":" in web.host else socket.AF_INET
        bound = socket.socket(family, socket.SOCK_STREAM)
        bound.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            bound.bind((web.host, web.port))
        except OSError as error:
            bound.close()
            raise UsageError(
                f"web.listen = {web.listen!r} cannot be bound ({error.strerror}); is another watcher running? Choose another port"
            ) from None
        config = uvicorn.Config(
            self._app,
            log_config=None,
            access_log=False,
            lifespan="off",
            proxy_headers=False,
            server_header=False,
            timeout_graceful_shutdown=3,
            timeout_keep_alive=5,
            ssl_certfile=web.tls_certificate,
            ssl_keyfile=web.tls_key,
        )
        self._server = _Quiet(config)
        self._task = asyncio.create_task(self._server.serve(sockets=[bound]))
        while not self._server.started:
            if self._task.done():
                self._task.result()
            await asyncio.sleep(0.01)
        scheme = "https" if web.tls_certificate else "http"
        port = bound.getsockname()[1]
        host = f"[{web.host}]" if family == socket.AF_INET6 else web.host
        return f"{scheme}://{host}:{port}"

    async def stop(self) -> None:
        """Close connections and return."""
        if self._server is not None and self._task is not None:
            self._server.should_exit = True
            with contextlib.suppress(asyncio.CancelledError):
                await self._task
