"""An invented ledger's content for tests of the report: seeded counts, and standings that bounds computes from them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from datetime import UTC, date, datetime, timedelta
from fractions import Fraction
from functools import cache
from random import Random
from typing import Any

import numpy as np
from wording.invented import DAY, make_standing, make_terms

from watcher.bounds import windows
from watcher.records import (
    Breach,
    Cell,
    CellCounts,
    Counts,
    Event,
    Head,
    Interval,
    Recent,
    Slice,
    Standing,
    StoredEvent,
    Terms,
)
from watcher.report.snapshot import DayStanding, PromiseSnapshot, Snapshot

DIGEST = "5f" * 32
DEPOTS = ("Alder", "Birch", "Cedar")


def moment(epoch: float) -> datetime:
    return datetime.fromtimestamp(epoch, UTC)


def cells_of(terms: Terms) -> tuple[Cell, ...]:
    names = [(each.column, value) for each in terms.slices for value in each.values]
    if not names:
        return (Cell("", "", Fraction(1), 0),)
    part = Fraction(2, 5 * len(names))
    return (Cell("", "", Fraction(1, 2), 0), *(Cell(*name, part, 0) for name in sorted(names)))


def draw_counts(terms: Terms, days: int, seed: int, volume: int = 60) -> tuple[CellCounts, ...]:
    """Counts of `days` daily buckets; the last depot's errors triple on day 28."""
    draw = Random(seed)
    depots = terms.slices[0].values if terms.slices else ("",)
    rows = []
    for day in range(days):
        start = terms.released + day * DAY
        whole = [0, 0, 0]
        for place, depot in enumerate(depots):
            late = place == len(depots) - 1 and day >= 28
            rate = 0.06 if late else 0.02
            predictions = volume + draw.randrange(20)
            labels = sum(draw.random() < 0.88 for _ in range(predictions))
            errors = sum(draw.random() < rate for _ in range(labels))
            whole = [a + b for a, b in zip(whole, (predictions, labels, errors), strict=True)]
            if terms.slices:
                rows.append(
                    CellCounts("depot", depot, start, "", Counts(predictions, labels, errors, newest=start + 3600))
                )
        rows.append(CellCounts("", "", start, "", Counts(*whole, newest=start + 3600)))
    return tuple(sorted(rows, key=lambda row: (row.column, row.value, row.bucket)))


def standings_of(terms: Terms, cell: Cell, counts: Sequence[CellCounts], sealed: int) -> list[Standing]:
    """Where a cell stands after each of `sealed` buckets, by the formulas of `bounds`."""
    mine = [row.counts for row in counts if (row.column, row.value) == cell.key][:sealed]
    path = np.array([[c.labels, c.errors] for c in mine])
    life = windows.restarts(terms.service_life, terms.bucket)
    risk = float(terms.risk * cell.part)
    bar = math.log(1 / risk)
    totals = windows.totals(path, terms.tolerance, life)
    sums = path.cumsum(axis=0)
    lower, upper = windows.window_limits(sums, np.zeros(len(sums), dtype=int), np.full(len(sums), risk), life)
    crossed = next((i for i, total in enumerate(totals) if total >= bar), None)
    found = []
    for i in range(sealed):
        at = moment(terms.released + (i + 1) * DAY)
        breach = None
        if crossed is not None and i >= crossed:
            noticed = moment(terms.released + (crossed + 1) * DAY + terms.label_lag)
            breach = Breach(
                1, moment(terms.released + (crossed + 1) * DAY), noticed, moment(terms.released + 28 * DAY), 0.0301
            )
        n, k = sums[i].tolist()
        back = path[max(0, i - 27) : i + 1].sum(axis=0).tolist()
        found.append(
            make_standing(
                promise=terms.promise,
                version=terms.version,
                column=cell.column,
                value=cell.value,
                part=float(cell.part),
                state="breached" if breach else "undecided",
                predictions=sum(c.predictions for c in mine[: i + 1]),
                labels=n,
                errors=float(k),
                estimate=k / n if n else None,
                life=Interval(float(lower[i]), float(upper[i])),
                recent=Recent(moment(terms.released + max(0, i - 27) * DAY), back[0], float(back[1]), 0.01, 0.08),
                total=float(totals[i]),
                threshold=bar,
                breach=breach,
                to_decide=None,
                newest_label=at - timedelta(hours=23),
                counted_until=at,
                diagnostics={"labelled_share": 0.88, "unlabelled": 700},
            )
        )
    return found


def make_promise(terms: Terms, days: int = 63, seed: int = 11, unit: str = "parcel") -> tuple[PromiseSnapshot, int]:
    """A promise after `days` days of labels, looked at every night; also the time of the newest look."""
    counts = draw_counts(terms, days, seed)
    sealed = max(0, days - terms.label_lag // DAY)
    cells = cells_of(terms)
    now = terms.released + days * DAY
    history, newest, events = {}, [], []
    for cell in cells:
        found = standings_of(terms, cell, counts, sealed) if sealed else []
        first = moment(terms.released + terms.label_lag + DAY).date()
        history[cell.key] = tuple(DayStanding(first + timedelta(days=i), i + 1, each) for i, each in enumerate(found))
        newest.append(found[-1] if found else _empty(terms, cell))
        breach = newest[-1].breach
        if breach is not None:
            facts = {"number": 1, "at": breach.at.isoformat(), "since": breach.since.isoformat(), "lower": "0.0301"}
            event = Event("breach", terms.promise, terms.version, *cell.key, int(breach.at.timestamp()) - DAY, facts)
            events.append(StoredEvent(40, len(events), breach.noticed, event))
    released = Event(
        "released", terms.promise, terms.version, "", "", None, {"released": moment(terms.released).isoformat()}
    )
    stored = (*reversed(events), StoredEvent(1, 0, moment(terms.released + DAY), released))
    promise = PromiseSnapshot(terms, unit, terms.released + sealed * DAY, cells, counts, tuple(newest), history, stored)
    return promise, now


def _empty(terms: Terms, cell: Cell) -> Standing:
    return make_standing(
        promise=terms.promise,
        version=terms.version,
        column=cell.column,
        value=cell.value,
        part=float(cell.part),
        predictions=0,
        labels=0,
        errors=0.0,
        estimate=None,
        life=Interval(0.0, 1.0),
        total=0.0,
        threshold=math.log(1 / float(terms.risk * cell.part)),
        to_decide=None,
        newest_label=None,
        counted_until=None,
    )


@cache
def make_snapshot(depots: tuple[str, ...] = DEPOTS, days: int = 63, seed: int = 11, look: int = 63) -> Snapshot:
    """One promise with depots as slices; equal arguments give the same object, which nobody may change."""
    slices = (Slice("depot", depots, ("1",) * len(depots)),) if depots else ()
    return snapshot_of(make_terms(slices=slices), days=days, seed=seed, look=look)


def snapshot_of(terms: Terms, *, days: int = 63, seed: int = 11, look: int = 63, **more: Any) -> Snapshot:
    promise, now = make_promise(terms, days, seed, **more)
    return Snapshot(Head(look, DIGEST), moment(now), (promise,))


def renamed(found: Snapshot, name: str) -> Snapshot:
    """The same snapshot with a promise, version and unit of that name."""
    promise = found.promises[0]
    terms = replace(promise.terms, promise=name, version=name, model=name)
    standings = tuple(replace(each, promise=name, version=name) for each in promise.standings)
    events = tuple(
        replace(each, event=replace(each.event, promise=name, version=name, facts={**each.event.facts, name: name}))
        for each in promise.events
    )
    changed = replace(promise, terms=terms, unit=name, standings=standings, events=events)
    return replace(found, promises=(changed,))


def first_day(found: Snapshot) -> date:
    return moment(found.promises[0].terms.released).date()
