"""A real HTTP receiver in a thread on a free loopback port; it keeps what it was sent and answers as it is told."""

from __future__ import annotations

import contextlib
import ssl
import threading
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer


@dataclass(frozen=True)
class Received:
    path: str
    headers: Mapping[str, str]
    """Names in lower case."""
    body: bytes


@dataclass(frozen=True)
class Reply:
    status: int = 204
    body: bytes = b""
    headers: Mapping[str, str] = field(default_factory=dict)


Answer = Callable[[Received], Reply]


class Receiver:
    """What was received, in order, and how to answer."""

    def __init__(self) -> None:
        self.received: list[Received] = []
        self.answer: Answer = lambda _: Reply()
        self.url = ""

    def take(self, got: Received) -> Reply:
        self.received.append(got)
        return self.answer(got)


@contextlib.contextmanager
def receiver(tls: ssl.SSLContext | None = None, port: int = 0) -> Iterator[Receiver]:
    """Serve until the end of the block; `tls` with a certificate for `localhost`; `port` 0 for a free one."""
    kept = Receiver()
    server = ThreadingHTTPServer(("127.0.0.1", port), _handler(kept))
    server.daemon_threads = True
    if tls is not None:
        # The handshake must happen in the worker's thread: in the accepting one a refused certificate stops the server.
        server.socket = tls.wrap_socket(server.socket, server_side=True, do_handshake_on_connect=False)
    kept.url = f"http{'s' if tls else ''}://{'localhost' if tls else '127.0.0.1'}:{server.server_address[1]}/hook"
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01}, daemon=True)
    thread.start()
    try:
        yield kept
    finally:
        server.shutdown()
        server.server_close()
        thread.join()


def _handler(kept: Receiver) -> type[BaseHTTPRequestHandler]:
    class Handler(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"

        def handle(self) -> None:
            # A client that refuses the certificate or goes away is what some tests are about, not an error here.
            with contextlib.suppress(OSError):
                super().handle()

        def do_POST(self) -> None:
            body = self.rfile.read(int(self.headers.get("content-length", 0)))
            headers = {name.lower(): value for name, value in self.headers.items()}
            reply = kept.take(Received(self.path, headers, body))
            self.send_response(reply.status)
            for name, value in reply.headers.items():
                self.send_header(name, value)
            self.send_header("content-length", str(len(reply.body)))
            self.end_headers()
            self.wfile.write(reply.body)

        def do_GET(self) -> None:
            self.do_POST()

        def log_message(self, *args: object) -> None:
            return

    return Handler
