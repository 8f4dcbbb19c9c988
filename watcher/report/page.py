"""The weekly report as one self-contained HTML page: inline style, inline SVG, no script, no address that is fetched."""

from __future__ import annotations

from collections.abc import Callable
from datetime import timedelta
from functools import cache
from typing import Any, Final

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup, escape

from watcher import wording
from watcher.records import Interval, Terms
from watcher.report import charts, render
from watcher.report.figures import ASSUMPTION, WeekFigures, own_risk
from watcher.report.theme import Spec
from watcher.report.weekly import CellReport, PromiseReport, Report
from watcher.text import safe
from watcher.wording import numbers

Draw = Callable[[Spec, str], str]
"""(spec, prefix of the ids inside) -> SVG text."""

_WIDTH: Final = 540
_WEEKS: Final = 16
"""Weeks in the picture of weeks."""
_BREACHED: Final = 3
"""Broken slices that get a picture of their own."""
_EVENTS: Final = 60
"""Events that the page lists; the JSON has them all."""
_NOTHING: Final = "–"


def as_html(report: Report, draw: Draw = render.svg) -> str:
    """The report as HTML; the same report gives the same bytes. `draw` turns a spec into SVG (default: `render.svg`)."""
    count = iter(range(10_000))

    def picture(spec: Spec) -> Markup:
        # What vl-convert draws is made of our specs alone, and its text nodes are escaped: the one markup let through.
        return Markup(draw(spec, f"c{next(count)}-"))  # noqa: S704

    pages = [_promise(each, picture) for each in report.promises]
    listed = [
        {
            "promise": _title(each.promise, each.version),
            "name": f"{safe(each.column)} = {safe(each.value) or '(empty)'}",
            "total": wording.nats(each.total),
            "threshold": wording.nats(each.threshold),
        }
        for each in report.listed
    ]
    zone = report.promises[0].terms.time_zone
    return (
        _environment()
        .get_template("weekly.html")
        .render(
            week=report.week.name,
            dates=numbers.period(report.week.start(zone), report.week.end(zone), zone),
            look=f"{report.head.look:,}",
            recorded=wording.moment(report.at, zone),
            zone=zone,
            head=report.head,
            promises=pages,
            listed=listed,
            slices=report.slices,
            fdr=numbers.rate(report.fdr),
            cautions=wording.CAUTIONS,
        )
    )


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("watcher.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["code"] = _code
    return environment


def _code(text: str) -> Markup:
    """What stands between backticks as code; everything is escaped first."""
    pieces = [escape(piece) for piece in text.split("`")]
    return Markup("").join(Markup("<code>{}</code>").format(p) if i % 2 else p for i, p in enumerate(pieces))


def _summary(each: PromiseReport) -> str:
    text = wording.headline(each.whole.standing, each.terms)
    slices = [cell.standing for cell in each.cells[1:]]
    broken = sum(standing.state == "breached" for standing in slices)
    if broken:
        text += f"; in {broken} of its {wording.counted(len(slices), 'slice')} it is broken"
    return text[0].upper() + text[1:] + "."


def _title(promise: str, version: str) -> str:
    return f"{safe(promise)}, version {safe(version)}"


def _promise(each: PromiseReport, picture: Callable[[Spec], Markup]) -> dict[str, Any]:
    terms, whole = each.terms, each.whole
    slices = each.cells[1:]
    return {
        "title": _title(terms.promise, terms.version),
        "state": whole.standing.state,
        "summary": _summary(each),
        "sentence": wording.sentence(whole.standing, terms, each.unit),
        "broken": [
            wording.sentence(cell.standing, terms, each.unit) for cell in slices if cell.standing.state == "breached"
        ],
        "flags": wording.flag_sentences(whole.standing, terms),
        "steps": _steps(each),
        "weeks": [_week(figures, terms) for figures in whole.shown],
        "several": len(whole.shown) > 1,
        "lag": numbers.duration(terms.label_lag),
        "final": whole.focus is not None,
        "risk": numbers.one_in(own_risk(terms, whole.cell)),
        "assumption": ASSUMPTION if whole.focus is not None and whole.focus.exact is not None else "",
        "standings": [_standing(cell) for cell in each.cells],
        "pictures": _pictures(each, picture),
        "slices": _slice_tables(each),
        "changes": [(wording.name(cell.standing), cell.changes) for cell in each.cells],
        "events": [
            (wording.moment(stored.at, terms.time_zone), wording.event_sentence(stored.event, terms), stored.look)
            for stored in each.events[-_EVENTS:]
        ],
        "more_events": max(0, len(each.events) - _EVENTS),
        "diagnostics": wording.diagnostic_sentences(whole.standing, terms),
        "revisions": [_revision(cell, figures) for cell in each.cells for figures in cell.revised],
        "method": wording.method(terms),
        "budgets": wording.budgets(terms),
        "facts": _facts(each),
    }


def _steps(each: PromiseReport) -> list[str]:
    found: dict[str, None] = {}
    for cell in each.cells:
        if not cell.cell.column or cell.standing.state == "breached":
            for step in wording.next_steps(cell.standing):
                found.setdefault(step)
    return list(found)


def _week(figures: WeekFigures, terms: Terms) -> dict[str, Any]:
    share = figures.labelled / figures.predictions if figures.predictions else None
    return {
        "name": figures.week.name,
        "dates": numbers.period(figures.start, figures.end, terms.time_zone),
        "status": "final" if figures.final else "provisional",
        "due": numbers.day(figures.end + timedelta(seconds=terms.label_lag), terms.time_zone),
        "predictions": f"{figures.predictions:,}",
        "share": _NOTHING if share is None else numbers.percent(share, decimals=1),
        "labels": f"{figures.labels:,}",
        "errors": numbers.amount(figures.errors),
        "estimate": _rate(figures.estimate, terms.tolerance),
        "interval": _interval(figures.interval),
        "exact": _interval(figures.exact),
        "revised": figures.was is not None,
    }


def _rate(value: float | None, tolerance: float) -> str:
    return _NOTHING if value is None else numbers.percent(value, decimals=numbers.decimals_for(tolerance))


def _interval(interval: Interval | None) -> str:
    return _NOTHING if interval is None else numbers.span(interval.lower, interval.upper)


def _standing(cell: CellReport) -> dict[str, Any]:
    standing, recent = cell.standing, cell.standing.recent
    return {
        "name": wording.name(standing),
        "state": standing.state,
        "flags": ", ".join(standing.flags),
        "labels": f"{standing.labels:,}",
        "errors": numbers.amount(standing.errors),
        "estimate": _rate(standing.estimate, standing.tolerance),
        "life": _interval(standing.life),
        "recent": _NOTHING if recent is None else numbers.span(recent.lower, recent.upper),
        "recent_counts": _NOTHING if recent is None else f"{numbers.amount(recent.errors)} in {recent.labels:,}",
        "total": numbers.nats(standing.total),
        "threshold": numbers.nats(standing.threshold),
        "part": numbers.percent(standing.part) if standing.part < 1 else "all",
    }


def _pictures(each: PromiseReport, picture: Callable[[Spec], Markup]) -> dict[str, Any]:
    terms, whole, slices = each.terms, each.whole, each.cells[1:]
    bars = [_bar(figures) for figures in whole.weeks[-_WEEKS:]]
    days = charts.daily(each.snapshot.counts, whole.history, terms, each.snapshot.sealed_until)
    broken = [cell for cell in slices if cell.standing.state == "breached"][:_BREACHED]
    return {
        "weeks": picture(charts.weeks(bars, terms, width=_WIDTH)),
        "bounds": picture(charts.bounds(whole.history, terms, width=_WIDTH)),
        "total": picture(charts.total(whole.history, terms, width=_WIDTH)),
        "labels": picture(charts.labels(days, width=_WIDTH)),
        "broken": [
            (wording.name(cell.standing), picture(charts.bounds(cell.history, terms, width=_WIDTH, height=180)))
            for cell in broken
        ],
        "slices": picture(charts.slices([cell.history for cell in slices], terms, width=112)) if slices else "",
        "left_out": max(0, len(slices) - 12),
    }


def _bar(figures: WeekFigures) -> charts.WeekBar:
    interval = figures.interval
    lower, upper = (None, None) if interval is None else (interval.lower, interval.upper)
    return charts.WeekBar(figures.week.name, figures.week.monday, figures.labels, figures.estimate, lower, upper)


def _slice_tables(each: PromiseReport) -> list[dict[str, Any]]:
    """One table for every week shown, the slices in their order."""
    slices = each.cells[1:]
    if not slices:
        return []
    return [
        _week(figures, each.terms)
        | {"rows": [(wording.name(cell.standing), _week(cell.shown[i], each.terms)) for cell in slices]}
        for i, figures in enumerate(each.whole.shown)
    ]


def _revision(cell: CellReport, figures: WeekFigures) -> str:
    was = figures.was
    assert was is not None
    state = "final" if was.final else "provisional"
    return (
        f"{figures.week.name}, {wording.name(cell.standing)}: {figures.labels:,} labels with {numbers.amount(figures.errors)} "
        f"errors; the report as of look {was.look:,} said {was.labels:,} with {numbers.amount(was.errors)} ({state})."
    )


def _facts(each: PromiseReport) -> list[tuple[str, str]]:
    terms = each.terms
    what = {
        "error": "errors among all labelled",
        "miss": "misses among the labelled positives",
        "false-alarm": "false alarms among the labelled negatives",
        "loss": "mean loss",
    }[terms.measure]
    found = [
        ("promised", f"at most {numbers.rate(terms.tolerance)} {what}"),
        ("risk", numbers.one_in(terms.risk)),
        (
            "sealed up to",
            numbers.last(each.sealed_until, terms.time_zone)
            if each.sealed_until.timestamp() > terms.released
            else "nothing yet",
        ),
        ("label lag", numbers.duration(terms.label_lag)),
        ("time zone", safe(terms.time_zone)),
    ]
    if terms.model:
        found.insert(0, ("model", safe(terms.model)))
    return found
