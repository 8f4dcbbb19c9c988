"""Page, API and metrics inside the daemon's own event loop."""

from __future__ import annotations

import asyncio
import contextlib
import gzip
import socket
import threading
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from importlib.metadata import version
from math import nan
from typing import TYPE_CHECKING, Any

import uvicorn
from prometheus_client import CollectorRegistry, ProcessCollector
from prometheus_client.exposition import choose_encoder
from starlette.requests import Request
from starlette.responses import Response
from starlette.types import Receive, Scope, Send

from watcher import assembly
from watcher.daemon.threads import in_thread
from watcher.errors import UsageError, WatcherError
from watcher.ledger.store import Ledger
from watcher.look import acknowledge
from watcher.metrics import LedgerCollector, Snapshot, possible_reasons
from watcher.records import Head, SourceState, Standing, Terms
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


class Snapshots:
    """What a scrape shows; the part that only looks can change is read again when the newest look changed.

    While the ledger cannot be read, what was read last stays, beside the promises, sources and routes of the configuration:
    no series comes or goes with the ledger's health.
    """

    def __init__(self, service: Service, reader: Reader) -> None:
        self._service = service
        self._reader = reader
        self._lock = threading.Lock()
        self._seen = _Seen()

    def __call__(self) -> Snapshot:
        """A snapshot of now."""
        with self._lock:
            try:
                self._seen = self._read()
                readable = True
            except WatcherError:
                self._reader.close()
                readable = False
            return self._made(self._seen, readable=readable)

    def _read(self) -> _Seen:
        ledger = self._reader()
        head = ledger.head()
        old = self._seen
        fresh = old.head != head
        return _Seen(
            head=head,
            newest=ledger.newest_at(),
            standings=ledger.standings(open_only=True) if fresh else old.standings,
            terms=[stored.terms for stored in ledger.terms()] if fresh else old.terms,
            rejects=ledger.reject_counts() if fresh else old.rejects,
            states={state.source: state for state in ledger.source_states()},
            notices=ledger.notice_counts(),
            size=ledger.size_bytes(),
        )

    def _made(self, seen: _Seen, *, readable: bool) -> Snapshot:
        parts = self._service.parts
        watched = [promise for watch in parts.watches.values() for promise in watch.promises]
        retired = {(each.terms.promise, each.terms.version) for each in watched if each.retired}
        known = {(terms.promise, terms.version) for terms in seen.terms}
        new = [e.terms for e in watched if (e.terms.promise, e.terms.version) not in known | retired]
        living = [terms for terms in (*seen.terms, *new) if (terms.promise, terms.version) not in retired]
        return Snapshot(
            standings=[s for s in seen.standings if (s.promise, s.version) not in retired],
            waiting=new,
            sources=[seen.states.get(name, SourceState(name)) for name in parts.watches],
            rejected={
                (terms.source, terms.promise): {
                    **dict.fromkeys(possible_reasons(terms), 0),
                    **seen.rejects.get(terms.promise, {}),
                }
                for terms in living
            },
            notices=seen.notices,
            routes=[route.name for route in parts.routes],
            lease_held=self._service.lease_held,
            head=seen.head or Head(0, ""),
            ledger_bytes=seen.size,
            version=version("promise-watcher"),
            readable=readable,
            clock_behind=max(0.0, seen.newest - self._service.hooks.clock().timestamp()),
        )


@dataclass(frozen=True, slots=True)
class _Seen:
    """What was last read from the ledger; empty before the first time."""

    head: Head | None = None
    newest: int = 0
    standings: Sequence[Standing] = ()
    terms: Sequence[Terms] = ()
    rejects: Mapping[str, Mapping[str, int]] = field(default_factory=dict)
    states: Mapping[str, SourceState] = field(default_factory=dict)
    notices: Mapping[tuple[str, str], int] = field(default_factory=dict)
    size: float = nan


class Scrape:
    """/metrics: text or OpenMetrics as the scraper prefers, made in a thread, since the ledger may be slow to answer.

    An instance, because Starlette takes a function for a handler of requests.
    """

    def __init__(self, registry: CollectorRegistry) -> None:
        self._registry = registry

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Answer one scrape."""
        request = Request(scope)
        encode, kind = choose_encoder(", ".join(request.headers.getlist("accept")))
        text = await in_thread(encode, self._registry)
        headers = {"content-type": kind, "vary": "Accept, Accept-Encoding"}
        if "gzip" in request.headers.get("accept-encoding", ""):
            text = gzip.compress(text, compresslevel=1)
            headers["content-encoding"] = "gzip"
        await Response(text, headers=headers)(scope, receive, send)


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
        metrics=Scrape(registry),
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
