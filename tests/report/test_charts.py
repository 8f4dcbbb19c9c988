from __future__ import annotations

import json
import re
from collections.abc import Iterator
from dataclasses import replace
from datetime import date, timedelta
from typing import Any
from xml.etree import ElementTree as ET

import altair as alt
import pytest
from report.world import DEPOTS, make_snapshot
from wording.invented import HOSTILE, make_standing, make_terms, utc

from watcher.records import CellCounts, Counts, Interval
from watcher.report import charts, render
from watcher.report.axes import apart, wall
from watcher.report.snapshot import DayStanding

WHOLE = make_snapshot().promises[0].history["", ""]
CEDAR = make_snapshot().promises[0].history["depot", "Cedar"]
TERMS = make_snapshot().promises[0].terms
SLICES = [rows for key, rows in make_snapshot().promises[0].history.items() if key[0]]
DAYS = charts.daily(make_snapshot().promises[0].counts, WHOLE, TERMS, make_snapshot().promises[0].sealed_until)
BARS = [
    charts.WeekBar("2026-W51", date(2026, 12, 14), 300, 0.02, 0.01, 0.05),
    charts.WeekBar("2026-W52", date(2026, 12, 21), 280, 0.03, None, None),
    charts.WeekBar("2026-W53", date(2026, 12, 28), 0, None, None, None),
]

SPECS: dict[str, Any] = {
    "bounds": lambda **more: charts.bounds(WHOLE, TERMS, **more),
    "bounds of a breach": lambda **more: charts.bounds(CEDAR, TERMS, **more),
    "bounds before anything": lambda **more: charts.bounds((), TERMS, **more),
    "bounds with tips": lambda **more: charts.bounds(WHOLE, TERMS, tips=True, width="container", **more),
    "total": lambda **more: charts.total(CEDAR, TERMS, **more),
    "total before anything": lambda **more: charts.total((), TERMS, **more),
    "total with tips": lambda **more: charts.total(WHOLE, TERMS, tips=True, **more),
    "labels": lambda **more: charts.labels(DAYS, **more),
    "labels before anything": lambda **more: charts.labels((), **more),
    "labels with tips": lambda **more: charts.labels(DAYS, tips=True, **more),
    "slices": lambda **more: charts.slices(SLICES, TERMS, **more),
    "no slices": lambda **more: charts.slices([], TERMS, **more),
    "weeks": lambda **more: charts.weeks(BARS, TERMS, **more),
    "no weeks": lambda **more: charts.weeks([], TERMS, **more),
}


def leaves(value: Any) -> Iterator[Any]:
    if isinstance(value, dict):
        for each in value.values():
            yield from leaves(each)
    elif isinstance(value, list):
        for each in value:
            yield from leaves(each)
    else:
        yield value


def layer(spec: dict[str, Any], mark: str) -> list[dict[str, Any]]:
    return [each for each in spec["layer"] if each["mark"]["type"] == mark]


def texts(spec: dict[str, Any]) -> list[str]:
    return [row["label"] for each in layer(spec, "text") for row in each["data"]["values"]]


class TestEverySpec:
    @pytest.mark.parametrize("scheme", ["light", "dark"])
    @pytest.mark.parametrize("name", SPECS)
    def test_is_valid_and_can_be_drawn(self, name: str, scheme: str) -> None:
        """The schema of the language accepts it, it is drawn as well-formed SVG, and it says what it is."""
        spec = SPECS[name](scheme=scheme)
        alt.Chart.from_dict(spec)
        root = ET.fromstring(render.svg({**spec, "width": 400} if spec.get("width") == "container" else spec))

        assert root.tag.endswith("svg")
        assert spec["description"] in root.attrib.values()

    @pytest.mark.parametrize("name", SPECS)
    def test_is_made_of_numbers_and_safe_text(self, name: str) -> None:
        """Nothing in it is an address, an expression or other than JSON."""
        spec = SPECS[name]()
        text = json.dumps(spec, allow_nan=False)

        assert not {"url", "expr", "signal", "href", "calculate", "usermeta"} & set(re.findall(r'"(\w+)":', text))
        assert all(each.isprintable() for each in leaves(spec) if isinstance(each, str))

    @pytest.mark.parametrize("name", SPECS)
    def test_is_the_same_twice(self, name: str) -> None:
        """Equal input gives an equal spec."""
        assert SPECS[name]() == SPECS[name]()


class TestDrawing:
    @pytest.mark.parametrize("name", ["bounds", "bounds of a breach", "total", "slices"])
    def test_lines_run_across_the_plot(self, name: str) -> None:
        """Drawn, the longest line reaches over nine tenths of its plot: the axis of time is that of the data."""
        spec = SPECS[name](width=200) if name != "slices" else SPECS[name]()
        width = 200 if name != "slices" else 150
        lines = [
            [float(x) for x in re.findall(r"[ML](-?[\d.]+),", d)] for d in re.findall(r' d="([^"]+)"', render.svg(spec))
        ]
        longest = max(lines, key=lambda xs: len(set(xs)))

        assert len(set(longest)) > 40
        assert 0.9 * width <= max(longest) - min(longest) <= width + 1

    def test_bars_run_across_the_plot(self) -> None:
        """The bars of 63 days fill the width, the first at its start and the last at its end."""
        drawn = render.svg(charts.labels(DAYS, width=630))
        lefts = [float(x) for x in re.findall(r'aria-roledescription="bar"[^>]*d="M([\d.]+),', drawn)] or [
            float(x) for x in re.findall(r' d="M(\d[\d.]*),[\d.]+h[\d.]+v', drawn)
        ]

        assert min(lefts) <= 1
        assert 610 <= max(lefts) <= 630


class TestBounds:
    def test_points_are_the_limits_at_the_ends_of_the_counted_buckets(self) -> None:
        """Every standing is a step at the end of its newest counted bucket."""
        rows = layer(charts.bounds(WHOLE, TERMS), "area")[0]["data"]["values"]

        assert len(rows) == len(WHOLE)
        last = WHOLE[-1].standing
        assert last.counted_until is not None
        assert rows[-1]["t"] == last.counted_until.timestamp() * 1000
        assert (rows[-1]["low"], rows[-1]["high"]) == pytest.approx((last.life.lower, last.life.upper), abs=1e-6)
        assert rows[-1]["labels"] == last.labels

    def test_a_breach_is_marked(self) -> None:
        """The likeliest start and the crossing are named with their dates; without a breach neither is."""
        breach = CEDAR[-1].standing.breach
        assert breach is not None

        told = texts(charts.bounds(CEDAR, TERMS))
        assert "likeliest start 30 Nov 2026" in told
        assert any(text.startswith("total crosses ") for text in told)
        assert not any("likeliest" in text for text in texts(charts.bounds(WHOLE, TERMS)))

    def test_the_tolerance_is_named_at_the_left(self) -> None:
        """The label of the tolerance starts at the left edge, where no line ends."""
        spec = charts.bounds(WHOLE, TERMS)
        named = next(
            each for each in layer(spec, "text") if each["data"]["values"][0]["label"] == "promised: at most 3%"
        )

        assert named["encoding"]["x"] == {"value": 4}
        assert named["data"]["values"][0]["value"] == 0.03

    def test_it_says_what_it_shows(self) -> None:
        """The description for screen readers holds the verdict."""
        assert "is broken, likeliest since 30 November 2026" in charts.bounds(CEDAR, TERMS)["description"]

    def test_local_days(self) -> None:
        """Times are on the wall clock of the zone: midnight in Auckland is drawn as midnight."""
        assert wall(utc(2026, 11, 1, 11), "Pacific/Auckland") == utc(2026, 11, 2).timestamp() * 1000

    def test_long_histories_are_thinned(self) -> None:
        """Ten years of days keep at most 420 points, among them the newest."""
        many = [
            DayStanding(date(2026, 1, 1), i, make_standing(counted_until=utc(2026, 11, 3) + timedelta(days=i)))
            for i in range(3650)
        ]
        kept = charts.thinned(many)

        assert len(kept) <= 420
        assert kept[-1] == many[-1]

    def test_two_looks_between_two_sealings_are_one_point(self) -> None:
        """Looks that counted nothing new draw nothing new; the newest of them stands."""
        rows = [DayStanding(date(2026, 12, i), i, make_standing(total=float(i))) for i in (1, 2, 3)]

        assert charts.thinned(rows) == (rows[-1],)


def test_a_deep_total_is_drawn_at_the_floor() -> None:
    """Minus infinity, which no axis holds, is drawn as -2."""
    rows = [DayStanding(date(2026, 12, 1), 1, make_standing(total=float("-inf")))]
    spec = charts.total(rows, TERMS)

    assert layer(spec, "line")[0]["data"]["values"][0]["total"] == -2.0
    assert "−∞ nats" in texts(spec)


class TestSlices:
    def test_are_ordered_by_total(self) -> None:
        """The slice nearest to its threshold, or farthest beyond, comes first."""
        titles = [each["title"]["text"] for each in charts.slices(SLICES, TERMS)["concat"]]
        totals = {rows[-1].standing.value: rows[-1].standing.total for rows in SLICES}

        assert titles == [f"depot = {name}" for name in sorted(DEPOTS, key=lambda name: -totals[name])]

    def test_share_one_axis(self) -> None:
        """All multiples have the same scale, or they could not be compared."""
        domains = {
            json.dumps(each["layer"][1]["encoding"]["y"]["scale"]) for each in charts.slices(SLICES, TERMS)["concat"]
        }

        assert len(domains) == 1

    def test_at_most_twelve(self) -> None:
        """Two hundred slices draw twelve pictures."""
        many = [
            [DayStanding(date(2026, 12, 1), 1, make_standing(column="depot", value=f"D{i}", total=i / 100))]
            for i in range(200)
        ]
        drawn = charts.slices(many, TERMS)["concat"]

        assert [each["title"]["text"] for each in drawn] == [f"depot = D{i}" for i in range(199, 187, -1)]

    def test_hostile_names(self) -> None:
        """A hostile name is a short visible title, and as SVG it is text and no markup."""
        rows = [[DayStanding(date(2026, 12, 1), 1, make_standing(column="depot", value=HOSTILE))]]
        spec = charts.slices(rows, TERMS)
        drawn = render.svg(spec)

        assert len(spec["concat"][0]["title"]["text"]) <= 30
        assert "<script" not in drawn
        assert ET.fromstring(drawn) is not None


class TestLabels:
    def test_days_without_rows_are_zeros(self) -> None:
        """A gap in the data is a gap in the picture."""
        start = int(utc(2026, 11, 2).timestamp())
        rows = [CellCounts("", "", start + i * 86_400, "", Counts(10, 8, 1)) for i in (0, 3)]
        days = charts.daily(rows, (), make_terms(), start + 86_400)

        assert [(d.day.day, d.predictions, d.labels, d.sealed) for d in days] == [
            (2, 10, 8, True),
            (3, 0, 0, True),
            (4, 0, 0, True),
            (5, 10, 8, False),
        ]

    def test_levels_and_hours_add_up_to_days(self) -> None:
        """Buckets of six hours and several weight levels make one bar a day."""
        start = int(utc(2026, 11, 2).timestamp())
        rows = [
            CellCounts("", "", start + 6 * 3600 * i, level, Counts(5, 4, 0)) for i in range(4) for level in ("0.5", "2")
        ]
        days = charts.daily(rows, (), make_terms(bucket=6 * 3600), start + 86_400)

        assert [(d.predictions, d.labels) for d in days] == [(40, 32)]

    def test_late_labels_show_on_the_day_they_were_seen(self) -> None:
        """The growth of the late count from look to look is drawn."""
        history = [
            DayStanding(date(2026, 11, d), d, make_standing(late_labels=n)) for d, n in ((20, 3), (21, 3), (22, 10))
        ]
        days = charts.daily((), history, make_terms(), 0)
        spec = charts.labels(days)

        assert [(d.day.day, d.late) for d in days] == [(20, 3), (21, 0), (22, 7)]
        assert [row["late"] for row in layer(spec, "tick")[0]["data"]["values"]] == [3, 7]
        assert any("late" in text for text in texts(spec))

    def test_years_are_shown_by_week(self) -> None:
        """Beyond 400 days bars are weeks from Monday, and nothing is lost."""
        days = [charts.DayCounts(date(2026, 1, 1) + timedelta(days=i), 10, 8, sealed=True) for i in range(800)]
        rows = layer(charts.labels(days), "bar")[0]["data"]["values"]

        assert sum(row["predictions"] for row in rows) == 8000
        assert all(date.fromisoformat(row["day"]).weekday() == 0 for row in rows)


def test_provisional_weeks_have_rings_and_no_interval() -> None:
    """Only final weeks have a bar; a provisional one is a ring; one without labels is empty but keeps its place."""
    spec = charts.weeks(BARS, TERMS)

    assert [row["week"] for row in layer(spec, "bar")[0]["data"]["values"]] == ["W51"]
    points = layer(spec, "point")
    assert [row["week"] for row in points[0]["data"]["values"]] == ["W51", "W52", "W53"]
    assert [row["week"] for row in points[1]["data"]["values"]] == ["W52"]


def test_end_labels_keep_apart() -> None:
    """Two labels at nearly one height are moved to the least distance, order kept."""
    assert apart([50.0, 48.0], 13) == [61.0, 48.0]
    assert apart([10.0, 100.0], 13) == [10.0, 100.0]


class TestContrast:
    @pytest.mark.parametrize("scheme", ["light", "dark"])
    def test_text_can_be_read(self, scheme: Any) -> None:
        """Every text colour reaches a contrast of 4.5 on its paper (formula of WCAG 2.1)."""
        theme = charts.THEMES[scheme]
        for colour in (theme.ink, theme.muted, theme.accent):
            assert contrast(colour, theme.paper) >= 4.5


def contrast(first: str, second: str) -> float:
    def luminance(colour: str) -> float:
        parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
        red, green, blue = (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts)
        return 0.2126 * red + 0.7152 * green + 0.0722 * blue

    light, dark = sorted((luminance(first), luminance(second)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


class TestSparkline:
    def test_is_svg_with_a_title(self) -> None:
        """It is well-formed, titled, and ends in a dot."""
        root = ET.fromstring(charts.sparkline([0.1, 0.5, 7.2], 6.9, title="total of <Cedar> & co"))

        assert root[0].text == "total of <Cedar> & co"
        assert [each.tag.rpartition("}")[2] for each in root] == ["title", "path", "polyline", "circle"]

    @pytest.mark.parametrize("values", [[], [1.0], [float(i) for i in range(5000)], [-5.0, -1.0], [0.0, 0.0]])
    def test_stays_inside_its_box_and_small(self, values: list[float]) -> None:
        """However many values there are and however odd, it stays within its size and under 1,500 bytes."""
        drawn = charts.sparkline(values, 6.9, title="total")
        points = re.findall(r"([\d.]+),([\d.-]+)", drawn)

        assert len(drawn) < 1500
        assert all(0 <= float(x) <= 120 and 0 <= float(y) <= 24 for x, y in points)

    def test_colour_comes_from_around(self) -> None:
        """It has no colour of its own, so that it fits light, dark and print."""
        assert "#" not in charts.sparkline([1.0], 2.0, title="t")


class TestRender:
    def test_ids_get_their_prefix(self) -> None:
        """Two pictures in one page must not share ids, or the second is clipped by the first."""
        spec = charts.bounds(WHOLE, TERMS)
        drawn = render.svg(spec, "c7-")
        ids, used = re.findall(r'\bid="([^"]+)"', drawn), re.findall(r"url\(#([^)]+)\)", drawn)

        assert ids
        assert all(each.startswith("c7-") for each in (*ids, *used))
        assert set(used) <= set(ids)
        assert render.svg(spec, "c7-") == drawn

    def test_png(self) -> None:
        """A picture at twice the scale has twice the width (bytes 16 to 20 of a PNG)."""
        spec = charts.total(WHOLE, TERMS, width=200)
        small, large = (render.png(spec, scale) for scale in (1.0, 2.0))

        assert small.startswith(b"\x89PNG")
        width = [int.from_bytes(data[16:20], "big") for data in (small, large)]
        assert width[1] == pytest.approx(2 * width[0], abs=2)


def test_a_wide_limit_does_not_press_the_rest_flat() -> None:
    """With an upper limit of 1 after three labels the axis still ends near the tolerance."""
    early = replace(make_standing(), labels=3, errors=0.0, estimate=0.0, life=Interval(0.0, 1.0))
    spec = charts.bounds([DayStanding(date(2026, 12, 1), 1, early)], TERMS)

    assert layer(spec, "area")[0]["encoding"]["y"]["scale"]["domain"][1] <= 0.15 + 1e-9
