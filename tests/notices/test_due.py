"""What is due now. Check values: computed by hand from the calendar; 1 December 2026 is a Tuesday."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

import pytest
from notices.memory import T0

from watcher.notices.base import LogTarget, RouteSpec
from watcher.notices.due import Due, OpenBreach, ReportPlan, due_now, week_start

LOG = LogTarget()
PLAIN = RouteSpec("desk", LOG)
BREACH = OpenBreach("damage-photos", "1", 1, T0)
PLAN = ReportPlan("damage-photos", "1", "mon 06:00", "Europe/Berlin", 0)


def _at(text: str) -> datetime:
    return datetime.fromisoformat(text).replace(tzinfo=UTC)


def _epoch(text: str) -> int:
    return int(_at(text).timestamp())


def test_a_heartbeat_is_due_once_a_period_however_often_one_asks() -> None:
    """The same period start all day, hence the same key; the next day another."""
    route = RouteSpec("desk", LOG, heartbeat=86400)
    starts = [due_now([route], [], [], T0.replace(hour=0) + timedelta(hours=h))[0].period_start for h in (0, 5, 23, 24)]

    assert starts == [_epoch("2026-12-01")] * 3 + [_epoch("2026-12-02")]


def test_a_route_without_heartbeat_has_none() -> None:
    """Nothing is due when nothing happened."""
    assert due_now([PLAIN], [], [], T0) == []


def test_a_daemon_that_was_away_owes_the_present_period_only() -> None:
    """One heartbeat and one reminder after a month, not thirty."""
    route = RouteSpec("desk", LOG, heartbeat=86400)
    found = due_now([route], [BREACH], [], T0 + timedelta(days=30))

    assert [due.kind for due in found] == ["heartbeat", "reminder"]


@pytest.mark.parametrize(("hours", "days"), [(0, None), (23.9, None), (24, 1), (47.9, 1), (48, 2), (240.5, 10)])
def test_the_reminder_comes_daily_from_a_day_after_the_breach_was_noticed(hours: float, days: int | None) -> None:
    """Its period starts at the hour of the breach."""
    found = due_now([PLAIN], [BREACH], [], T0 + timedelta(hours=hours))
    expected = [] if days is None else [int((T0 + timedelta(days=days)).timestamp())]

    assert [due.period_start for due in found] == expected
    assert all((due.subject, due.breach_number) == ("damage-photos/1/1", 1) for due in found)


def test_a_retraining_route_gets_neither_reminder_nor_report() -> None:
    """It carries breaches only."""
    route = RouteSpec("retraining", LOG, retrain=True)

    assert due_now([route], [BREACH], [PLAN], T0 + timedelta(days=9)) == []


def test_a_route_gets_only_what_it_carries_and_only_of_its_promises() -> None:
    """`events` and `promises` hold for periodic notices, too."""
    routes = [
        RouteSpec("breaches", LOG, events=("breach",)),
        RouteSpec("other", LOG, promises=("other",)),
        RouteSpec("both", LOG, events=("reminder", "report")),
    ]
    found = due_now(routes, [BREACH], [PLAN], T0 + timedelta(days=1))

    assert [(due.route, due.kind) for due in found] == [("both", "reminder"), ("both", "report")]


def test_a_report_is_due_from_the_configured_time_of_the_week_in_the_promises_zone() -> None:
    """Monday 06:00 in Berlin is 05:00 UTC in winter."""
    before, after = _at("2026-12-07T04:59:59"), _at("2026-12-07T05:00:00")
    starts = [due_now([PLAIN], [], [PLAN], now)[0].period_start for now in (before, after)]

    assert starts == [_epoch("2026-11-30T05:00:00"), _epoch("2026-12-07T05:00:00")]


def test_no_report_is_owed_for_the_time_before_the_first_look() -> None:
    """A promise first looked at on Tuesday has its first report next Monday."""
    plan = ReportPlan("damage-photos", "1", "mon 06:00", "UTC", int(T0.timestamp()))

    assert due_now([PLAIN], [], [plan], T0 + timedelta(days=2)) == []
    assert due_now([PLAIN], [], [plan], _at("2026-12-07T06:00:00")) == [
        Due("desk", "report", "damage-photos/1", _epoch("2026-12-07T06:00:00"), "damage-photos", "1")
    ]


@pytest.mark.parametrize(
    ("zone", "at", "now", "expected"),
    [
        # Clocks go forward in Berlin on Sunday 28 March 2027 at 02:00: 06:00 is 05:00 UTC before and 04:00 UTC after.
        ("Europe/Berlin", "sun 06:00", "2027-03-27T12:00:00", "2027-03-21T05:00:00"),
        ("Europe/Berlin", "sun 06:00", "2027-03-28T12:00:00", "2027-03-28T04:00:00"),
        # The skipped 02:30 counts with the offset before the change: 01:30 UTC.
        ("Europe/Berlin", "sun 02:30", "2027-03-28T01:29:59", "2027-03-21T01:30:00"),
        ("Europe/Berlin", "sun 02:30", "2027-03-28T01:30:00", "2027-03-28T01:30:00"),
        # Far from Greenwich the local day differs from the UTC day.
        ("Pacific/Auckland", "mon 00:00", "2026-11-29T11:00:00", "2026-11-29T11:00:00"),
        ("Pacific/Auckland", "mon 00:00", "2026-11-29T10:59:59", "2026-11-22T11:00:00"),
    ],
)
def test_the_time_of_the_week_follows_the_zones_clock(zone: str, at: str, now: str, expected: str) -> None:
    """The newest such wall-clock time that is not in the future."""
    assert week_start(at, zone, _at(now)) == _epoch(expected)


def test_the_time_of_the_week_is_never_in_the_future_and_never_more_than_a_week_and_an_hour_back() -> None:
    """Every three hours over a year in a zone with changes of clocks."""
    for step in range(0, 366 * 24, 3):
        now = T0 + timedelta(hours=step)
        back = now.timestamp() - week_start("mon 06:00", "Europe/Berlin", now)
        assert 0 <= back <= 7 * 86400 + 3600
