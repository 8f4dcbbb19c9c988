"""Charts of counts: labels a day, and the intervals of the weeks."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from typing import Any, Final
from zoneinfo import ZoneInfo

from watcher.records import CellCounts, Terms
from watcher.report.axes import fixed, number_axis, rate_axis, reach, time_axis
from watcher.report.snapshot import DayStanding
from watcher.report.theme import THEMES, Scheme, Spec, chart, inline, label, limit_rule, tips_layer
from watcher.wording import percent, rate

_MOST_DAYS: Final = 400
"""More days than this are shown week by week."""
_DAY_MS: Final = 86_400_000


@dataclass(frozen=True, slots=True)
class DayCounts:
    """What was predicted and labelled on one local day of prediction time."""

    day: date
    predictions: int
    labels: int
    sealed: bool
    """No label of this day will be counted any more."""
    late: int = 0
    """Labels that a look of this day saw for the first time, too late to be counted."""


@dataclass(frozen=True, slots=True)
class WeekBar:
    """The rate of one week with its interval."""

    week: str
    """ISO week, "2026-W48"."""
    start: date
    labels: int
    rate: float | None
    lower: float | None
    """None for a week that is not final yet."""
    upper: float | None


def daily(
    counts: Iterable[CellCounts],
    history: Sequence[DayStanding],
    terms: Terms,
    sealed_until: int,
    key: tuple[str, str] = ("", ""),
) -> tuple[DayCounts, ...]:
    """Counts of one cell by local day, oldest first; days without rows between the first and the last are zeros.

    `history` (oldest first) says on which days late labels were seen: they have no place among the counted ones.
    """
    zone = ZoneInfo(terms.time_zone)
    found: dict[date, list[int]] = {}
    for row in counts:
        if (row.column, row.value) == key:
            day = datetime.fromtimestamp(row.bucket, zone).date()
            entry = found.setdefault(day, [0, 0, 1])
            entry[0] += row.counts.predictions
            entry[1] += row.counts.labels
            entry[2] &= row.bucket < sealed_until
    late: dict[date, int] = {}
    known = 0
    for row_ in history:
        seen = row_.standing.late_labels
        if seen > known:
            late[row_.day] = seen - known
            found.setdefault(row_.day, [0, 0, 0])
        known = max(known, seen)
    if not found:
        return ()
    days = (max(found) - min(found)).days + 1
    every = (min(found) + timedelta(days=i) for i in range(days))
    return tuple(DayCounts(d, *_entry(found.get(d)), late.get(d, 0)) for d in every)


def _entry(entry: list[int] | None) -> tuple[int, int, bool]:
    return (0, 0, True) if entry is None else (entry[0], entry[1], bool(entry[2]))


def labels(
    days: Sequence[DayCounts],
    *,
    width: int | str = 680,
    height: int = 110,
    scheme: Scheme = "light",
    tips: bool = False,
) -> Spec:
    """Predictions and labels a day (a week, beyond 400 days); days that still wait for labels are paler; late labels as ticks."""
    theme, (rows, step) = THEMES[scheme], _by_step(days)
    per = "day" if step == 1 else "week"
    top = 1.15 * max([1, *(max(row["predictions"], row["late"]) for row in rows)])
    first = rows[0]["t"] if rows else 0
    last = rows[-1]["t2"] if rows else 7 * _DAY_MS
    x, y = time_axis(first, last), number_axis(0, top, form="~s")
    to = {"field": "t2"}
    gap = 0.0 if len(rows) > 200 else 1.0
    bar = {"type": "bar", "x2Offset": -gap}
    floor = fixed(height)
    layers: list[Spec] = [
        {
            "data": inline(those),
            "mark": {**bar, "color": colour, "opacity": opacity},
            "encoding": {"x": x, "x2": to, "y": {**y, "field": field, "stack": None}, "y2": floor},
        }
        for field, those, colour, opacity in (
            ("predictions", rows, theme.muted, 0.3),
            ("labels", [row for row in rows if row["sealed"]], theme.accent, 0.9),
            ("labels", [row for row in rows if not row["sealed"]], theme.accent, 0.45),
        )
        if those
    ]
    late = [row for row in rows if row["late"]]
    if late:
        layers.append(
            {
                "data": inline(late),
                "mark": {"type": "tick", "color": theme.ink, "thickness": 2, "size": 8, "orient": "horizontal"},
                "encoding": {"x": x, "y": {**y, "field": "late"}},
            }
        )
    layers.insert(0, reach(first, last, x))
    layers += _key(per, bool(late), scheme)
    if tips and rows:
        fields = (
            ("t", per if step == 1 else "week from", None),
            ("predictions", "predicted", ",d"),
            ("labels", "labelled", ",d"),
            ("late", "late, not counted", ",d"),
        )
        layers.append(tips_layer(rows, x, {**y, "field": "labels"}, fields, scheme))
    told = f"Predictions and labels by {per}, {len(rows)} {per}s."
    return chart(layers, width=width, height=height, scheme=scheme, description=told)


def _key(per: str, late: bool, scheme: Scheme) -> list[Spec]:
    """What is what, said above the plot in the colour of what it names."""
    theme = THEMES[scheme]
    said = [(f"■ predicted a {per}", theme.muted), ("■ labelled (paler: more may come)", theme.accent)]
    if late:
        said.append(("– late, not counted, on the day they were seen", theme.ink))
    places = (0, 112, 318)
    return [
        label(text, x=fixed(place), y=fixed(-10), colour=colour)
        for place, (text, colour) in zip(places, said, strict=False)
    ]


def _by_step(days: Sequence[DayCounts]) -> tuple[list[dict[str, Any]], int]:
    step = 7 if len(days) > _MOST_DAYS else 1
    groups: dict[date, list[DayCounts]] = {}
    for each in days:
        start = each.day if step == 1 else each.day - timedelta(days=each.day.weekday())
        groups.setdefault(start, []).append(each)
    rows = []
    for start, group in groups.items():
        t = int(datetime(start.year, start.month, start.day, tzinfo=UTC).timestamp() * 1000)
        rows.append(
            {
                "t": t,
                "t2": t + step * _DAY_MS,
                "day": start.isoformat(),
                "predictions": sum(each.predictions for each in group),
                "labels": sum(each.labels for each in group),
                "late": sum(each.late for each in group),
                "sealed": all(each.sealed for each in group),
            }
        )
    return rows, step


def weeks(
    bars: Sequence[WeekBar],
    terms: Terms,
    *,
    width: int | str = 680,
    height: int = 150,
    scheme: Scheme = "light",
) -> Spec:
    """The rate of every week with its simultaneous interval against the tolerance; weeks not final yet are rings.

    `bars` oldest first.
    """
    theme = THEMES[scheme]
    rows = [
        {
            "week": bar.week[5:] if len({b.week[:4] for b in bars}) == 1 else bar.week,
            "rate": bar.rate,
            "low": bar.lower,
            "high": bar.upper,
            "final": bar.lower is not None,
        }
        for bar in bars
    ]
    rates = [1.3 * bar.rate for bar in bars if bar.rate is not None]
    tight = sorted(bar.upper for bar in bars if bar.upper is not None)
    typical = [1.15 * tight[len(tight) // 2]] if tight else []
    y = rate_axis(min(1.0, max([2 * terms.tolerance, *rates, *typical])))
    x: Spec = {
        "field": "week",
        "type": "ordinal",
        "sort": None,
        "title": None,
        "axis": {"labelAngle": 0, "labelOverlap": True, "ticks": False, "domain": False},
    }
    shown = [row for row in rows if row["rate"] is not None]
    layers: list[Spec] = [
        {"data": inline(rows), "mark": {"type": "point", "opacity": 0}, "encoding": {"x": x, "y": fixed(height)}},
        {
            "data": inline([row for row in rows if row["final"]]),
            "mark": {"type": "bar", "color": theme.accent, "opacity": 1.6 * theme.band, "width": {"band": 0.5}},
            "encoding": {"x": x, "y": {**y, "field": "low"}, "y2": {"field": "high"}},
        },
        {
            "data": inline([row for row in shown if row["final"]]),
            "mark": {"type": "tick", "color": theme.accent, "thickness": 2, "width": {"band": 0.5}},
            "encoding": {"x": x, "y": {**y, "field": "rate"}},
        },
        {
            "data": inline([row for row in shown if not row["final"]]),
            "mark": {"type": "point", "color": theme.muted, "size": 34, "filled": False, "strokeWidth": 1.3},
            "encoding": {"x": x, "y": {**y, "field": "rate"}},
        },
        *limit_rule(terms.tolerance, f"promised: at most {rate(terms.tolerance)}", y, scheme),
    ]
    newest = next((bar for bar in reversed(bars) if bar.lower is not None and bar.rate is not None), None)
    told = f"Weekly rates with their intervals, {len(bars)} weeks."
    if newest is not None and newest.rate is not None:
        told += f" Newest final week {newest.week}: {percent(newest.rate)}."
    return chart(layers, width=width, height=height, scheme=scheme, description=told)
