"""ISO weeks in the zone of a promise: names, bounds in time, order."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from typing import Final
from zoneinfo import ZoneInfo

from watcher.errors import UsageError

_NAME: Final = re.compile(r"(\d{4})-W(\d{2})")


@dataclass(frozen=True, slots=True, order=True)
class Week:
    """An ISO week by its Monday."""

    monday: date

    @classmethod
    def parse(cls, text: str) -> Week:
        """The week called "2026-W48". Raises UsageError for anything else, among it a 53rd week of a short year."""
        found = _NAME.fullmatch(text)
        # Week 0 is none, so that a name that does not match meets the same refusal as a week that does not exist.
        year, number = (int(found[1]), int(found[2])) if found else (1, 0)
        try:
            return cls(date.fromisocalendar(year, number, 1))
        except ValueError:
            raise UsageError(
                f"week = {text!r}: is no ISO week; write the year and the week's number, for instance 2026-W48"
            ) from None

    @classmethod
    def of(cls, moment: datetime, zone: str) -> Week:
        """The week that a moment lies in, by the zone's calendar."""
        day = moment.astimezone(ZoneInfo(zone)).date()
        return cls(day - timedelta(days=day.weekday()))

    @property
    def name(self) -> str:
        """As in "2026-W48"."""
        year, number, _ = self.monday.isocalendar()
        return f"{year}-W{number:02d}"

    def shifted(self, weeks: int) -> Week:
        """The week so many weeks later."""
        return Week(self.monday + timedelta(weeks=weeks))

    def since(self, other: Week) -> int:
        """How many weeks after `other` this one is."""
        return (self.monday - other.monday).days // 7

    def start(self, zone: str) -> datetime:
        """Local midnight before its Monday, in UTC."""
        return datetime.combine(self.monday, time(), ZoneInfo(zone)).astimezone(UTC)

    def end(self, zone: str) -> datetime:
        """Local midnight after its Sunday, in UTC."""
        return self.shifted(1).start(zone)
