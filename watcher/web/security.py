"""What every request must pass and every answer carries: known Host, own Origin, no token in the address, headers."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Final
from urllib.parse import parse_qsl, urlsplit

import structlog
from starlette.datastructures import Headers, MutableHeaders
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from watcher.ledger.tokens import PREFIX
from watcher.text import safe
from watcher.web.problems import problem

LOOPBACK: Final = ("127.0.0.1", "localhost", "[::1]")
UNSAFE: Final = frozenset({"POST", "PUT", "PATCH", "DELETE"})
SECRET_NAMES: Final = frozenset({"token", "access_token", "auth", "authorization", "bearer", "key", "api_key"})
"""Query parameters that would carry a token: an address is kept in histories, logs and referrers."""
PAGE_POLICY: Final = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self'; connect-src 'self'; form-action 'self'; "
    "frame-ancestors 'none'; base-uri 'none'"
)
FILE_POLICY: Final = "default-src 'none'; style-src 'unsafe-inline'; img-src data:; frame-ancestors 'none'; sandbox"
"""For archived reports: they carry their style inside and run nothing."""
_HEADERS: Final = (
    ("X-Content-Type-Options", "nosniff"),
    ("X-Frame-Options", "DENY"),
    # Not no-referrer: with it a browser sends "Origin: null" with our own forms, and these would be refused.
    ("Referrer-Policy", "same-origin"),
    ("Cross-Origin-Opener-Policy", "same-origin"),
    ("Cross-Origin-Resource-Policy", "same-origin"),
    ("Permissions-Policy", "camera=(), geolocation=(), microphone=(), payment=(), usb=()"),
)
_BODY_LIMIT: Final = 64 * 1024
log = structlog.get_logger("watcher.web")


class Guard:
    """ASGI middleware around the whole app. A refusal is logged with its reason and answered with a problem."""

    def __init__(self, app: ASGIApp, *, hosts: Sequence[str]) -> None:
        self._app = app
        self._hosts = frozenset(host.lower() for host in hosts)

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass the request on, or refuse it."""
        if scope["type"] != "http":
            # No web sockets are served; lifespan belongs to the app.
            if scope["type"] == "lifespan":
                await self._app(scope, receive, send)
            return
        sent = _Sender(send)
        refused = self._refuse(scope)
        if refused is not None:
            status, reason, detail = refused
            refusal(scope, reason, status)
            await problem(status, reason, detail)(scope, receive, sent)
            return
        await self._app(scope, _Limited(receive), sent)

    def _refuse(self, scope: Scope) -> tuple[int, str, str] | None:
        headers = Headers(scope=scope)
        hosts = headers.getlist("host")
        if len(hosts) != 1 or not self._known(hosts[0], scope):
            return 421, "foreign-host", "This address is not served here; `[web] hosts` names further ones."
        origins = headers.getlist("origin")
        if any(not self._own(origin, hosts[0], scope) for origin in origins):
            return 403, "foreign-origin", "Requests from pages of other sites are refused."
        if scope["method"] in UNSAFE:
            if headers.get("sec-fetch-site", "same-origin") not in ("same-origin", "none"):
                return 403, "foreign-origin", "Requests from pages of other sites are refused."
            # A browser always names the origin of a form; without one only a program that shows its token is let in.
            if not origins and not headers.get("authorization"):
                return 403, "no-origin", "A change needs the Origin header of this site, or a token."
        if _carries_secret(scope["query_string"]):
            return (
                400,
                "token-in-address",
                "A token does not belong into an address: revoke it, and send it in a header.",
            )
        length = headers.get("content-length", "0")
        if not length.isascii() or not length.isdigit() or int(length[:12]) > _BODY_LIMIT:
            return 413, "too-large", f"A body holds at most {_BODY_LIMIT} bytes."
        return None

    def _known(self, host: str, scope: Scope) -> bool:
        host = host.lower()
        port = (scope.get("server") or ("", None))[1]
        name, number = _split(host)
        if name in LOOPBACK:
            return number == port or (number is None and port in (80, 443))
        return host in self._hosts or name in self._hosts

    def _own(self, origin: str, host: str, scope: Scope) -> bool:
        try:
            parts = urlsplit(origin)
        except ValueError:
            return False
        if parts.scheme not in ("http", "https") or parts.path or parts.query or parts.fragment or "@" in parts.netloc:
            return False
        return parts.netloc.lower() == host.lower() and self._known(parts.netloc, scope)


class _Sender:
    """Adds the headers to every answer, also to those of errors."""

    def __init__(self, send: Send) -> None:
        self._send = send

    async def __call__(self, message: Message) -> None:
        if message["type"] == "http.response.start":
            headers = MutableHeaders(scope=message)
            for name, value in _HEADERS:
                headers.setdefault(name, value)
            headers.setdefault("Content-Security-Policy", PAGE_POLICY)
            headers.setdefault("Cache-Control", "no-store")
        await self._send(message)


class _Limited:
    """Cuts off a body that is longer than it may be, whatever its header said."""

    def __init__(self, receive: Receive) -> None:
        self._receive = receive
        self._seen = 0

    async def __call__(self) -> Message:
        message = await self._receive()
        self._seen += len(message.get("body", b""))
        if self._seen > _BODY_LIMIT:
            return {"type": "http.disconnect"}
        return message


def refusal(scope: Scope, reason: str, status: int, **facts: object) -> None:
    """Log a refused request. The address is logged without its query, which may hold what nobody should read."""
    client = (scope.get("client") or ("unknown", 0))[0]
    log.warning(
        "request refused", reason=reason, status=status, method=scope["method"], path=safe(scope["path"], 200),
        client=safe(str(client)), **facts,
    )  # fmt: skip


def _split(host: str) -> tuple[str, int | None]:
    name, colon, number = host.rpartition(":")
    if not colon or host.endswith("]"):
        return host, None
    return (name, int(number)) if number.isascii() and number.isdigit() and len(number) <= 5 else (host, None)


def _carries_secret(query: bytes) -> bool:
    if not query:
        return False
    text = query.decode("latin-1")
    return PREFIX in _flat(text) or any(name.lower() in SECRET_NAMES for name in _names(text))


def _flat(text: str) -> str:
    return "&".join(f"{name}={value}" for name, value in parse_qsl(text, keep_blank_values=True))


def _names(text: str) -> Iterable[str]:
    return (name for name, _ in parse_qsl(text, keep_blank_values=True))
