"""The weekly report on schedule: when it is owed, made once, made up, announced in the same transaction."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from cli.worlds import folder, run

from watcher import assembly, settings
from watcher.daemon import parts as building
from watcher.daemon.children import Children
from watcher.daemon.reporting import MADE_UP, RETRY, Reporting, owed
from watcher.daemon.service import Hooks
from watcher.errors import WatcherError
from watcher.ledger.store import Ledger
from watcher.report.week import Week

FIRST = int(datetime(2026, 1, 6, tzinfo=UTC).timestamp())


def names(now: datetime, archived: tuple[str, ...] = (), at: str = "mon 06:00", zone: str = "UTC") -> list[str]:
    """The weeks owed."""
    return [week.name for week, _ in owed(at, zone, FIRST, now, archived)]


@pytest.mark.parametrize(
    ("now", "at", "zone", "expected"),
    [
        # 5 January 2026 is a Monday (calendar), and the first look is on the 6th.
        (datetime(2026, 1, 12, 5, 59, tzinfo=UTC), "mon 06:00", "UTC", []),
        (datetime(2026, 1, 12, 6, 0, tzinfo=UTC), "mon 06:00", "UTC", ["2026-W02"]),
        (datetime(2026, 1, 12, 5, 0, tzinfo=UTC), "mon 06:00", "Europe/Berlin", ["2026-W02"]),
        (datetime(2026, 1, 14, 9, 0, tzinfo=UTC), "wed 12:00", "UTC", ["2026-W01"]),
        (datetime(2026, 1, 14, 12, 0, tzinfo=UTC), "wed 12:00", "UTC", ["2026-W01", "2026-W02"]),
        (datetime(2026, 3, 31, tzinfo=UTC), "mon 06:00", "UTC", ["2026-W10", "2026-W11", "2026-W12", "2026-W13"]),
    ],
)
def test_a_week_is_owed_from_its_moment_on_and_at_most_four_are(
    now: datetime, at: str, zone: str, expected: list[str]
) -> None:
    """Nothing before the first look, the oldest first, by the clock of the zone."""
    assert names(now, at=at, zone=zone) == expected


def test_what_is_archived_is_not_owed() -> None:
    """A gap in the middle is made up, too."""
    assert names(datetime(2026, 2, 2, 7, tzinfo=UTC), ("2026-W02", "2026-W04")) == ["2026-W03", "2026-W05"]


@dataclass
class Log:
    """Keeps what was said."""

    lines: list[tuple[str, str, dict[str, Any]]] = field(default_factory=list)

    def __getattr__(self, level: str) -> Callable[..., None]:
        return lambda what, **facts: self.lines.append((level, what, facts))


@dataclass
class World:
    """A ledger on disk, a clock that is set by hand, and the reporter."""

    config: Path
    now: datetime
    ledger: Ledger
    seconds: float = 0.0
    ready: bool = True
    log: Log = field(default_factory=Log)
    children: Children = field(default_factory=Children)

    def __post_init__(self) -> None:
        hooks = Hooks(clock=lambda: self.now, timer=lambda: self.seconds)
        self.reporting = Reporting(hooks, self.log, self.children, lambda: self.ready)
        self.parts = building.build(settings.read(self.config), self.children, lambda _: None, hooks.clock)

    def pass_by(self) -> list[tuple[str, int, str]]:
        """One call; what is archived then."""
        self.reporting.make_due(self.ledger, self.parts)
        return [(report.week, report.revision, report.name) for report in self.ledger.reports.listed()]


@pytest.fixture
def world(tmp_path: Path) -> Any:
    """Looked at first on 6 January and then on 29 January."""
    config = folder(tmp_path)
    run("look", config, "--at", "2026-01-06")
    assert run("look", config, "--at", "2026-01-29").exit_code == 0
    with assembly.open_ledger(settings.read(config), write=True) as ledger, ledger.writer():
        yield World(config, datetime(2026, 1, 29, 12, tzinfo=UTC), ledger)


def test_missed_weeks_are_made_up_once_in_a_child_and_announced_with_the_newest(world: World) -> None:
    """Weeks 2 to 4 with every format, one notice a route, delivered by key once; a second call changes nothing."""
    archived = world.pass_by()

    weeks = sorted({week for week, _, _ in archived})
    assert weeks == ["2026-W02", "2026-W03", "2026-W04"]
    assert {revision for _, revision, _ in archived} == {0}
    kinds = [name.rpartition(".")[2] for week, _, name in archived if week == "2026-W04"]
    assert sorted(kinds) == ["csv", "html", "json", "pdf"]
    told = [notice for notice in world.ledger.notices() if notice.kind == "report"]
    assert sorted((notice.route, notice.promise) for notice in told) == [("other", "triage"), ("pager", "triage")]
    assert world.pass_by() == archived
    again = Reporting(Hooks(clock=lambda: world.now), world.log, world.children, lambda: True)
    again.make_due(world.ledger, world.parts)
    assert len(world.ledger.reports.listed()) == len(archived)
    assert [n for n in world.ledger.notices() if n.kind == "report"] == told


def test_an_archived_report_equals_the_one_of_the_command(world: World, tmp_path: Path) -> None:
    """The same ledger and week give the same bytes in and outside the daemon; head and finality are noted."""
    world.now = datetime(2026, 1, 12, 6, 1, tzinfo=UTC)
    world.pass_by()
    assert run("report", world.config, "--week", "2026-W02", "--out", tmp_path / "out").exit_code == 0
    [first, *_] = stored = world.ledger.reports.listed()

    assert first.head == world.ledger.head()
    # Week 2 ends on 12 January, and the label lag is 5 days: final at the look of the 29th.
    assert first.final
    for each in stored:
        content = world.ledger.reports.content(each.week, each.revision, each.name)
        assert content == (tmp_path / "out" / each.name).read_bytes(), each.name
    assert json.loads((tmp_path / "out" / "2026-W02.json").read_bytes())["head"] == first.head.digest


def test_nothing_is_made_before_the_sources_were_tried(world: World) -> None:
    """A daemon that comes back looks first, so that its report does not speak of an old look."""
    world.ready = False

    assert world.pass_by() == []
    world.ready = True
    world.now = datetime(2026, 1, 12, 6, 1, tzinfo=UTC)
    assert {week for week, _, _ in world.pass_by()} == {"2026-W02"}


def test_a_failure_is_logged_kept_from_repeating_at_once_and_made_good_later(world: World) -> None:
    """Nothing is archived and no notice leaves; ten minutes later it is tried again."""
    world.now = datetime(2026, 1, 12, 6, 1, tzinfo=UTC)
    calls = []

    def fails(*arguments: object) -> object:
        calls.append(arguments)
        raise WatcherError("the child process died")

    call, world.children.call = world.children.call, fails  # type: ignore[method-assign,assignment]
    assert world.pass_by() == []
    assert world.pass_by() == []
    assert len(calls) == 1
    assert [(level, facts["detail"]) for level, _, facts in world.log.lines] == [("warning", "the child process died")]
    assert [notice for notice in world.ledger.notices() if notice.kind == "report"] == []
    world.children.call = call  # type: ignore[method-assign]
    world.seconds += RETRY

    assert {week for week, _, _ in world.pass_by()} == {"2026-W02"}


def test_a_daemon_that_stops_leaves_no_half_report(world: World) -> None:
    """The child is refused, nothing is logged as a failure, nothing is archived."""
    world.children.stop()

    assert world.pass_by() == []
    assert world.log.lines == []


def test_report_and_notices_are_one_transaction(world: World) -> None:
    """A ledger that fails while the notices are written keeps no report either."""
    world.now = datetime(2026, 1, 12, 6, 1, tzinfo=UTC)
    with world.ledger.writing() as connection:
        connection.exec_driver_sql(
            "CREATE TRIGGER full BEFORE INSERT ON notice BEGIN SELECT RAISE(ABORT, 'disk full'); END"
        )

    assert world.pass_by() == []
    with world.ledger.writing() as connection:
        connection.exec_driver_sql("DROP TRIGGER full")
    world.seconds += RETRY
    assert {week for week, _, _ in world.pass_by()} == {"2026-W02"}
    assert len([n for n in world.ledger.notices() if n.kind == "report"]) == 2


def test_at_most_four_weeks_back() -> None:
    """The bound is that of the plan."""
    weeks = owed("mon 06:00", "UTC", FIRST, datetime(2026, 1, 6, tzinfo=UTC) + timedelta(weeks=40), ())

    assert len(weeks) == MADE_UP == 4
    assert weeks[-1][0] == Week.parse("2026-W41")
