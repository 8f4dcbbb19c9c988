"""Who asks: tokens in a header, sessions in a cookie, roles, and a limit on failures."""

from __future__ import annotations

import hashlib
import ipaddress
import secrets
import threading
from collections import OrderedDict
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Final
from urllib.parse import quote

import structlog
from fastapi import Request
from fastapi.security import HTTPBearer
from starlette.responses import Response

from watcher.errors import UsageError
from watcher.ledger.tokens import Role, digest_of
from watcher.records import Head
from watcher.text import safe
from watcher.web.problems import Refused
from watcher.web.security import refusal
from watcher.web.site import Site

FAILURES: Final = 10
"""Wrong tokens from one address within `WINDOW`; further ones are refused unread."""
WINDOW: Final = timedelta(minutes=1)
LIFE: Final = timedelta(hours=12)
"""How long a session lasts."""
_MOST_ADDRESSES: Final = 1024
_MOST_SESSIONS: Final = 1000
log = structlog.get_logger("watcher.web")
BEARER: Final = HTTPBearer(auto_error=False, description="A token made with `watcher token`; roles read and act.")
"""Names the scheme in the OpenAPI document; the check itself is in `Access`."""


@dataclass(frozen=True, slots=True)
class Visitor:
    """Who asks: the name of the token, or nobody."""

    name: str | None
    role: Role | None

    @property
    def acts(self) -> bool:
        """May acknowledge and see raw rows."""
        return self.role == "act"


NOBODY: Final = Visitor(None, None)


class Limiter:
    """Counts failures by address within a sliding window; remembers a bounded number of addresses."""

    def __init__(self, clock: Callable[[], datetime]) -> None:
        self._clock = clock
        self._seen: OrderedDict[str, list[datetime]] = OrderedDict()
        self._lock = threading.Lock()

    def wait(self, address: str) -> int:
        """Seconds until the address may try again; 0: now."""
        now = self._clock()
        with self._lock:
            kept = [at for at in self._seen.get(address, []) if now - at < WINDOW]
            if len(kept) < FAILURES:
                return 0
            return max(1, int((kept[0] + WINDOW - now).total_seconds()))

    def failed(self, address: str) -> None:
        """Count a failure."""
        now = self._clock()
        with self._lock:
            kept = [at for at in self._seen.pop(address, []) if now - at < WINDOW]
            self._seen[address] = [*kept, now][-FAILURES:]
            while len(self._seen) > _MOST_ADDRESSES:
                self._seen.popitem(last=False)


@dataclass(frozen=True, slots=True)
class _Session:
    digest: str
    """Of the token: a revoked one ends its sessions at once."""
    until: datetime


class Sessions:
    """Signed-in browsers, in the memory of this process: a restart asks for the token again."""

    def __init__(self, clock: Callable[[], datetime]) -> None:
        self._clock = clock
        self._open: OrderedDict[str, _Session] = OrderedDict()
        self._lock = threading.Lock()

    def begin(self, token_digest: str) -> str:
        """A new session; what the cookie holds. Only its hash is kept."""
        drawn = secrets.token_urlsafe(32)
        with self._lock:
            self._open[_hash(drawn)] = _Session(token_digest, self._clock() + LIFE)
            while len(self._open) > _MOST_SESSIONS:
                self._open.popitem(last=False)
        return drawn

    def digest(self, cookie: str) -> str | None:
        """The digest of the token that the session was opened with."""
        with self._lock:
            found = self._open.get(_hash(cookie))
            if found is not None and found.until <= self._clock():
                del self._open[_hash(cookie)]
                return None
            return None if found is None else found.digest

    def end(self, cookie: str) -> None:
        """Forget a session."""
        with self._lock:
            self._open.pop(_hash(cookie), None)


class Access:
    """The gate of every route: who asks, and whether that is enough."""

    def __init__(self, site: Site) -> None:
        self._site = site
        self.limiter = Limiter(site.clock)
        self.sessions = Sessions(site.clock)
        # Browsers accept the prefix only with Secure, over TLS or on loopback.
        self.cookie = "__Host-watcher" if site.tokens_required else "watcher"

    def visitor(self, request: Request) -> Visitor:
        """Who asks. Raises Refused for a wrong token; without one: nobody."""
        given = request.headers.get("authorization")
        if given is not None:
            scheme, _, token = given.partition(" ")
            if scheme.lower() != "bearer":
                raise self._refused(request, 401, "wrong-scheme", "Send the token as: Authorization: Bearer TOKEN.")
            return self.check(request, token.strip())
        cookie = request.cookies.get(self.cookie)
        digest = self.sessions.digest(cookie) if cookie else None
        found = self._site.ledger().tokens.find(digest) if digest else None
        return NOBODY if found is None else Visitor(found.name, found.role)

    def check(self, request: Request, token: str) -> Visitor:
        """Who holds this token. Raises Refused (401, or 429 after too many failures)."""
        address = address_of(request)
        wait = self.limiter.wait(address)
        if wait:
            detail = f"Too many wrong tokens from this address; try again in {wait} seconds."
            raise self._refused(request, 429, "too-many-failures", detail, {"Retry-After": str(wait)})
        found = self._site.ledger().tokens.verify(token)
        if found is None:
            self.limiter.failed(address)
            detail = "This token is unknown or revoked; `watcher token CONFIG list` shows the valid ones."
            raise self._refused(request, 401, "wrong-token", detail)
        return Visitor(found.name, found.role)

    def anyone(self, request: Request) -> Visitor:
        """For pages that need no token: who asks, if that is known."""
        return self.visitor(request)

    def reader(self, request: Request) -> Visitor:
        """Role read or act where tokens are required; anybody on loopback."""
        visitor = self.visitor(request)
        if visitor.role is None and self._site.tokens_required:
            raise self._refused(
                request, 401, "no-token", "A token is needed here; `watcher token CONFIG make` makes one."
            )
        return visitor

    def page_reader(self, request: Request) -> Visitor:
        """The same for a page: who is not signed in is sent to the sign-in page."""
        visitor = self.visitor(request)
        request.state.visitor = visitor
        if visitor.role is None and self._site.tokens_required:
            refusal(request.scope, "no-token", 303)
            raise Refused(303, "no-token", "Sign in first.", {"Location": f"/sign-in?next={quote(request.url.path)}"})
        return visitor

    def acknowledge(self, visitor: Visitor, promise: str, version: str, number: int, why: str) -> Head:
        """Record an acknowledgement under the name of the token. Raises Refused (409) when it does not fit."""
        who = visitor.name or ""
        try:
            head = self._site.acknowledge(promise, version, number, who, why)
        except UsageError as error:
            raise Refused(409, "does-not-fit", safe(str(error), 300)) from error
        log.info(
            "acknowledged", who=safe(who), promise=safe(promise), version=safe(version), breach=number, look=head.look
        )
        return head

    def actor(self, request: Request) -> Visitor:
        """Role act, on loopback too."""
        visitor = self.visitor(request)
        if visitor.role is None:
            raise self._refused(request, 401, "no-token", "A token of the role act is needed here.")
        if not visitor.acts:
            detail = "This token may read; a token of the role act is needed here."
            raise self._refused(request, 403, "role-act-needed", detail, who=visitor.name)
        return visitor

    def sign_in(self, request: Request, token: str, response: Response) -> Visitor:
        """Check a token and open a session for it. Raises Refused."""
        visitor = self.check(request, token)
        drawn = self.sessions.begin(digest_of(token))
        response.set_cookie(
            self.cookie,
            drawn,
            max_age=int(LIFE.total_seconds()),
            path="/",
            secure=self._site.tokens_required or request.url.scheme == "https",
            httponly=True,
            samesite="strict",
        )
        log.info("signed in", who=safe(visitor.name or ""), role=visitor.role, client=address_of(request))
        return visitor

    def sign_out(self, request: Request, response: Response) -> None:
        """End the session."""
        cookie = request.cookies.get(self.cookie)
        if cookie:
            self.sessions.end(cookie)
        response.delete_cookie(
            self.cookie, path="/", secure=self._site.tokens_required, httponly=True, samesite="strict"
        )

    def _refused(
        self,
        request: Request,
        status: int,
        reason: str,
        detail: str,
        headers: dict[str, str] | None = None,
        **facts: object,
    ) -> Refused:
        refusal(request.scope, reason, status, **facts)
        extra = {"WWW-Authenticate": "Bearer"} if status == 401 else {}
        return Refused(status, reason, detail, {**extra, **(headers or {})})


def address_of(request: Request) -> str:
    """The client as the limit counts it: an IPv4 address, or the /64 that one household of IPv6 has."""
    host = request.client.host if request.client else "unknown"
    try:
        found = ipaddress.ip_address(host)
    except ValueError:
        return safe(host)
    if isinstance(found, ipaddress.IPv6Address):
        return str(ipaddress.ip_network((found, 64), strict=False))
    return str(found)


def _hash(cookie: str) -> str:
    return hashlib.sha256(cookie.encode("utf-8", "surrogatepass")).hexdigest()
