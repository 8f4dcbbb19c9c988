"""The chart of a plan: how many weeks a rise of the error rate stays unnoticed, from median to 90%."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal

from watcher.report.theme import THEMES, Scheme, Spec, chart, inline, label

Kind = Literal["release", "jump"]
_SIDE: Final[dict[Kind, int]] = {"release": -6, "jump": 6}
"""Pixels above or below the line of a rise."""
_TOLD: Final[dict[Kind, str]] = {
    "release": "● too high from the release (exact)",
    "jump": "● a jump after a long healthy time (simulated)",
}


@dataclass(frozen=True, slots=True)
class DelayBar:
    """One rise in one of the two figures; weeks include the label lag."""

    rise: float
    """Times the tolerance."""
    rate: float
    kind: Kind
    median: float | None
    """None: longer than was looked ahead."""
    p90: float | None


def plan_chart(bars: Sequence[DelayBar], life_weeks: float, *, width: int = 620, scheme: Scheme = "light") -> Spec:
    """Median (dot) to 90% (end of the line) of the weeks until each rise is noticed; both figures, rise by rise.

    `life_weeks` > 0: the service life, where an arrow stands for "longer". Weeks are on a logarithmic scale.
    """
    theme = THEMES[scheme]
    colours: dict[Kind, str] = {"release": theme.muted, "jump": theme.accent}
    known = [weeks for bar in bars for weeks in (bar.median, bar.p90) if weeks is not None and weeks > 0]
    low, top = min([life_weeks, *known]) / 1.3, 1.3 * max([life_weeks, *known])
    rises = [f"{bar.rise:g}x" for bar in bars if bar.kind == "jump"]
    x: Spec = {
        "type": "quantitative",
        "title": "weeks until it is noticed, label lag included",
        "scale": {"type": "log", "domain": [low, top], "nice": False},
        "axis": {"values": _ticks(low, top), "format": "~g", "grid": True},
    }
    y: Spec = {
        "field": "rise",
        "type": "ordinal",
        "sort": None,
        "title": None,
        "scale": {"type": "point", "padding": 0.6, "domain": rises},
        "axis": {"ticks": False, "domain": False, "labelFontSize": 12},
    }
    layers: list[Spec] = _life(life_weeks, x, theme.ink)
    for kind in _SIDE:
        rows = [_row(bar, top) for bar in bars if bar.kind == kind]
        layers += _bars(rows, x, y, colours[kind], _SIDE[kind])
    layers += [
        label(_TOLD[kind], x={"value": 270 * n}, y={"value": -12}, colour=colours[kind]) for n, kind in enumerate(_SIDE)
    ]
    return chart(layers, width=width, height=44 * len(rises) + 10, scheme=scheme, description=_description(bars))


def _row(bar: DelayBar, top: float) -> dict[str, Any]:
    median = top if bar.median is None else bar.median
    return {
        "rise": f"{bar.rise:g}x",
        "median": median,
        "p90": top if bar.p90 is None else bar.p90,
        "reached": bar.median is not None,
        "ends": bar.p90 is not None,
    }


def _bars(rows: list[dict[str, Any]], x: Spec, y: Spec, colour: str, side: int) -> list[Spec]:
    """A line from median to 90%, a dot at the median, a tick at 90%, an arrow where the end is not known."""
    begun = [row for row in rows if row["reached"]]
    longer = [{**row, "text": "→" if row["reached"] else "→ longer"} for row in rows if not row["ends"]]
    place = {"yOffset": side, "color": colour}
    return [
        {
            "data": inline(begun),
            "mark": {"type": "rule", "strokeWidth": 3, "opacity": 0.55, **place},
            "encoding": {"x": {**x, "field": "median"}, "x2": {"field": "p90"}, "y": y},
        },
        {
            "data": inline(begun),
            "mark": {"type": "point", "filled": True, "size": 60, "opacity": 1, **place},
            "encoding": {"x": {**x, "field": "median"}, "y": y},
        },
        {
            "data": inline([row for row in begun if row["ends"]]),
            "mark": {"type": "tick", "orient": "vertical", "size": 10, "thickness": 2, **place},
            "encoding": {"x": {**x, "field": "p90"}, "y": y},
        },
        {
            "data": inline(longer),
            "mark": {"type": "text", "align": "right", "baseline": "middle", "dy": side, "color": colour},
            "encoding": {"x": {**x, "field": "p90"}, "y": y, "text": {"field": "text", "type": "nominal"}},
        },
    ]


def _life(weeks: float, x: Spec, ink: str) -> list[Spec]:
    rows = [{"weeks": weeks, "label": "service life"}]
    place = {**x, "field": "weeks"}
    return [
        {
            "data": inline(rows),
            "mark": {"type": "rule", "color": ink, "strokeDash": [5, 4], "strokeWidth": 1},
            "encoding": {"x": place},
        },
        {
            "data": inline(rows),
            "mark": {"type": "text", "align": "right", "baseline": "top", "dx": -4, "color": ink},
            "encoding": {"x": place, "y": {"value": 2}, "text": {"field": "label", "type": "nominal"}},
        },
    ]


def _ticks(low: float, top: float) -> list[float]:
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(top)) + 1)
    return [step * 10.0**d for d in decades for step in (1, 2, 5) if low <= step * 10.0**d <= top]


def _description(bars: Sequence[DelayBar]) -> str:
    told = [
        f"{bar.rise:g} times: {'longer than a service life' if bar.median is None else f'{bar.median:.1f} weeks'}"
        for bar in bars
        if bar.kind == "jump"
    ]
    return "Weeks until a jump of the error rate is noticed, median. " + "; ".join(told) + "."
