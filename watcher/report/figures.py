"""The figures of weeks: counts, estimates, and two intervals, for every cell of a promise at once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from fractions import Fraction
from typing import Final

import numpy as np
import numpy.typing as npt

from watcher.bounds.designs import UNIFORM
from watcher.bounds.exact import exact_bounds
from watcher.bounds.noise import true_limits
from watcher.bounds.weekly import week_limits, weeks_of_life
from watcher.path import NOTHING, Levels, add, design_of, entered, estimate, statistic
from watcher.path import total as all_levels
from watcher.records import Cell, Counts, Interval, Terms
from watcher.report.snapshot import Key, PromiseSnapshot, Published
from watcher.report.week import Week

ASSUMPTION: Final = (
    "holds for this one week alone, with a volume fixed beforehand and outcomes that do not react to one another"
)
"""Of the plain exact interval."""


def own_risk(terms: Terms, cell: Cell) -> float:
    """The cell's part of the promise's risk, rounded down."""
    return float(np.nextafter(float(Fraction(terms.risk) * cell.part), 0.0))


@dataclass(frozen=True, slots=True)
class WeekFigures:
    """One week of one cell."""

    week: Week
    ordinal: int
    """1 is the week of the release."""
    start: datetime
    """The release, in the first week."""
    end: datetime
    final: bool
    """Every bucket of the week is sealed."""
    predictions: int
    labelled: int
    """All labelled samples; `labels` are those that the measure counts (the positive ones for `miss`, ...)."""
    labels: int
    errors: float
    estimate: float | None
    interval: Interval | None
    """Holds for all weeks at once and under any drift; None for a week that is not final."""
    exact: Interval | None
    """The plain exact binomial interval of this week alone; None for a week that is not final and where none exists."""
    was: Published | None = None
    """What the newest earlier report said, where it said something else."""


def week_figures(
    found: PromiseSnapshot, until: Week, published: Sequence[Published] = ()
) -> dict[Key, tuple[WeekFigures, ...]]:
    """The figures of every cell for the weeks from the release to `until`, oldest first.

    Final weeks carry the simultaneous interval at their own share of the cell's risk (method.md section 9) and, where one
    label is one trial, the exact one at the cell's whole risk.
    """
    terms, zone = found.terms, found.terms.time_zone
    first = Week.of(datetime.fromtimestamp(terms.released, UTC), zone)
    weeks = [first.shifted(i) for i in range(until.since(first) + 1)]
    edges = np.array([w.start(zone).timestamp() for w in weeks] + [until.end(zone).timestamp()], dtype=np.int64)
    by_week = _by_week(found, edges)
    cells = {
        cell.key: _cell(terms, cell, [by_week[cell.key, i] for i in range(len(weeks))], edges, found.sealed_until)
        for cell in found.cells
    }
    said = {(p.column, p.value, p.week): p for p in sorted(published, key=lambda p: p.look) if _about(p, terms)}
    released = datetime.fromtimestamp(terms.released, UTC)
    result = {}
    for key, rows in cells.items():
        result[key] = tuple(
            _figures(week, i, released, zone, row, said.get((*key, week.name)))
            for i, (week, row) in enumerate(zip(weeks, rows, strict=True))
        )
    return result


def _about(published: Published, terms: Terms) -> bool:
    return (published.promise, published.version) == (terms.promise, terms.version)


@dataclass(frozen=True, slots=True)
class _Row:
    counts: Counts
    labels: int
    errors: float
    estimate: float | None
    final: bool
    interval: Interval | None
    exact: Interval | None


def _by_week(found: PromiseSnapshot, edges: npt.NDArray[np.int64]) -> Mapping[tuple[Key, int], Levels]:
    """Counts of each cell and week by level; weeks without rows are empty."""
    sums: dict[tuple[Key, int], dict[str, Counts]] = {
        (cell.key, i): {} for cell in found.cells for i in range(len(edges) - 1)
    }
    # The first bucket starts at the release, which lies inside the first week, so no bucket comes before the first edge.
    places = np.searchsorted(edges, [row.bucket for row in found.counts], side="right") - 1
    for row, place in zip(found.counts, places.tolist(), strict=True):
        levels = sums.get(((row.column, row.value), place))
        if levels is not None:
            levels[row.level] = add(levels.get(row.level, NOTHING), row.counts)
    return sums


def _cell(
    terms: Terms, cell: Cell, weeks: Sequence[Levels], edges: npt.NDArray[np.int64], sealed_until: int
) -> list[_Row]:
    design = design_of(terms)
    own = own_risk(terms, cell)
    statistics = np.array([statistic(terms, levels) for levels in weeks], dtype=np.int64).reshape(len(weeks), -1)
    counts = [all_levels(levels) if levels else NOTHING for levels in weeks]
    trials = [entered(terms, each) for each in counts]
    final = edges[1:] <= sealed_until
    ordinal = np.arange(1, len(weeks) + 1)
    lower, upper = week_limits(statistics, ordinal, weeks_of_life(terms.service_life), own, design=design)
    intervals = _intervals(terms, lower, upper)
    plain: Sequence[Interval | None] = [None] * len(weeks)
    if design is UNIFORM:
        exact = exact_bounds([n for n, _ in trials], [int(k) for _, k in trials], own)
        plain = _intervals(terms, exact.lower, exact.upper)
    return [
        _Row(
            counts=counts[i],
            labels=trials[i][0],
            errors=float(trials[i][1]),
            estimate=estimate(terms, statistics[i].tolist(), counts[i]),
            final=bool(final[i]),
            interval=intervals[i] if final[i] else None,
            exact=plain[i] if final[i] else None,
        )
        for i in range(len(weeks))
    ]


def _intervals(terms: Terms, lower: npt.ArrayLike, upper: npt.ArrayLike) -> list[Interval]:
    low, high = (np.atleast_1d(np.asarray(each, dtype=np.float64)).tolist() for each in (lower, upper))
    return [Interval(*true_limits(a, b, terms.label_noise)) for a, b in zip(low, high, strict=True)]


def _figures(week: Week, i: int, released: datetime, zone: str, row: _Row, said: Published | None) -> WeekFigures:
    now = (row.counts.predictions, row.labels, row.errors)
    changed = said is not None and (said.predictions, said.labels, said.errors) != now
    return WeekFigures(
        week=week,
        ordinal=i + 1,
        start=max(week.start(zone), released),
        end=week.end(zone),
        final=row.final,
        predictions=row.counts.predictions,
        labelled=row.counts.labels,
        labels=row.labels,
        errors=row.errors,
        estimate=row.estimate,
        interval=row.interval,
        exact=row.exact,
        was=said if changed else None,
    )
