"""What several commands share: opening a configuration, times on the command line, JSON out."""

from __future__ import annotations

import json
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import click

from watcher.records import Standing

CONFIG = click.argument("config", type=click.Path(path_type=Path))
JSON = click.option("--json", "as_json", is_flag=True, help="Print JSON.")


class Moment(click.ParamType[datetime]):
    """A time with its offset, such as 2026-11-29T06:00:00Z, or a day, which means its beginning in UTC."""

    name = "time"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> datetime:
        """Read the time; a time without an offset is refused unless it is a whole day."""
        if isinstance(value, datetime):
            return value
        try:
            found = datetime.fromisoformat(str(value))
        except ValueError:
            self.fail(f"{value!r} is no time; write for instance 2026-11-29T06:00:00Z or 2026-11-29", param, ctx)
        if found.tzinfo is None:
            if len(str(value)) > len("2026-11-29"):
                self.fail(f"{value!r} has no offset; write for instance {value}Z", param, ctx)
            found = found.replace(tzinfo=UTC)
        return found.astimezone(UTC)


def clock() -> datetime:
    """The wall clock; commands and the daemon are its only readers."""
    return datetime.now(UTC)


def print_json(answer: Any) -> None:
    """JSON for programs: two spaces, no NaN, UTF-8."""
    click.echo(json.dumps(answer, indent=2, allow_nan=False, ensure_ascii=False))


def any_breach(standings: list[Standing] | tuple[Standing, ...]) -> bool:
    """True when a promise or one of its slices is broken."""
    return any(standing.state == "breached" for standing in standings)
