"""The contract of the room: routes, messages, what became of a delivery, and what the outbox must offer.

Nothing here sends anything. A sender turns one `Message` into one `Delivery`; the pass in outbox.py decides what is sent
when; the outbox itself lives in the ledger, which this room knows only by the protocol below.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any, Final, Literal, Protocol
from urllib.parse import urlsplit

from watcher.records import Head, Notice, Standing, StoredEvent, Terms

PERIODIC: Final = ("heartbeat", "reminder", "report")
"""Kinds that no look brings about; each travels alone, with its own key as the id of its message."""
QUIET: Final = ("labels-resumed", "source-restored")
"""Events that a route carries only when it asks for them."""

Outcome = Literal["delivered", "temporary", "permanent", "gone"]


@dataclass(frozen=True, slots=True)
class LogTarget:
    """The daemon's own structured log."""


@dataclass(frozen=True, slots=True)
class WebhookTarget:
    """An HTTP receiver. `url` http or https without user info; `secrets` in the form `whsec_` + base64 of 24 to 64
    bytes, the newest first, none: unsigned; `timeout` in seconds for the whole exchange, > 0; `ca_file` replaces the
    machine's certificate authorities. ValueError names what is wrong without repeating the url or a secret.
    """

    url: str = field(repr=False)
    secrets: tuple[str, ...] = field(default=(), repr=False)
    timeout: float = 10.0
    ca_file: str | None = None

    def __post_init__(self) -> None:
        parts = urlsplit(self.url)
        if parts.scheme not in ("http", "https") or not parts.hostname:
            raise ValueError(f"url: scheme {parts.scheme!r} with host {parts.hostname!r}; allowed: http(s)://host/...")
        if parts.username is not None or parts.password is not None:
            raise ValueError("url: holds user info; receivers tell senders apart by the signature (secret_env)")
        _positive("timeout", self.timeout)


@dataclass(frozen=True, slots=True)
class MailTarget:
    """A mail server. `security`: `starttls` refuses to go on without it, `tls` from the first byte, `none` only for a
    relay on this machine (then no password is sent); `timeout` in seconds for each answer of the server, > 0.
    """

    host: str
    port: int
    sender: str
    to: tuple[str, ...]
    security: Literal["starttls", "tls", "none"] = "starttls"
    username: str | None = None
    password: str | None = field(default=None, repr=False)
    timeout: float = 10.0
    ca_file: str | None = None

    def __post_init__(self) -> None:
        _positive("timeout", self.timeout)
        for key, address in [("sender", self.sender), *(("to", address) for address in self.to)]:
            if not re.fullmatch(r"[^\s@<>,;:\x00-\x1f\x7f]+@[^\s@<>,;:\x00-\x1f\x7f]+", address):
                raise ValueError(f"{key}: {address!r} is no bare mail address; allowed: name@host")
        if not self.to:
            raise ValueError("to: is empty; name at least one address")
        if self.security == "none" and self.password is not None:
            raise ValueError('security: "none" would send the password in clear; use "starttls" or "tls"')


@dataclass(frozen=True, slots=True)
class CommandTarget:
    """A program on this machine. `arguments` is run as it stands, without a shell; `environment` is all that the program
    gets of ours (name, value); `timeout` in seconds, > 0, after which the whole process group is killed.
    """

    arguments: tuple[str, ...]
    environment: tuple[tuple[str, str], ...] = field(default=(), repr=False)
    timeout: float = 10.0

    def __post_init__(self) -> None:
        _positive("timeout", self.timeout)
        if not self.arguments:
            raise ValueError('command: is empty; write a list of arguments, for instance ["/usr/local/bin/page-me"]')


Target = LogTarget | WebhookTarget | MailTarget | CommandTarget


@dataclass(frozen=True, slots=True)
class RouteSpec:
    """One way on which notices leave. `events`: the kinds it carries; `promises`: only these, empty: all;
    `heartbeat`: seconds between signs of life, None: none. A `retrain` route carries breaches only.
    """

    name: str
    target: Target
    events: tuple[str, ...] = ()
    """Empty: every kind but `labels-resumed` and `source-restored`."""
    heartbeat: int | None = None
    retrain: bool = False
    promises: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if self.heartbeat is not None and self.heartbeat <= 0:
            raise ValueError(f'route {self.name!r}: heartbeat = {self.heartbeat} must be longer than 0, as in "1d"')

    def carries(self, kind: str, promise: str = "") -> bool:
        """Whether a notice of this kind about this promise ("": about a source or the daemon) goes on this route."""
        if promise and self.promises and promise not in self.promises:
            return False
        if kind == "heartbeat":
            return self.heartbeat is not None
        if self.retrain:
            return kind == "breach"
        return kind in self.events if self.events else kind not in QUIET

    @property
    def address(self) -> str:
        """12 hex digits that change with the receiver and reveal nothing of it: what a 410 is remembered by."""
        target = self.target
        where = target.url if isinstance(target, WebhookTarget) else repr(target)
        return hashlib.sha256(where.encode()).hexdigest()[:12]


@dataclass(frozen=True, slots=True)
class Attachment:
    """A file that travels with a message."""

    name: str
    media_type: str
    text: str


@dataclass(frozen=True, slots=True)
class Item:
    """What one notice says."""

    key: str
    kind: str
    promise: str
    version: str
    column: str
    value: str
    """The slice; both empty: the whole."""
    at: datetime
    sentence: str
    """What happened, in plain words with numbers, window, dates and risk; outside text in it is safe to show."""
    now: str
    """Where the promise or its slice stands when the message is written; "" where that is not known."""
    advice: str
    """What to do next."""
    where: str
    """An address where more is to be seen; "" while none is known."""
    facts: Mapping[str, Any] = field(default_factory=dict)
    """The same as numbers, as the ledger recorded them."""


@dataclass(frozen=True, slots=True)
class Message:
    """What is sent at once over one route; the same `id` however often it is tried."""

    id: str
    route: str
    type: str
    """`watcher.notices`, `watcher.retraining`, `watcher.heartbeat`, `watcher.reminder`, `watcher.report`."""
    source: str
    """URN of the ledger."""
    subject: str
    """The promise, or the look when several promises are told of; never empty."""
    title: str
    """One line for the subject of a mail; without control characters."""
    time: datetime
    look: int
    """The look that the notices belong to."""
    head: Head
    """The newest look of the ledger when the message was written, and the digest of the chain up to it."""
    items: tuple[Item, ...]
    standings: tuple[Mapping[str, Any], ...] = ()
    """Where the promises named stand now, in the form of the look's JSON."""
    attachments: tuple[Attachment, ...] = ()


@dataclass(frozen=True, slots=True)
class Delivery:
    """What became of one try. `answer` is one safe line; `unreachable`: nothing answered, so that the rest of the route
    need not be tried in this pass; `status` and `reference` are what a retraining receiver said, if it did.
    """

    outcome: Outcome
    answer: str
    unreachable: bool = False
    status: Literal["accepted", "refused"] | None = None
    reference: str | None = None

    @property
    def recorded(self) -> str:
        """The line that the ledger keeps."""
        said = [f"status {self.status}"] if self.status else []
        said += [f"reference {self.reference}"] if self.reference else []
        return "; ".join([self.answer, *said])


class Sender(Protocol):
    """One file for each kind of route."""

    def deliver(self, message: Message) -> Delivery:
        """Try once. Never raises for anything that the receiver or the network does."""
        ...


class Outbox(Protocol):
    """What the sending pass needs of the ledger."""

    def waiting(self, route: str) -> Sequence[Notice]:
        """Every notice of the route in state `waiting`, due or not, by look and event, periodic ones last of their look."""
        ...

    def ended(self, route: str, mark: str) -> bool:
        """Whether a notice of this route was given up with an answer that begins with `mark`."""
        ...

    def withdrawn(self, notice: Notice) -> bool:
        """Whether every breach that this notice tells of was withdrawn since."""
        ...

    def message_id(self, route: str, look: int) -> str:
        """hash(ledger id, route, look): the id of the message that carries the notices of one look."""
        ...

    def settle(self, notices: Sequence[Notice]) -> None:
        """Record state, tries, next_at and answer of these notices, as they stand here, in one transaction."""
        ...


class Archive(Protocol):
    """What the words of a notice are taken from."""

    @property
    def ledger_id(self) -> str:
        """The ledger's own id."""
        ...

    def head(self) -> Head:
        """The newest look with the digest of the chain up to it."""
        ...

    def event(self, look: int, n: int) -> StoredEvent:
        """One event."""
        ...

    def terms(self, promise: str, version: str) -> Terms:
        """The frozen terms."""
        ...

    def standings(self, promise: str, version: str) -> Sequence[Standing]:
        """Where the promise and its slices stand now, the whole first."""
        ...

    def counts(self, promise: str, version: str) -> Sequence[Any]:
        """Every `CellCounts` of the promise."""
        ...


def _positive(key: str, value: float) -> None:
    if not value > 0:
        raise ValueError(f"{key} = {value} must be more than 0 seconds")
