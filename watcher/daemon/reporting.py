"""The weekly report on schedule: made in a child process, archived together with the notices that announce it."""

from __future__ import annotations

import json
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any, Final

from watcher import assembly
from watcher.daemon.children import Cancelled, Children
from watcher.daemon.parts import Parts
from watcher.errors import UsageError, WatcherError
from watcher.ledger.keys import period_key
from watcher.ledger.store import Ledger
from watcher.notices.due import ReportPlan, due_now, notice_of, week_start
from watcher.records import Head, StoredTerm
from watcher.report import render
from watcher.report.files import DEFAULT, FORMATS, contents
from watcher.report.json_form import published_from
from watcher.report.page import Draw
from watcher.report.snapshot import Published, snapshot
from watcher.report.week import Week
from watcher.report.weekly import Report, weekly

if TYPE_CHECKING:
    from watcher.daemon.service import Hooks

MADE_UP: Final = 4
"""Weeks that a daemon which was away reports afterwards, at most."""
TIMEOUT: Final = 600.0
RETRY: Final = 600.0
"""Seconds after a report that could not be made."""


@dataclass(frozen=True, slots=True)
class Made:
    """A report as it comes out of the child."""

    head: Head
    final: bool
    """Every promise's figures of its week are final."""
    files: tuple[tuple[str, bytes], ...]
    note: str
    """Why a format was left out."""


class Reporting:
    """Makes the reports that are due, the oldest first."""

    def __init__(self, hooks: Hooks, log: Any, children: Children, ready: Callable[[], bool]) -> None:
        self._hooks = hooks
        self._log = log
        self._children = children
        self._ready = ready
        """Whether every source was tried: a daemon that comes back looks before it reports."""
        self._done: tuple[str, int] | None = None
        """Time of the week and its newest moment for which nothing is owed any more."""
        self._retry_at = float("-inf")

    def make_due(self, ledger: Ledger, parts: Parts) -> None:
        """Make and archive every report that is owed now; never raises."""
        try:
            if self._ready() and self._hooks.timer() >= self._retry_at:
                self._make_due(ledger, parts)
        except Cancelled:
            return
        except WatcherError as error:
            self._later("the weekly report could not be made; it is tried again later", str(error))
        except Exception:  # noqa: BLE001 - logged with its trace; the daemon must outlive it
            self._retry_at = self._hooks.timer() + RETRY
            self._log.exception("the weekly report failed unexpectedly; it is tried again later")

    def _later(self, what: str, detail: str) -> None:
        self._retry_at = self._hooks.timer() + RETRY
        self._log.warning(what, detail=detail)

    def _make_due(self, ledger: Ledger, parts: Parts) -> None:
        now, at, terms = self._hooks.clock(), parts.settings.report.at, ledger.terms()
        if not terms:
            return
        zone = terms[0].terms.time_zone
        mark = (at, week_start(at, zone, now))
        if self._done == mark:
            return
        first = _first_looks(ledger, terms)
        archived = {report.week for report in ledger.reports.listed()}
        for week, start in owed(at, zone, min(first.values(), default=int(now.timestamp())), now, archived):
            notices = []
            if start == mark[1]:
                # A daemon that was away owes the present notice, not all that it missed.
                plans = [ReportPlan(*name, at, zone, since) for name, since in first.items()]
                notices = [each for each in due_now(parts.routes, (), plans, now) if each.kind == "report"]
            made = self._render(parts, week)
            keyed = [
                notice_of(n, period_key(ledger.id, n.route, n.kind, n.subject, n.period_start), made.head.look, now)
                for n in notices
            ]
            revision = ledger.reports.add(
                week.name, made.files, head=made.head, created=now, final=made.final, notices=keyed
            )
            told = {"week": week.name, "revision": revision, "look": made.head.look, "head": made.head.digest}
            self._log.info("weekly report archived", **told, notices=len(keyed), note=made.note)
        self._done = mark

    def _render(self, parts: Parts, week: Week) -> Made:
        settings = parts.settings
        nouns = {name: noun for (name, _), noun in assembly.units(settings).items()}
        return self._children.call(TIMEOUT, _made, settings.ledger_url(), week.name, nouns, settings.report.fdr)


def owed(at: str, zone: str, since: int, now: datetime, archived: Collection[str]) -> list[tuple[Week, int]]:
    """Weeks whose report is owed at `now`, the oldest first, each with the moment (epoch seconds) at which it fell due.

    `at` ("mon 06:00" in `zone`) is when the report of the week before falls due; nothing is owed that fell due before
    the first look (`since`, epoch seconds), and at most `MADE_UP` weeks are.
    """
    found: list[tuple[Week, int]] = []
    moment = now
    for _ in range(MADE_UP):
        start = week_start(at, zone, moment)
        week = Week.of(datetime.fromtimestamp(start, UTC), zone).shifted(-1)
        if start > since and week.name not in archived:
            found.append((week, start))
        moment = datetime.fromtimestamp(start - 1, UTC)
    return found[::-1]


def reported(ledger: Ledger, week: Week | None, nouns: Mapping[str, str], fdr: float) -> Report:
    """The report of a week (None: the newest that has ended) as of the newest look, compared with the archived ones.

    `nouns`: promise -> noun of its configuration. Raises UsageError as `weekly` does.
    """
    return weekly(snapshot(ledger, units=nouns, published=_archived(ledger)), week, fdr)


def drawn_once(draw: Draw = render.svg) -> Draw:
    """A function that draws each spec once, however many formats want it."""
    known: dict[tuple[str, str], str] = {}

    def drawn(spec: dict[str, Any], prefix: str = "") -> str:
        key = (json.dumps(spec, sort_keys=True), prefix)
        if key not in known:
            known[key] = draw(spec, prefix)
        return known[key]

    return drawn


def _archived(ledger: Ledger) -> list[Published]:
    found: list[Published] = []
    for each in ledger.reports.listed():
        content = ledger.reports.content(each.week, each.revision, each.name) if each.name.endswith(".json") else None
        if content is not None:
            found += published_from(content.decode())
    return found


def _first_looks(ledger: Ledger, terms: list[StoredTerm]) -> dict[tuple[str, str], int]:
    """When each open promise was looked at for the first time, epoch seconds."""
    wanted = {(each.terms.promise, each.terms.version) for each in terms}
    events = ledger.events(kinds=("released",), limit=100_000)
    found = {(e.event.promise, e.event.version): int(e.at.timestamp()) for e in events}
    return {name: at for name, at in found.items() if name in wanted}


def _made(url: str, week: str, nouns: Mapping[str, str], fdr: float) -> Made:
    """In the child: charts and PDF need libraries that the daemon's own process does not load."""
    with Ledger.open(url, write=False, create=False) as ledger:
        report = reported(ledger, Week.parse(week), nouns, fdr)
    draw, note = drawn_once(), ""
    try:
        made = contents(report, FORMATS, draw)
    except UsageError as error:
        made, note = contents(report, DEFAULT, draw), str(error)
    files = tuple((f"{week}.{name}", content) for name, content in made.items())
    final = all(each.whole.shown and each.whole.shown[-1].final for each in report.promises)
    return Made(report.head, final, files, note)
