"""The look of every chart: ink on paper, one accent, direct labels in place of legends; light and dark."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal

Spec = dict[str, Any]
Scheme = Literal["light", "dark"]

SCHEMA: Final = "https://vega.github.io/schema/vega-lite/v6.json"
"""A name, not an address that is read: vl-convert holds the schema."""
FONT: Final = "Inter, 'Helvetica Neue', Helvetica, Arial, 'Liberation Sans', 'DejaVu Sans', sans-serif"
MARGIN: Final = 26
"""Pixels above a plot for the labels of marked times."""


@dataclass(frozen=True, slots=True)
class Theme:
    """Colours of one scheme; all text reaches a contrast of 4.5 against `paper`."""

    paper: str
    ink: str
    muted: str
    grid: str
    accent: str
    band: float
    """Opacity of a band of limits."""


THEMES: Final[dict[Scheme, Theme]] = {
    "light": Theme(paper="#ffffff", ink="#1c2126", muted="#5b6470", grid="#e3e6e9", accent="#2f5d86", band=0.16),
    "dark": Theme(paper="#14171a", ink="#e6e8ea", muted="#9aa4ae", grid="#2c3238", accent="#8db6dd", band=0.22),
}


def config(scheme: Scheme) -> Spec:
    """The configuration of a chart: no frame, hairline grid, small muted axes; the background stays transparent."""
    theme = THEMES[scheme]
    return {
        "font": FONT,
        "background": "transparent",
        "view": {"stroke": None},
        # One label for the picture; a name for every bar and tick would be read out one after the other. The figures
        # themselves stand in tables beside it.
        "mark": {"aria": False},
        "axis": {
            "aria": False,
            "labelColor": theme.muted,
            "labelFontSize": 11,
            "titleColor": theme.muted,
            "titleFontSize": 11,
            "titleFontWeight": "normal",
            "domainColor": theme.grid,
            "tickColor": theme.grid,
            "gridColor": theme.grid,
            "gridWidth": 0.75,
            "labelPadding": 5,
            "tickSize": 4,
        },
        "axisX": {"grid": False},
        "axisY": {"domain": False, "ticks": False, "titleAngle": 0, "titleAlign": "left", "titleAnchor": "start"},
        "text": {"color": theme.ink, "fontSize": 11},
        "title": {
            "color": theme.ink,
            "fontSize": 12,
            "fontWeight": 600,
            "anchor": "start",
            "subtitleColor": theme.muted,
            "subtitleFontSize": 11,
            "subtitlePadding": 2,
            "frame": "group",
            "offset": 8,
        },
    }


def chart(layers: list[Spec], *, width: int | str, height: int, scheme: Scheme, description: str) -> Spec:
    """A layered chart with the common configuration; `description` is read out by screen readers."""
    return {
        "$schema": SCHEMA,
        "description": description,
        "width": width,
        "height": height,
        # Room at the right for the names of lines: another font than the one measured with may be wider.
        "padding": {"left": 2, "top": 4, "right": 26, "bottom": 2},
        "autosize": {"type": "fit-x" if width == "container" else "pad", "contains": "padding"},
        "layer": layers,
        "config": config(scheme),
    }


def inline(rows: list[dict[str, Any]]) -> Spec:
    """Data of a layer: plain values, never an address."""
    return {"values": rows}


def label(text: str, *, x: Spec, y: Spec, colour: str, align: str = "left", dx: int = 0, dy: int = 0) -> Spec:
    """A direct label at one place."""
    return {
        "data": inline([{"label": text}]),
        "mark": {"type": "text", "align": align, "baseline": "middle", "dx": dx, "dy": dy, "color": colour},
        "encoding": {"text": {"field": "label", "type": "nominal"}, "x": x, "y": y},
    }


def limit_rule(value: float, text: str, y: Spec, scheme: Scheme) -> list[Spec]:
    """A dashed rule across the chart, named at its left end with a halo that keeps the name legible over what is below."""
    theme = THEMES[scheme]
    # A field and not a datum: the language looks for the extent of a datum in vain and complains in the browser's console.
    place = {**y, "field": "value"}
    rows = [{"value": value, "label": text}]
    rule = {
        "data": inline(rows),
        "mark": {"type": "rule", "color": theme.ink, "strokeDash": [5, 4], "strokeWidth": 1},
        "encoding": {"y": place},
    }
    named = [
        label(text, x={"value": 4}, y=place, colour=theme.paper, dy=-8),
        label(text, x={"value": 4}, y=place, colour=theme.ink, dy=-8),
    ]
    named[0]["mark"] |= {"stroke": theme.paper, "strokeWidth": 4, "strokeJoin": "round"}
    return [rule, *({**each, "data": inline(rows)} for each in named)]


def tips_layer(
    values: list[dict[str, Any]], x: Spec, y: Spec, fields: Sequence[tuple[str, str, str | None]], scheme: Scheme
) -> Spec:
    """Points that show themselves and their figures where the pointer is nearest; (field, title, format) each, no format for a day."""
    tooltip: list[Spec] = []
    for field, title, form in fields:
        tip = {"field": field, "title": title}
        # A unit in UTC keeps the day that of the promise's zone, wherever the reader is. (Text would be the plain way, but
        # the nearest point's text fields come out undefined.)
        when = {"type": "temporal", "timeUnit": "utcyearmonthdate", "format": "%-d %B %Y"}
        tooltip.append(tip | (when if form is None else {"type": "quantitative", "format": form}))
    near: Spec = {"type": "point", "fields": ["t"], "nearest": True, "on": "pointermove", "clear": "pointerout"}
    return {
        "data": inline(values),
        "params": [{"name": "near", "select": near}],
        "mark": {"type": "point", "filled": True, "size": 55, "color": THEMES[scheme].accent},
        "encoding": {
            "x": x,
            "y": y,
            "tooltip": tooltip,
            "opacity": {"condition": {"param": "near", "empty": False, "value": 1}, "value": 0},
        },
    }
