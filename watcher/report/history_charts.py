"""Charts of history: limits against the tolerance, the total against its threshold, slices as small multiples."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any, Final

from watcher.records import Breach, Standing, Terms
from watcher.report.axes import apart, fixed, number_axis, rate_axis, reach, time_axis, wall
from watcher.report.snapshot import DayStanding
from watcher.report.theme import MARGIN, THEMES, Scheme, Spec, chart, inline, label, limit_rule, tips_layer
from watcher.text import safe
from watcher.wording import headline, name, nats, percent, rate
from watcher.wording.numbers import short

_SPACE: Final = 13
"""Pixels between two labels at the end of lines."""
_POINTS: Final = 420
"""Points of a line: more than that cannot be told apart at its width."""
_DEEPEST: Final = -2.0
"""Nats below which a total is drawn no lower; nothing is decided down there."""


@dataclass(frozen=True, slots=True)
class _Frame:
    """The times of a chart and what is common to its layers."""

    terms: Terms
    first: int
    last: int
    x: Spec
    width: int | str
    height: int
    scheme: Scheme

    @property
    def end(self) -> Spec:
        """The x of the right edge."""
        return fixed(self.width) if isinstance(self.width, int) else {"value": "width"}

    def at(self, moment: datetime) -> int:
        return min(max(wall(moment, self.terms.time_zone), self.first), self.last)


def bounds(
    rows: Sequence[DayStanding],
    terms: Terms,
    *,
    width: int | str = 680,
    height: int = 220,
    scheme: Scheme = "light",
    tips: bool = False,
) -> Spec:
    """The limits since the release against the tolerance over time, with the newest 28 days and the marks of a breach.

    `rows` oldest first; without a counted bucket the chart shows the tolerance alone.
    """
    theme, shown = THEMES[scheme], thinned(rows)
    frame = _frame(shown, terms, width, height, scheme)
    top = _top(shown, terms)
    values = [_bound_row(row.standing, terms) for row in shown]
    y = rate_axis(top)
    layers: list[Spec] = [
        reach(frame.first, frame.last, frame.x),
        {
            "data": inline(values),
            "mark": {"type": "area", "interpolate": "step-after", "color": theme.accent, "opacity": theme.band},
            "encoding": {"x": frame.x, "y": {**y, "field": "low"}, "y2": {"field": "high"}},
        },
        _line(values, frame, {**y, "field": "recent"}, theme.muted, dash=[2, 2], thickness=1.2),
        _line(values, frame, {**y, "field": "rate"}, theme.accent),
        *limit_rule(terms.tolerance, f"promised: at most {rate(terms.tolerance)}", y, scheme),
    ]
    newest = shown[-1].standing if shown else None
    if newest is not None:
        layers += _ends(_end_labels(newest, theme.accent, theme.muted), frame, y, top)
        layers += _marks(newest.breach, frame) if newest.breach else []
    if tips:
        layers.append(tips_layer(values, frame.x, {**y, "field": "rate"}, _BOUND_TIPS, scheme))
    told = f"Limits since the release over time; {headline(newest, terms)}." if newest else "Nothing counted yet."
    return chart(_filled(layers), width=width, height=height, scheme=scheme, description=safe(told, 200))


def total(
    rows: Sequence[DayStanding],
    terms: Terms,
    *,
    width: int | str = 680,
    height: int = 140,
    scheme: Scheme = "light",
    tips: bool = False,
) -> Spec:
    """The total of the evidence against its threshold over time, in nats."""
    theme, shown = THEMES[scheme], thinned(rows)
    frame = _frame(shown, terms, width, height, scheme)
    values = [_total_row(row.standing, terms) for row in shown]
    bar = shown[-1].standing.threshold if shown else 0.0
    low = min([0.0, *(row["total"] for row in values)])
    top = max([1.2 * bar, 1.0, *(1.05 * row["total"] for row in values)])
    y = number_axis(low, top)
    layers = [
        reach(frame.first, frame.last, frame.x),
        _line(values, frame, {**y, "field": "total"}, theme.accent),
        *(limit_rule(bar, f"broken from {nats(bar)} nats on", y, scheme) if shown else []),
    ]
    newest = shown[-1].standing if shown else None
    if newest is not None:
        layers += _ends([(values[-1]["total"], f"{nats(newest.total)} nats", theme.accent)], frame, y, top, low)
        layers += _marks(newest.breach, frame) if newest.breach else []
    if tips:
        layers.append(tips_layer(values, frame.x, {**y, "field": "total"}, _TOTAL_TIPS, scheme))
    told = f"Total {nats(newest.total)} of {nats(bar)} nats." if newest else "Nothing counted yet."
    return chart(_filled(layers), width=width, height=height, scheme=scheme, description=told)


def slices(
    cells: Sequence[Sequence[DayStanding]],
    terms: Terms,
    *,
    columns: int = 4,
    width: int = 150,
    height: int = 84,
    most: int = 12,
    scheme: Scheme = "light",
) -> Spec:
    """Small multiples of the slices, the largest share of its threshold first, all on the same axes.

    `cells`: the history of each slice, oldest first; at most `most` are drawn.
    """
    drawn = sorted((cell for cell in cells if cell), key=_by_total)[:most]
    thin = [thinned(cell, 120) for cell in drawn]
    top = max([2 * terms.tolerance, *(_top(rows, terms) for rows in thin)])
    small = [
        _small(rows, cell[-1].standing, terms, top, width, height, scheme)
        for rows, cell in zip(thin, drawn, strict=True)
    ]
    told = f"Limits since the release of {len(drawn)} slices, ordered by their total."
    made = chart([], width=width, height=height, scheme=scheme, description=told)
    for key in ("layer", "width", "height", "autosize", "padding"):
        del made[key]
    return {**made, "concat": small, "columns": columns, "spacing": {"row": 22, "column": 26}}


def thinned(rows: Sequence[DayStanding], most: int = _POINTS) -> tuple[DayStanding, ...]:
    """Rows with something counted, one for each end of the counted buckets, at most `most`; the newest is kept."""
    last: dict[datetime, DayStanding] = {}
    for row in rows:
        if row.standing.counted_until is not None:
            last[row.standing.counted_until] = row
    found = [last[key] for key in sorted(last)]
    step = -(-len(found) // most) if found else 1
    return tuple(found[::-1][::step][::-1])


def _frame(rows: Sequence[DayStanding], terms: Terms, width: int | str, height: int, scheme: Scheme) -> _Frame:
    zone = terms.time_zone
    released = wall(datetime.fromtimestamp(terms.released, UTC), zone)
    ends = [wall(row.standing.counted_until, zone) for row in rows if row.standing.counted_until is not None]
    first, last = released, max([released + 7 * 86_400_000, *ends])
    return _Frame(terms, first, last, time_axis(first, last), width, height, scheme)


def _top(rows: Sequence[DayStanding], terms: Terms) -> float:
    """The largest rate that is drawn: early limits near 1 would press everything else into a line."""
    standings = [row.standing for row in rows]
    settled = [s for s in standings if s.labels >= 5 / terms.tolerance] or standings[-1:]
    estimates = [1.25 * s.estimate for s in settled if s.estimate is not None]
    recent = [1.15 * r for s in settled if (r := _recent(s)) is not None]
    last = [1.15 * s.life.upper for s in standings[-1:]]
    return min(1.0, max([2.0 * terms.tolerance, *estimates, *recent, *(min(v, 5 * terms.tolerance) for v in last)]))


def _recent(standing: Standing) -> float | None:
    recent = standing.recent
    return recent.errors / recent.labels if recent is not None and recent.labels else None


def _bound_row(standing: Standing, terms: Terms) -> dict[str, Any]:
    assert standing.counted_until is not None
    return {
        "t": wall(standing.counted_until, terms.time_zone),
        "day": wall(standing.counted_until, terms.time_zone) - 1000,
        "low": _short(standing.life.lower),
        "high": _short(standing.life.upper),
        "rate": None if standing.estimate is None else _short(standing.estimate),
        "recent": None if (recent := _recent(standing)) is None else _short(recent),
        "labels": standing.labels,
    }


def _total_row(standing: Standing, terms: Terms) -> dict[str, Any]:
    assert standing.counted_until is not None
    return {
        "t": wall(standing.counted_until, terms.time_zone),
        "day": wall(standing.counted_until, terms.time_zone) - 1000,
        "total": round(max(standing.total, _DEEPEST), 4),
        "threshold": round(standing.threshold, 4),
        "labels": standing.labels,
    }


def _filled(layers: list[Spec]) -> list[Spec]:
    """Layers that have something to draw: a browser's console complains of the others."""
    return [layer for layer in layers if layer["data"]["values"]]


def _short(value: float) -> float:
    return round(value, 6)


def _line(
    values: list[dict[str, Any]],
    frame: _Frame,
    y: Spec,
    colour: str,
    *,
    dash: list[int] | None = None,
    thickness: float = 1.8,
) -> Spec:
    mark: Spec = {"type": "line", "interpolate": "step-after", "color": colour, "strokeWidth": thickness, "clip": True}
    if dash:
        mark["strokeDash"] = dash
    return {"data": inline(values), "mark": mark, "encoding": {"x": frame.x, "y": y}}


def _end_labels(newest: Standing, accent: str, muted: str) -> list[tuple[float, str, str]]:
    found = []
    if newest.estimate is not None:
        found.append((newest.estimate, f"since release {percent(newest.estimate)}", accent))
    recent = _recent(newest)
    if recent is not None:
        found.append((recent, f"last 28 days {percent(recent)}", muted))
    return found


def _ends(wanted: list[tuple[float, str, str]], frame: _Frame, y: Spec, top: float, low: float = 0.0) -> list[Spec]:
    """Names of the lines at their right ends, moved apart where they would touch."""
    del y
    raw = [(1 - (min(max(value, low), top) - low) / (top - low)) * frame.height for value, _, _ in wanted]
    places = apart(raw, _SPACE)
    return [
        label(text, x=frame.end, y=fixed(place), colour=colour, dx=6)
        for place, (_, text, colour) in zip(places, wanted, strict=True)
    ]


def _marks(breach: Breach, frame: _Frame) -> list[Spec]:
    """The likeliest start of a breach and the crossing: thin rules, named above the plot on two lines."""
    theme, zone = THEMES[frame.scheme], frame.terms.time_zone
    marked = (
        (breach.since, f"likeliest start {short(breach.since, zone)}", [2, 3]),
        (breach.at, f"total crosses {short(breach.at - timedelta(seconds=1), zone)}", [1, 0]),
    )
    rules: list[Spec] = []
    names: list[Spec] = []
    x = {**frame.x, "field": "t"}
    for row, (moment, text, dash) in enumerate(marked):
        at, high = frame.at(moment), -MARGIN + 8 + 12 * row
        rules.append(
            {
                "data": inline([{"t": at}]),
                "mark": {"type": "rule", "color": theme.ink, "strokeWidth": 1, "strokeDash": dash},
                "encoding": {"x": x, "y": fixed(high - 4), "y2": fixed(frame.height)},
            }
        )
        right = (at - frame.first) > 0.6 * (frame.last - frame.first)
        side, shift = ("right", -4) if right else ("left", 4)
        # The halo keeps the name legible where it lies over the other rule.
        for colour, stroke in ((theme.paper, 4), (theme.ink, 0)):
            place = label(text, x=x, y=fixed(high), colour=colour, align=side, dx=shift)
            place["mark"] |= {"stroke": theme.paper, "strokeWidth": stroke, "strokeJoin": "round"} if stroke else {}
            names.append({**place, "data": inline([{"t": at, "label": text}])})
    return [*rules, *names]


_BOUND_TIPS: Final = (
    ("day", "counted up to", None),
    ("rate", "since release", ".2%"),
    ("low", "lower limit", ".2%"),
    ("high", "upper limit", ".2%"),
    ("recent", "last 28 days", ".2%"),
    ("labels", "labels", ",d"),
)
_TOTAL_TIPS: Final = (
    ("day", "counted up to", None),
    ("total", "total (nats)", ".2f"),
    ("threshold", "threshold", ".2f"),
    ("labels", "labels", ",d"),
)


def _by_total(rows: Sequence[DayStanding]) -> tuple[float, str, str]:
    newest = rows[-1].standing
    return (-newest.total / newest.threshold, newest.column, newest.value)


def _small(
    rows: Sequence[DayStanding], newest: Standing, terms: Terms, top: float, width: int, height: int, scheme: Scheme
) -> Spec:
    theme = THEMES[scheme]
    frame = _frame(rows, terms, width, height, scheme)
    values = [_bound_row(row.standing, terms) for row in rows]
    axis = {**rate_axis(top)["axis"], "tickCount": 3}
    y = {**rate_axis(top), "axis": axis}
    x = {**frame.x, "axis": {**frame.x["axis"], "tickCount": 3}}
    state = {"breached": "broken", "supported": "supported", "undecided": "undecided"}[newest.state]
    return {
        "title": {
            "text": safe(name(newest), 30),
            "subtitle": f"{state}, {nats(newest.total)} of {nats(newest.threshold)} nats",
        },
        "width": width,
        "height": height,
        "layer": [
            reach(frame.first, frame.last, x),
            {
                "data": inline(values),
                "mark": {"type": "area", "interpolate": "step-after", "color": theme.accent, "opacity": theme.band},
                "encoding": {"x": x, "y": {**y, "field": "low"}, "y2": {"field": "high"}},
            },
            {
                "data": inline(values),
                "mark": {
                    "type": "line",
                    "interpolate": "step-after",
                    "color": theme.accent,
                    "strokeWidth": 1.5,
                    "clip": True,
                },
                "encoding": {"x": x, "y": {**y, "field": "rate"}},
            },
            {
                "data": inline([{"value": terms.tolerance}]),
                "mark": {"type": "rule", "color": theme.ink, "strokeDash": [4, 3], "strokeWidth": 0.8},
                "encoding": {"y": {**y, "field": "value"}},
            },
        ],
    }
