"""Which heartbeats, reminders and reports are due now: pure, by periods, so that each is made once whoever asks how often."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Final, Literal
from zoneinfo import ZoneInfo

from watcher.notices.base import RouteSpec
from watcher.records import Notice

DAY: Final = 86400
_DAYS: Final = ("mon", "tue", "wed", "thu", "fri", "sat", "sun")


@dataclass(frozen=True, slots=True)
class Due:
    """A notice that no look brings about; its key derives from the ledger, the route and these fields."""

    route: str
    kind: Literal["heartbeat", "reminder", "report"]
    subject: str
    """What the key derives from: `promise/version/breach number`, `promise/version`, "" for a heartbeat."""
    period_start: int
    """Epoch seconds."""
    promise: str = ""
    version: str = ""
    breach_number: int | None = None


@dataclass(frozen=True, slots=True)
class OpenBreach:
    """A breach that stands and that nobody has acknowledged."""

    promise: str
    version: str
    number: int
    noticed: datetime


@dataclass(frozen=True, slots=True)
class ReportPlan:
    """When a promise's weekly report is made: `at` as in "mon 06:00", in `time_zone`; `since`: epoch seconds of its first
    look, before which no report is owed.
    """

    promise: str
    version: str
    at: str
    time_zone: str
    since: int


def due_now(
    routes: Sequence[RouteSpec], breaches: Sequence[OpenBreach], reports: Sequence[ReportPlan], now: datetime
) -> list[Due]:
    """Everything whose present period has begun. The caller adds each to the outbox, whose unique key makes it once.

    Only the present period counts: a daemon that was away for a month owes one heartbeat, not thirty. The first reminder
    comes a day after the breach was noticed; a retraining route gets none.
    """
    found: list[Due] = []
    for route in routes:
        if route.heartbeat is not None:
            found.append(Due(route.name, "heartbeat", "", _floor(now, route.heartbeat)))
        found += [_reminder(route, breach, now) for breach in breaches if _reminds(route, breach, now)]
        for plan in reports:
            start = week_start(plan.at, plan.time_zone, now)
            if route.carries("report", plan.promise) and start > plan.since:
                subject = f"{plan.promise}/{plan.version}"
                found.append(Due(route.name, "report", subject, start, plan.promise, plan.version))
    return found


def notice_of(due: Due, key: str, look: int, now: datetime) -> Notice:
    """The row of the outbox for what is due; `key` as the ledger derives it, `look` the newest one."""
    return Notice(
        key=key,
        route=due.route,
        kind=due.kind,
        promise=due.promise,
        version=due.version,
        look=look,
        event=None,
        state="waiting",
        tries=0,
        next_at=now,
        created=now,
        answer=None,
        breach_number=due.breach_number,
    )


def week_start(at: str, time_zone: str, now: datetime) -> int:
    """The newest time of the week `at` ("mon 06:00") in a zone that is not after `now`, in epoch seconds.

    A wall-clock time that a change of clocks skips or repeats is taken at its first offset, like every time of a zone
    here.
    """
    day, _, clock = at.partition(" ")
    hour, minute = (int(part) for part in clock.split(":"))
    zone = ZoneInfo(time_zone)
    local = now.astimezone(zone)
    back = (local.weekday() - _DAYS.index(day)) % 7
    wall = datetime(local.year, local.month, local.day, hour, minute)  # noqa: DTZ001 - the zone is set once the day is found
    for weeks in (0, 1):
        start = (wall - timedelta(days=back + 7 * weeks)).replace(tzinfo=zone)
        if start.timestamp() <= now.timestamp():
            return int(start.timestamp())
    raise AssertionError("a time of the week lies at most 7 days back")


def _reminds(route: RouteSpec, breach: OpenBreach, now: datetime) -> bool:
    return (
        not route.retrain
        and route.carries("reminder", breach.promise)
        and now.timestamp() - breach.noticed.timestamp() >= DAY
    )


def _reminder(route: RouteSpec, breach: OpenBreach, now: datetime) -> Due:
    noticed = int(breach.noticed.timestamp())
    days = (int(now.timestamp()) - noticed) // DAY
    subject = f"{breach.promise}/{breach.version}/{breach.number}"
    return Due(route.name, "reminder", subject, noticed + days * DAY, breach.promise, breach.version, breach.number)


def _floor(now: datetime, period: int) -> int:
    return int(now.astimezone(UTC).timestamp()) // period * period
