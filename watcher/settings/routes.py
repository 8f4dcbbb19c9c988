"""The table of a route."""

from __future__ import annotations

from typing import Annotated, Final, Literal

from pydantic import Field, field_validator, model_validator

from watcher.records import EVENTS
from watcher.settings.tables import Table, no_password
from watcher.settings.values import Duration, Name, nearest

DEFAULT_EVENTS: Final = (
    *(event for event in EVENTS if event not in ("labels-resumed", "source-restored")),
    "reminder",
    "report",
)


class RouteTable(Table):
    """One way on which notices leave."""

    name: Name
    kind: Literal["log", "webhook", "email", "command"]
    url: str | None = None
    url_env: str | None = None
    url_file: str | None = None
    secret_env: str | tuple[str, ...] | None = None
    secret_file: str | None = None
    ca_file: str | None = None
    host: str | None = None
    port: Annotated[int, Field(gt=0, le=65535)] | None = None
    security: Literal["starttls", "tls", "none"] = "starttls"
    username: str | None = None
    password_env: str | None = None
    password_file: str | None = None
    sender: str | None = None
    to: tuple[str, ...] = ()
    command: tuple[str, ...] = ()
    environment: tuple[str, ...] = ()
    timeout: Duration = 10
    retrain: bool = False
    events: tuple[str, ...] = DEFAULT_EVENTS
    heartbeat: Duration | None = None
    promises: tuple[str, ...] = ()
    """Only notices of these promises; empty: all."""

    _check = field_validator("url")(no_password)

    @field_validator("events")
    @classmethod
    def _known(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        for event in value:
            if event not in (*EVENTS, "report", "reminder"):
                raise ValueError(
                    f"{event!r} is no event{nearest(event, EVENTS)}; allowed: {', '.join(EVENTS)}, report, reminder"
                )
        return value

    @model_validator(mode="after")
    def _way(self) -> RouteTable:
        if self.kind == "webhook" and sum(x is not None for x in (self.url, self.url_env, self.url_file)) != 1:
            raise ValueError('kind = "webhook" needs exactly one of url, url_env, url_file')
        if self.kind == "email" and not (self.host and self.sender and self.to):
            raise ValueError('kind = "email" needs host, sender and to')
        if self.kind == "command" and not self.command:
            raise ValueError('kind = "command" needs command, a list of arguments')
        return self
