"""Diagnostics, terms and budgets in plain words, as rows of a page."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any, Final

from watcher.bounds.windows import BREACH, SUPPORT
from watcher.records import Cell, Standing, Terms
from watcher.text import safe
from watcher.wording import amount, counted, duration, moment, name, nats, one_in, percent, plural, rate

STATES: Final = {"breached": "broken", "supported": "supported", "undecided": "undecided"}
FLAGS: Final = {
    "warning": "early warning",
    "stale": "labels have stopped",
    "delay-depends-on-outcome": "delay depends on outcome",
    "weights-off": "weights off",
    "clustered": "errors come in clusters",
    "unlisted": "not in the configuration",
    "uncertified": "no release evidence",
}
"""Short names for a table; `wording.flag_sentences` says them in full."""
_WEEKLY_REST: Final = 0.05
_MEASURES: Final = {
    "error": "error: the prediction differs from the label",
    "miss": "miss: a positive that was not found",
    "false-alarm": "false alarm: a negative that was called positive",
    "loss": "loss: a column in [0, 1]",
}


def diagnostics(standing: Standing, terms: Terms, unit: str) -> list[str]:
    """What the descriptive figures say; none of them has an influence on the verdict."""
    return list(_diagnosed(standing, terms, safe(unit, 40)))


def _diagnosed(standing: Standing, terms: Terms, unit: str) -> Iterator[str]:
    found = standing.diagnostics
    share = found.get("labelled_share")
    if isinstance(share, float | int):
        missing = found.get("unlabelled", 0)
        yield (
            f"{percent(share)} of the counted {plural(unit)} are labelled; {counted(missing, unit)} "
            f"{'is' if missing == 1 else 'are'} not, and may differ from those that are."
        )
    yield from _tipping(found, terms)
    if standing.late_labels:
        yield (
            f"{counted(standing.late_labels, 'label')} came more than {duration(terms.label_lag)} after the end of "
            "their bucket and are not counted."
        )
    age = found.get("label_age_seconds")
    if isinstance(age, int):
        days = age / 86_400
        yield f"At the newest look the newest label was {days:.1f} days old; labels may take {duration(terms.label_lag)}."
    spread = found.get("over_dispersion")
    if isinstance(spread, float | int):
        yield (
            f"Over the last 28 days the errors of single days spread {spread:.2f} times as much as independent errors would "
            "(1 is what to expect)."
        )
    weight = found.get("mean_weight")
    if isinstance(weight, float | int):
        yield f"The mean weight of the labelled samples is {weight:.3f}; the plan says 1."
    if terms.columns.id is None:
        yield "No id column is mapped: rows that are repeated cannot be told apart and count twice."


def _tipping(found: Any, terms: Terms) -> Iterator[str]:
    point, strict = found.get("tipping_point"), found.get("tipping_point_upper")
    if not isinstance(point, float | int):
        return
    if point <= 0:
        yield "The labelled ones alone have more errors than the promise allows, whatever the unlabelled ones hold."
    elif point > 1:
        yield "Even if every unlabelled one were an error, the errors found so far would stay within the promise."
    else:
        told = f"If more than {percent(point)} of the unlabelled ones were errors, the promise would not hold for all of them"
        if isinstance(strict, float | int) and 0 < strict < point:
            told += f"; taking the upper limit for the labelled ones, {percent(strict)} would do"
        yield told + f" (the promise is {rate(terms.tolerance)})."


@dataclass(frozen=True, slots=True)
class Part:
    """What one cell has of the risk."""

    name: str
    part: str
    risk: str
    threshold: str
    discovered: bool


def parts(cells: list[Cell], terms: Terms, thresholds: dict[tuple[str, str], float]) -> list[Part]:
    """The parts of the risk of whole and slices."""
    return [
        Part(
            "whole" if not cell.column else f"{safe(cell.column)} = {safe(cell.value) or '(empty)'}",
            percent(float(cell.part), decimals=2),
            one_in(terms.risk * float(cell.part)),
            nats(thresholds[cell.key]) if cell.key in thresholds else "–",
            cell.discovered > 0,
        )
        for cell in cells
    ]


def budget_rows(terms: Terms) -> list[tuple[str, str, str, str, str]]:
    """(budget, its risk, since the release, within the service life, later) of the three budgets."""
    each = one_in(terms.risk)

    def row(name: str, first: float, within: float, later: float) -> tuple[str, str, str, str, str]:
        a, b, c = (percent(share, decimals=0) if share else "–" for share in (first, within, later))
        return name, each, a, b, c

    return [
        row("breaches, with the lower limits", BREACH.release, BREACH.life, BREACH.after),
        row("support, with the upper limits", SUPPORT.release, SUPPORT.life, SUPPORT.after),
        row("weekly intervals", 0.0, 1 - _WEEKLY_REST, _WEEKLY_REST),
    ]


def term_rows(terms: Terms) -> list[tuple[str, str]]:
    """The frozen terms, a name and a value each; what is not used is left out."""
    return [(key, value) for key, value in _terms(terms) if value]


def _terms(terms: Terms) -> Iterator[tuple[str, str]]:
    columns = terms.columns
    yield "model", safe(terms.model)
    yield "source", safe(terms.source)
    yield "rows", ", ".join(f"{safe(key)} = {safe(value)}" for key, value in terms.where) or "all"
    yield "measure", _MEASURES[terms.measure]
    yield "tolerance", f"{rate(terms.tolerance)}"
    yield "risk", one_in(terms.risk)
    yield "released", moment(datetime.fromtimestamp(terms.released, UTC), terms.time_zone)
    yield "service life", duration(terms.service_life)
    yield "bucket", f"{duration(terms.bucket)}, {terms.time_zone}"
    yield "label lag", duration(terms.label_lag)
    yield (
        "counting",
        "a bucket whole, once its labels can no longer come" if terms.count == "sealed" else "labels as they arrive",
    )
    yield "classes", ", ".join(map(safe, terms.classes))
    yield "positive", safe(terms.positive or "")
    for each in terms.slices:
        equal = len(set(each.weights)) == 1
        pairs = zip(map(safe, each.values), each.weights, strict=True)
        yield f"slices by {safe(each.column, 40)}", ", ".join(v if equal else f"{v} (weight {w})" for v, w in pairs)
    mapped = ((key, getattr(columns, key)) for key in columns.__slots__)
    yield "columns", ", ".join(f"{key} = {safe(value)}" for key, value in mapped if value is not None)
    yield "times", terms.time_format + (f", {terms.source_time_zone}" if terms.source_time_zone else "")
    yield "weight levels", ", ".join(terms.weight_levels)
    yield "cluster", f"at most {terms.n_max} labels" if terms.n_max is not None else ""
    yield "labelling probabilities", ", ".join(terms.labelling_probabilities)
    yield "label noise", "–".join(rate(x) for x in terms.label_noise) if terms.label_noise else ""
    yield "window at least", duration(terms.window_at_least) if terms.window_at_least else ""
    yield "support at least", duration(terms.support_at_least)
    yield "false warnings", f"one in {duration(terms.warn_every)} on average, or rarer"


def counts_said(standing: Standing) -> str:
    """Errors of labels, for a table."""
    return f"{amount(standing.errors)} of {standing.labels:,}"


def cell_name(standing: Standing) -> str:
    """The whole, or column and value."""
    return name(standing)
