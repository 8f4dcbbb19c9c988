"""The weekly report as records: a pure function of a snapshot; as of its newest look, never of a clock."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Final

from watcher.bounds.multiplicity import e_bh
from watcher.errors import UsageError
from watcher.records import Cell, Head, Standing, StoredEvent, Terms
from watcher.report.figures import WeekFigures, week_figures
from watcher.report.snapshot import DayStanding, Key, PromiseSnapshot, Published, Snapshot
from watcher.report.week import Week
from watcher.wording import amount, counted, nats, span

FDR: Final = 0.05
_COMPARED: Final = timedelta(days=7)


@dataclass(frozen=True, slots=True)
class CellReport:
    """The whole of a promise or one slice in a weekly report."""

    cell: Cell
    standing: Standing
    weeks: tuple[WeekFigures, ...]
    """Every week from the release to that of the report, oldest first."""
    shown: tuple[WeekFigures, ...]
    """The newest final week and every provisional one after it."""
    changes: tuple[str, ...]
    """What is different from a week earlier, one sentence each."""
    history: tuple[DayStanding, ...]
    """Oldest first."""

    @property
    def focus(self) -> WeekFigures | None:
        """The newest final week."""
        return self.shown[0] if self.shown and self.shown[0].final else None

    @property
    def revised(self) -> tuple[WeekFigures, ...]:
        """Weeks whose figures an earlier report gave otherwise."""
        return tuple(each for each in self.weeks if each.was is not None)


@dataclass(frozen=True, slots=True)
class PromiseReport:
    """One promise version in a weekly report."""

    terms: Terms
    unit: str
    sealed_until: datetime
    cells: tuple[CellReport, ...]
    """The whole first, then slices by their share of the threshold, the largest first."""
    events: tuple[StoredEvent, ...]
    """Recorded since the week of the report began, oldest first."""
    snapshot: PromiseSnapshot

    @property
    def whole(self) -> CellReport:
        """The promise without its slices."""
        return self.cells[0]


@dataclass(frozen=True, slots=True)
class Listed:
    """A slice on the list with a stated false discovery rate."""

    promise: str
    version: str
    column: str
    value: str
    total: float
    threshold: float


@dataclass(frozen=True, slots=True)
class Report:
    """A weekly report; the same ledger and week give the same record."""

    week: Week
    head: Head
    at: datetime
    """Time of the newest look."""
    promises: tuple[PromiseReport, ...]
    listed: tuple[Listed, ...]
    """By e-BH on the current totals of all slices, the largest total first."""
    slices: int
    """How many slices the list was chosen from."""
    fdr: float


def newest_week(found: Snapshot) -> Week:
    """The newest week that had ended at the newest look in the zone of the first promise; the current one before that."""
    if not found.promises:
        raise UsageError("the ledger holds no promise yet: make a look first (`watcher look CONFIG`)")
    terms = found.promises[0].terms
    current = Week.of(found.at, terms.time_zone)
    first = Week.of(datetime.fromtimestamp(terms.released, UTC), terms.time_zone)
    return max(first, current.shifted(-1))


def weekly(found: Snapshot, week: Week | None = None, fdr: float = FDR) -> Report:
    """The report of a week (None: the newest that has ended) as of the newest look of the snapshot.

    For every promise released by then the newest final week up to it and every provisional one after that. Raises
    UsageError when there is no look yet, when the week has not begun, and when nothing was released by its end.
    """
    chosen = newest_week(found) if week is None else week
    promises = tuple(_promise(each, found, chosen) for each in found.promises if _begun(each, found, chosen))
    if not promises:
        raise UsageError(_why_nothing(found, chosen))
    listed, count = _listed(promises, fdr)
    return Report(chosen, found.head, found.at, promises, listed, count, fdr)


def published(report: Report) -> tuple[Published, ...]:
    """The figures of a report in the form in which a later report compares them with its own."""
    return tuple(
        Published(
            promise=each.terms.promise,
            version=each.terms.version,
            column=cell.cell.column,
            value=cell.cell.value,
            week=figures.week.name,
            final=figures.final,
            predictions=figures.predictions,
            labels=figures.labels,
            errors=figures.errors,
            look=report.head.look,
        )
        for each in report.promises
        for cell in each.cells
        for figures in cell.shown
    )


def _begun(each: PromiseSnapshot, found: Snapshot, week: Week) -> bool:
    zone = each.terms.time_zone
    return week.start(zone) < found.at and week.end(zone).timestamp() > each.terms.released


def _why_nothing(found: Snapshot, week: Week) -> str:
    if not found.promises:
        return "the ledger holds no promise yet: make a look first (`watcher look CONFIG`)"
    zone = found.promises[0].terms.time_zone
    if week.start(zone) >= found.at:
        return (
            f"week = {week.name}: it had not begun at the newest look ({found.at:%Y-%m-%d}); the newest that had ended is "
            f"{newest_week(found).name}"
        )
    first = min(each.terms.released for each in found.promises)
    return (
        f"week = {week.name}: no promise was released by its end; the first release was in "
        f"{Week.of(datetime.fromtimestamp(first, UTC), zone).name}"
    )


def _promise(each: PromiseSnapshot, found: Snapshot, week: Week) -> PromiseReport:
    figures = week_figures(each, week, [p for p in found.published if p.look < found.head.look])
    standings = {(s.column, s.value): s for s in each.standings}
    cells = [
        _cell(cell, standings[cell.key], figures[cell.key], each.history.get(cell.key, ()))
        for cell in each.cells
        if cell.key in standings
    ]
    cells.sort(key=_order)
    start = week.start(each.terms.time_zone)
    return PromiseReport(
        terms=each.terms,
        unit=each.unit,
        sealed_until=datetime.fromtimestamp(each.sealed_until, UTC),
        cells=tuple(cells),
        events=tuple(stored for stored in reversed(each.events) if stored.at >= start),
        snapshot=each,
    )


def _order(report: CellReport) -> tuple[bool, float, Key]:
    standing = report.standing
    return (report.cell.column != "", -standing.total / standing.threshold, report.cell.key)


def _cell(
    cell: Cell, standing: Standing, weeks: tuple[WeekFigures, ...], history: tuple[DayStanding, ...]
) -> CellReport:
    final = [i for i, each in enumerate(weeks) if each.final]
    first = final[-1] if final else 0
    return CellReport(cell, standing, weeks, weeks[first:], changes(history, standing), history)


def changes(history: Sequence[DayStanding], now: Standing) -> tuple[str, ...]:
    """What is different from the last standing at least seven days before the newest one, one sentence each."""
    earlier = [row for row in history if history and row.day <= history[-1].day - _COMPARED]
    if not earlier:
        return ("There is no standing of a week earlier to compare with.",)
    then = earlier[-1].standing
    said = []
    if then.state != now.state:
        said.append(f"The state went from {then.state} to {now.state}.")
    up = [flag for flag in now.flags if flag not in then.flags]
    down = [flag for flag in then.flags if flag not in now.flags]
    if up:
        said.append(f"Newly flagged: {', '.join(up)}.")
    if down:
        said.append(f"No longer flagged: {', '.join(down)}.")
    more = now.labels - then.labels
    if more > 0:
        wrong = amount(now.errors - then.errors)
        said.append(f"{counted(more, 'label')} with {wrong} errors entered the evidence.")
        before, after = span(then.life.lower, then.life.upper), span(now.life.lower, now.life.upper)
        if before != after:
            said.append(f"The limits since the release went from {before} to {after}.")
    elif more < 0:
        said.append(f"Corrections took {counted(-more, 'label')} out of the evidence.")
    else:
        said.append("No label entered the evidence.")
    if round(now.total - then.total, 2):
        said.append(f"The total went from {nats(then.total)} to {nats(now.total)} nats of {nats(now.threshold)}.")
    return tuple(said)


def _listed(promises: Sequence[PromiseReport], fdr: float) -> tuple[tuple[Listed, ...], int]:
    slices = [(each.terms, cell.standing) for each in promises for cell in each.cells if cell.cell.column]
    if not slices:
        return (), 0
    chosen = e_bh([standing.total for _, standing in slices], fdr)
    found = [
        Listed(terms.promise, terms.version, s.column, s.value, s.total, s.threshold)
        for (terms, s), take in zip(slices, chosen.tolist(), strict=True)
        if take
    ]
    found.sort(key=lambda each: (-each.total, each.promise, each.version, each.column, each.value))
    return tuple(found), len(slices)
