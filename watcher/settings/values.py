"""Durations, zones, times and numbers as they stand in the file."""

from __future__ import annotations

import difflib
import re
import zoneinfo
from collections.abc import Sequence
from datetime import UTC, datetime
from decimal import Decimal, InvalidOperation
from typing import Annotated, Final

from pydantic import BeforeValidator, Field

_UNITS: Final = {"s": 1, "m": 60, "h": 3600, "d": 86400, "w": 604800}
BUCKETS: Final = ("1h", "2h", "3h", "4h", "6h", "8h", "12h", "1d")


def seconds(text: object) -> int:
    """Seconds of a duration such as "90s", "10m", "6h", "10d", "52w".

    Raises ValueError for anything else.
    """
    if isinstance(text, bool) or not isinstance(text, str | int):
        raise ValueError(f'{text!r} is not a duration; write a whole number and a unit, for instance "10d"')
    if isinstance(text, int):
        raise ValueError(f'{text} has no unit; write for instance "{text}d" (units: s m h d w)')
    found = re.fullmatch(r"\s*(\d{1,9})\s*([smhdw])\s*", text)
    if not found:
        raise ValueError(f'{text!r} is not a duration; write a whole number and a unit (s m h d w), for instance "10d"')
    return int(found[1]) * _UNITS[found[2]]


def duration(span: int) -> str:
    """The shortest way to write a number of seconds as a duration."""
    for unit in ("w", "d", "h", "m"):
        if span and span % _UNITS[unit] == 0:
            return f"{span // _UNITS[unit]}{unit}"
    return f"{span}s"


def _positive_seconds(text: object) -> int:
    span = seconds(text)
    if span == 0:
        raise ValueError("must be longer than 0")
    return span


def _bucket(text: object) -> int:
    if text not in BUCKETS:
        raise ValueError(f"{text!r} is not a bucket width; allowed: {', '.join(BUCKETS)}")
    return seconds(text)


def _zone(name: object) -> str:
    try:
        zoneinfo.ZoneInfo(str(name))
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
        raise ValueError(
            f'{name!r} is not a known time zone; write an IANA name such as "Europe/Berlin" or "UTC"'
        ) from None
    return str(name)


def _aware(value: object) -> datetime:
    if isinstance(value, str):
        try:
            value = datetime.fromisoformat(value)
        except ValueError:
            raise ValueError(f"{value!r} is not a time; write for instance 2026-11-02T00:00:00Z") from None
    if not isinstance(value, datetime) or value.tzinfo is None:
        raise ValueError(f"{value} has no offset from UTC; write for instance 2026-11-02T00:00:00Z")
    return value.astimezone(UTC)


def _decimal(value: object) -> str:
    if isinstance(value, bool):
        raise ValueError(f"{value!r} is not a number")
    try:
        number = Decimal(str(value).strip())
    except InvalidOperation:
        raise ValueError(f"{value!r} is not a decimal number") from None
    if not number.is_finite() or number <= 0:
        raise ValueError(f"{value!r} must be greater than 0")
    return format(number.normalize(), "f")


def _text(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str | int | float):
        return str(value)
    raise ValueError(f"{value!r} must be text or a number")


Duration = Annotated[int, BeforeValidator(_positive_seconds)]
Span = Annotated[int, BeforeValidator(seconds)]
Zone = Annotated[str, BeforeValidator(_zone)]
Instant = Annotated[datetime, BeforeValidator(_aware)]
Level = Annotated[str, BeforeValidator(_decimal)]
Text = Annotated[str, BeforeValidator(_text)]
Name = Annotated[str, Field(min_length=1, max_length=80, pattern=r"^[^\x00-\x1f\x7f]+$")]


def nearest(word: str, known: Sequence[str]) -> str:
    """A question whether the nearest known word was meant; empty when none is near."""
    close = difflib.get_close_matches(word, known, 1, 0.5)
    return f" (did you mean {close[0]!r}?)" if close else ""
