"""Time and rate axes that all charts share."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import UTC, datetime
from itertools import pairwise
from typing import Any, Final
from zoneinfo import ZoneInfo

from watcher.report.theme import Spec

_YEAR_MS: Final = 300 * 86_400_000
"""Spans from here on are labelled by month and year."""
_MONTHS_MS: Final = 60 * 86_400_000


def wall(moment: datetime, zone: str) -> int:
    """Milliseconds whose UTC reading is the wall clock of the zone: an axis in UTC then shows local days."""
    local = moment.astimezone(ZoneInfo(zone)).replace(tzinfo=UTC)
    return round(local.timestamp() * 1000)


def time_axis(first: int, last: int) -> Spec:
    """An x axis labelled for the span from `first` to `last` (wall milliseconds); `reach` makes it that long."""
    span = last - first
    return {
        "field": "t",
        "type": "temporal",
        "title": None,
        "scale": {"type": "utc", "nice": False},
        "axis": {
            "format": "%b %Y" if span >= _YEAR_MS else "%-d %b",
            "tickCount": {"interval": "month", "step": 1} if _MONTHS_MS * 2 < span < _YEAR_MS else 6,
            "labelOverlap": True,
            "labelFlush": True,
        },
    }


def reach(first: int, last: int, x: Spec) -> Spec:
    """A layer that draws nothing and makes the time axis reach from `first` to `last`.

    A domain given as times is not united with the data of other layers (browsers complain, the plot collapses).
    """
    return {
        "data": {"values": [{"t": first}, {"t": max(last, first + 1)}]},
        "mark": {"type": "point", "opacity": 0, "size": 0, "tooltip": None},
        "encoding": {"x": x},
    }


def rate_axis(top: float, title: str | None = None) -> Spec:
    """A y axis of rates from 0 to `top`, in percent; marks beyond are cut at the edge."""
    decimals = 0 if top >= 0.08 else 1 if top >= 0.008 else 2
    return {
        "type": "quantitative",
        "title": title,
        "scale": {"domain": [0, top], "nice": False, "clamp": True},
        "axis": {"format": f".{decimals}%", "tickCount": 5},
    }


def number_axis(low: float, top: float, title: str | None = None, *, form: str = ",.1~f") -> Spec:
    """A y axis of numbers."""
    return {
        "type": "quantitative",
        "title": title,
        "scale": {"domain": [low, top], "nice": False, "clamp": True},
        "axis": {"format": form, "tickCount": 5},
    }


def apart(places: Iterable[float], least: float) -> list[float]:
    """Places of labels (pixels from the top) moved as little as needed to lie `least` apart, order kept."""
    given = list(places)
    order = sorted(range(len(given)), key=lambda i: (given[i], i))
    moved = list(given)
    for before, after in pairwise(order):
        moved[after] = max(moved[after], moved[before] + least)
    return moved


def fixed(value: float) -> dict[str, Any]:
    """A place in pixels."""
    return {"value": value}
