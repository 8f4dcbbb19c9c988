"""The weekly report as CSV: one row for every promise, cell and week shown."""

from __future__ import annotations

import csv
import io
from typing import Final

from watcher.answer import rfc3339
from watcher.report.figures import WeekFigures, own_risk
from watcher.report.weekly import CellReport, PromiseReport, Report
from watcher.text import csv_cell

HEADER: Final = (
    "promise",
    "version",
    "column",
    "value",
    "week",
    "start",
    "end",
    "status",
    "predictions",
    "labelled",
    "labels",
    "errors",
    "estimate",
    "simultaneous_lower",
    "simultaneous_upper",
    "exact_lower",
    "exact_upper",
    "tolerance",
    "risk",
    "state",
    "flags",
    "total",
    "threshold",
    "revised_from_labels",
    "revised_from_errors",
    "look",
    "head",
)


def as_csv(report: Report) -> str:
    """The report as CSV with a header line and CRLF ends (RFC 4180); text cells are safe to open in a spreadsheet."""
    out = io.StringIO()
    writer = csv.writer(out)
    writer.writerow(HEADER)
    for each in report.promises:
        for cell in each.cells:
            for figures in cell.shown:
                writer.writerow([csv_cell(value) for value in _row(report, each, cell, figures)])
    return out.getvalue()


def _row(report: Report, each: PromiseReport, cell: CellReport, figures: WeekFigures) -> tuple[object, ...]:
    interval, exact, standing = figures.interval, figures.exact, cell.standing
    return (
        each.terms.promise,
        each.terms.version,
        cell.cell.column,
        cell.cell.value,
        figures.week.name,
        rfc3339(figures.start),
        rfc3339(figures.end),
        "final" if figures.final else "provisional",
        figures.predictions,
        figures.labelled,
        figures.labels,
        int(figures.errors) if figures.errors.is_integer() else figures.errors,
        figures.estimate,
        interval and interval.lower,
        interval and interval.upper,
        exact and exact.lower,
        exact and exact.upper,
        each.terms.tolerance,
        own_risk(each.terms, cell.cell),
        standing.state,
        " ".join(standing.flags),
        standing.total,
        standing.threshold,
        figures.was and figures.was.labels,
        figures.was and figures.was.errors,
        report.head.look,
        report.head.digest,
    )
