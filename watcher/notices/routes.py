"""Routes from the configuration's tables, and the sender of each."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Final, Literal, Protocol

from watcher.notices.base import (
    CommandTarget,
    LogTarget,
    MailTarget,
    RouteSpec,
    Sender,
    Target,
    WebhookTarget,
)
from watcher.notices.command import CommandSender
from watcher.notices.email import MailSender
from watcher.notices.log import LogSender
from watcher.notices.webhook import WebhookSender

_PORTS: Final[Mapping[str, int]] = {"starttls": 587, "tls": 465, "none": 25}


class RouteKeys(Protocol):
    """The keys of a `[[route]]` table that are read here, as the settings hold them."""

    @property
    def name(self) -> str: ...  # noqa: D102 - docs/configuration.md documents every key
    @property
    def kind(self) -> Literal["log", "webhook", "email", "command"]: ...  # noqa: D102
    @property
    def ca_file(self) -> str | None: ...  # noqa: D102
    @property
    def host(self) -> str | None: ...  # noqa: D102
    @property
    def port(self) -> int | None: ...  # noqa: D102
    @property
    def security(self) -> Literal["starttls", "tls", "none"]: ...  # noqa: D102
    @property
    def username(self) -> str | None: ...  # noqa: D102
    @property
    def sender(self) -> str | None: ...  # noqa: D102
    @property
    def to(self) -> tuple[str, ...]: ...  # noqa: D102
    @property
    def command(self) -> tuple[str, ...]: ...  # noqa: D102
    @property
    def environment(self) -> tuple[str, ...]: ...  # noqa: D102
    @property
    def timeout(self) -> int: ...  # noqa: D102
    @property
    def retrain(self) -> bool: ...  # noqa: D102
    @property
    def events(self) -> tuple[str, ...]: ...  # noqa: D102
    @property
    def heartbeat(self) -> int | None: ...  # noqa: D102
    @property
    def promises(self) -> tuple[str, ...]: ...  # noqa: D102


@dataclass(frozen=True, slots=True)
class Hidden:
    """What the settings read from the environment or from files for one route."""

    url: str | None = field(default=None, repr=False)
    secrets: tuple[str, ...] = field(default=(), repr=False)
    password: str | None = field(default=None, repr=False)
    environment: Mapping[str, str] = field(default_factory=dict, repr=False)
    """The daemon's own variables; only those that the table lists reach a command."""


def route_of(keys: RouteKeys, hidden: Hidden, folder: Path) -> RouteSpec:
    """The route of a table. `folder`: where the relative path of `ca_file` starts.

    ValueError names the route and the key that cannot be used.
    """
    try:
        target = _target(keys, hidden, folder)
        return RouteSpec(keys.name, target, keys.events, keys.heartbeat, keys.retrain, keys.promises)
    except ValueError as error:
        raise ValueError(f"route {keys.name!r}: {error}") from None


def senders(routes: Sequence[RouteSpec], clock: Callable[[], datetime]) -> dict[str, Sender]:
    """A sender for every route, by its name. ValueError names the route whose secret or CA file cannot be used."""
    made: dict[str, Sender] = {}
    for route in routes:
        try:
            made[route.name] = _sender(route.target, clock)
        except ValueError as error:
            raise ValueError(f"route {route.name!r}: {error}") from None
    return made


def _target(keys: RouteKeys, hidden: Hidden, folder: Path) -> Target:
    ca_file = None if keys.ca_file is None else str(folder / keys.ca_file)
    if keys.kind == "webhook":
        return WebhookTarget(hidden.url or "", hidden.secrets, keys.timeout, ca_file)
    if keys.kind == "email":
        return MailTarget(
            host=keys.host or "",
            port=keys.port or _PORTS[keys.security],
            sender=keys.sender or "",
            to=keys.to,
            security=keys.security,
            username=keys.username,
            password=hidden.password,
            timeout=keys.timeout,
            ca_file=ca_file,
        )
    if keys.kind == "command":
        passed = tuple((name, hidden.environment[name]) for name in keys.environment if name in hidden.environment)
        return CommandTarget(keys.command, passed, keys.timeout)
    return LogTarget()


def _sender(target: Target, clock: Callable[[], datetime]) -> Sender:
    if isinstance(target, WebhookTarget):
        return WebhookSender(target, clock)
    if isinstance(target, MailTarget):
        return MailSender(target)
    if isinstance(target, CommandTarget):
        return CommandSender(target)
    return LogSender()
