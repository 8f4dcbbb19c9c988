"""The weekly report as JSON: everything that the page shows, as numbers; and the way back to the published figures."""

from __future__ import annotations

import json
from typing import Any

from watcher import wording
from watcher.answer import event_json, rfc3339, standing_json
from watcher.errors import UsageError
from watcher.records import Interval
from watcher.report.figures import WeekFigures, own_risk
from watcher.report.snapshot import Published
from watcher.report.weekly import CellReport, PromiseReport, Report


def as_json(report: Report) -> str:
    """The report as indented JSON text, keys in a fixed order, non-ASCII escaped; the same report gives the same bytes.

    Names stand whole and unchanged: escape them before showing them.
    """
    return json.dumps(as_dict(report), indent=2, ensure_ascii=True, allow_nan=False) + "\n"


def as_dict(report: Report) -> dict[str, Any]:
    """The report as plain dicts and lists."""
    return {
        "week": report.week.name,
        "look": report.head.look,
        "head": report.head.digest,
        "at": rfc3339(report.at),
        "promises": [_promise(each) for each in report.promises],
        "list": {
            "fdr": report.fdr,
            "slices": report.slices,
            "listed": [
                {
                    "promise": each.promise,
                    "version": each.version,
                    "slice": {"column": each.column, "value": each.value},
                    "total": each.total,
                    "threshold": each.threshold,
                }
                for each in report.listed
            ],
        },
        "cautions": wording.CAUTIONS,
    }


def published_from(text: str) -> tuple[Published, ...]:
    """The figures that a report gave, read back from its JSON. Raises UsageError when it is none."""
    try:
        report = json.loads(text)
        return tuple(
            _published(report, each, cell, week)
            for each in report["promises"]
            for cell in each["cells"]
            for week in cell["weeks"]
        )
    except (ValueError, KeyError, TypeError) as error:
        raise UsageError(f"the text is no weekly report as JSON ({type(error).__name__}: {error})") from error


def _published(report: Any, each: Any, cell: Any, week: Any) -> Published:
    part = cell["standing"]["slice"] or {"column": "", "value": ""}
    return Published(
        promise=each["promise"],
        version=each["version"],
        column=part["column"],
        value=part["value"],
        week=week["week"],
        final=week["final"],
        predictions=int(week["predictions"]),
        labels=int(week["labels"]),
        errors=float(week["errors"]),
        look=int(report["look"]),
    )


def _promise(each: PromiseReport) -> dict[str, Any]:
    terms = each.terms
    return {
        "promise": terms.promise,
        "version": terms.version,
        "model": terms.model,
        "measure": terms.measure,
        "time_zone": terms.time_zone,
        "sealed_until": rfc3339(each.sealed_until),
        "cells": [_cell(each, cell) for cell in each.cells],
        "events": [event_json(stored) for stored in each.events],
        "method": list(wording.method(terms)),
        "budgets": wording.budgets(terms),
    }


def _cell(each: PromiseReport, cell: CellReport) -> dict[str, Any]:
    terms, standing = each.terms, cell.standing
    return {
        "sentence": wording.sentence(standing, terms, each.unit),
        "risk": own_risk(terms, cell.cell),
        "standing": standing_json(standing),
        "weeks": [_week(figures) for figures in cell.shown],
        "changes": list(cell.changes),
        "flags": list(wording.flag_sentences(standing, terms)),
        "next": list(wording.next_steps(standing)),
        "diagnostics": list(wording.diagnostic_sentences(standing, terms)),
        "revisions": [_revision(figures) for figures in cell.revised],
    }


def _week(figures: WeekFigures) -> dict[str, Any]:
    return {
        "week": figures.week.name,
        "number": figures.ordinal,
        "start": rfc3339(figures.start),
        "end": rfc3339(figures.end),
        "final": figures.final,
        "predictions": figures.predictions,
        "labelled": figures.labelled,
        "labels": figures.labels,
        "errors": figures.errors,
        "estimate": figures.estimate,
        "simultaneous": _interval(figures.interval),
        "exact": _interval(figures.exact),
    }


def _revision(figures: WeekFigures) -> dict[str, Any]:
    was = figures.was
    assert was is not None
    now = {
        "predictions": figures.predictions,
        "labels": figures.labels,
        "errors": figures.errors,
        "final": figures.final,
    }
    then = {
        "predictions": was.predictions,
        "labels": was.labels,
        "errors": was.errors,
        "final": was.final,
        "look": was.look,
    }
    return {"week": figures.week.name, "now": now, "was": then}


def _interval(interval: Interval | None) -> dict[str, float] | None:
    return None if interval is None else {"lower": interval.lower, "upper": interval.upper}
