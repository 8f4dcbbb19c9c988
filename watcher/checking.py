"""`check`: every problem of a configuration at once, each with the way to mend it."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Final, Literal

from watcher import assembly
from watcher.book import discovered, first_cells, sealing
from watcher.book import table as table_of
from watcher.bounds.deciding import labels_to_decide
from watcher.bounds.planning import WEEK, WIDTHS, bucket_fits, smallest_rise, widest_bucket
from watcher.bounds.release import certify
from watcher.errors import SettingsError, UsageError, WatcherError
from watcher.judging import threshold
from watcher.look import OneSided, Watched, question, recognise, refuse_one_sided, sealed_counts, weak_evidence
from watcher.path import entered, total
from watcher.records import Cell, CellCounts, Tally, Terms
from watcher.settings import PromiseTable, Settings, SourceTable, duration
from watcher.sources.base import Source, Survey
from watcher.text import safe
from watcher.verdict import moment
from watcher.wording import percent

SHOWN: Final = 9
"""Cells whose smallest noticeable rise `check` tells."""


@dataclass(frozen=True, slots=True)
class Finding:
    """One line of the answer: `problem` stops the first look, `warning` does not, `fact` is good to know."""

    level: Literal["problem", "warning", "fact"]
    about: str
    text: str


def check(settings: Settings, now: int) -> list[Finding]:
    """Reach ledger and sources, count usable and unusable rows, and weigh every promise."""
    found = list(_secrets(settings))
    found += _ledger(settings)
    for promise in settings.promise:
        found += _evidence(promise, settings.source_of(promise.source))
    for table in settings.source:
        found += _source(settings, table, now)
    return found


def _secrets(settings: Settings) -> Iterator[Finding]:
    for route in settings.route:
        wanted = [("url", route.url_env, route.url_file), ("password", route.password_env, route.password_file)]
        names = route.secret_env if isinstance(route.secret_env, tuple) else (route.secret_env,)
        wanted += [("secret", name, None) for name in names]
        wanted.append(("secret", None, route.secret_file))
        for key, variable, file in wanted:
            if variable is None and file is None:
                continue
            try:
                settings.hidden(variable, file, key)
            except SettingsError as error:
                yield Finding("problem", f"route {route.name}", str(error))


def _ledger(settings: Settings) -> Iterator[Finding]:
    try:
        with assembly.open_ledger(settings, write=False) as ledger:
            head = ledger.head()
            yield Finding("fact", "ledger", f"reached; newest look {head.look}")
            for table in settings.source:
                try:
                    recognise(ledger, table.name, assembly.watched(settings, table.name))
                except UsageError as error:
                    yield Finding("problem", f"source {table.name}", str(error))
    except UsageError as error:
        level: Literal["problem", "fact"] = "fact" if "no ledger" in str(error) else "problem"
        yield Finding(level, "ledger", str(error))
    except WatcherError as error:
        yield Finding("problem", "ledger", str(error))


def _evidence(promise: PromiseTable, source: SourceTable) -> Iterator[Finding]:
    about, evidence, terms = f"promise {promise.name}", assembly.evidence_of(promise), promise.terms(source)
    weak = None if evidence is None else weak_evidence(terms, evidence)
    if evidence is None:
        yield Finding("warning", about, "no release_evidence: the promise is shown as uncertified")
    elif weak is None:
        found = certify(evidence.labels, evidence.errors, promise.risk, evidence.models)
        best = f", the best of {evidence.models} models," if evidence.models > 1 else ""
        told = f"{evidence.errors:,} errors in {evidence.labels:,} labels{best} bear out a tolerance of {_up(found.exact, 5)}"
        yield Finding("fact", about, f"{told} at risk {promise.risk} (by Hoeffding {_up(found.hoeffding, 5)})")
    elif promise.uncertified:
        yield Finding("warning", about, f"{weak.what}: shown as uncertified")
    else:
        yield Finding("problem", about, f"{weak.what}. {weak.way_out}")
    yield from _design(terms)


def _up(value: float, decimals: int) -> str:
    scale = 10**decimals
    return f"{math.ceil(value * scale) / scale:.{decimals}f}".rstrip("0").rstrip(".")


def _design(terms: Terms) -> Iterator[Finding]:
    about = f"promise {terms.promise}"
    span = min((s.weights for s in terms.slices), key=len, default=())
    if span and len(first_cells(terms)) > 1000:
        yield Finding(
            "warning", about, f"{len(first_cells(terms))} declared slices: each gets a very small part of the risk"
        )


def _source(settings: Settings, table: SourceTable, now: int) -> Iterator[Finding]:
    about = f"source {table.name}"
    promises = assembly.watched(settings, table.name)
    try:
        source = assembly.source_of(settings, table)
        columns = source.columns()
    except WatcherError as error:
        yield Finding("problem", about, str(error))
        return
    yield Finding("fact", about, f"reached; columns {', '.join(safe(column) for column in columns)}")
    if not promises:
        yield Finding("warning", about, "no promise rests on it")
    if table.columns.id is None:
        yield Finding("warning", about, "no id column is mapped: repeated rows cannot be told apart")
    for watched in promises:
        yield from _promise(source, table, watched, now)


def _promise(source: Source, table: SourceTable, watched: Watched, now: int) -> Iterator[Finding]:
    terms = watched.terms
    about, asked = f"promise {terms.promise}", question(terms, terms.released, now, slice_limit=table.slice_limit)
    try:
        tally = source.tally([asked])[0]
        survey = source.survey(asked)
    except WatcherError as error:
        yield Finding("problem", about, str(error))
        return
    yield from _rows(about, tally)
    yield from _values(about, survey, terms)
    until = sealing(terms, terms.released, now)[1]
    try:
        refuse_one_sided(source, asked, sealed_counts(table_of(tally.cells), until))
    except OneSided as error:
        yield Finding("problem", about, str(error))
    if survey.first_time is not None:
        yield Finding("fact", about, f"first prediction found at {moment(survey.first_time).isoformat()}")
        if survey.first_time > terms.released + terms.bucket:
            yield Finding(
                "warning",
                about,
                f"released at {moment(terms.released).isoformat()}: what lay before the first row is missing",
            )
    yield from _advice(about, terms, tally, now)


def _rows(about: str, tally: Tally) -> Iterator[Finding]:
    whole = [row.counts for row in tally.cells if row.column == ""]
    predictions, labels = sum(c.predictions for c in whole), sum(c.labels for c in whole)
    yield Finding(
        "fact" if labels else "warning",
        about,
        f"{predictions:,} usable predictions since the release, {labels:,} of them labelled; {tally.duplicates:,} repeated, "
        f"{tally.outside:,} outside",
    )
    rejected = {reason: n for reason, n in sorted(tally.rejected.items()) if n}
    if rejected:
        told = ", ".join(f"{n:,} {reason}" for reason, n in rejected.items())
        yield Finding("warning", about, f"rows that cannot be used: {told}")


def _values(about: str, survey: Survey, terms: Terms) -> Iterator[Finding]:
    if terms.columns.label is None:
        return
    predictions = ", ".join(repr(safe(value)) for value, _ in survey.predictions[:8])
    labels = ", ".join(repr(safe(value)) for value, _ in survey.labels[:8])
    if survey.disjoint:
        yield Finding(
            "problem",
            about,
            f"labels and predictions share no value. predictions: {predictions}; labels: {labels}. Map the right columns",
        )
    elif survey.pairs and 2 * survey.differing > survey.pairs:
        yield Finding(
            "warning",
            about,
            f"MORE THAN HALF of the labelled rows differ from their prediction ({survey.differing:,} of {survey.pairs:,}): is the "
            f"right column mapped? predictions: {predictions}; labels: {labels}",
        )


@dataclass(frozen=True, slots=True)
class Volume:
    """What a cell has brought so far."""

    cell: Cell
    labels: int
    """Of the measure: for `miss` the labelled positives, for `false-alarm` the negatives."""
    errors: float
    weeks: float
    """Over which these were counted."""
    per_week: float


def volumes(terms: Terms, cells: Sequence[Cell], rows: Iterable[CellCounts], now: int) -> list[Volume]:
    """Labels a week of every cell, from the buckets whose label lag is over; while there is none, from all rows.

    `rows` since the release; `now` in epoch seconds.
    """
    counts = table_of(rows)
    until = sealing(terms, terms.released, now)[1]
    complete = until > terms.released
    span = (until if complete else max(now, terms.released + terms.bucket)) - terms.released
    found = []
    for cell in cells:
        buckets = [levels for start, levels in counts.get(cell.key, {}).items() if not complete or start < until]
        pairs = [entered(terms, total(levels)) for levels in buckets]
        labels = sum(n for n, _ in pairs)
        found.append(Volume(cell, labels, float(sum(k for _, k in pairs)), span / WEEK, labels * WEEK / span))
    return found


def plain_labels(terms: Terms) -> bool:
    """Whether one label is one trial: what plans are made for (method.md section 7)."""
    others = (terms.weight_levels, terms.n_max, terms.labelling_probabilities, terms.label_noise)
    return terms.measure != "loss" and not any(others)


def _advice(about: str, terms: Terms, tally: Tally, now: int) -> Iterator[Finding]:
    """What the volume that was seen allows: bucket width, the smallest rise that can be noticed, a decision at all."""
    if not plain_labels(terms):
        return
    cells = first_cells(terms)
    seen = volumes(terms, (*cells, *discovered(cells, tally.cells)), tally.cells, now)
    whole = seen[0]
    if not whole.labels:
        return
    own = threshold(terms.risk, whole.cell.part)[0]
    life = whole.per_week * terms.service_life / WEEK
    yield from _bucket(about, terms, own, whole.per_week)
    yield from _rises(about, terms, seen)
    left = whole.per_week * max(terms.released + terms.service_life - now, 0) / WEEK
    needed = labels_to_decide(whole.labels, int(whole.errors), terms.tolerance, own)[1]
    if needed is None or needed > left:
        told = "over 1,000,000 more labels" if needed is None else f"{needed:,} more labels"
        yield Finding(
            "warning",
            about,
            f"at the rate seen, {percent(whole.errors / whole.labels)}, and {whole.per_week:,.0f} labels a week this promise can be "
            f"neither supported nor refuted in its service life with any certainty: nine in ten such cases need up to {told}, some "
            f"{left:,.0f} will come. {_smallest(terms, own, life)} `watcher plan` tells what more labels would change",
        )


def _bucket(about: str, terms: Terms, own: float, per_week: float) -> Iterator[Finding]:
    if bucket_fits(terms.tolerance, own, per_week, terms.bucket, terms.service_life):
        return
    widest = widest_bucket(terms.tolerance, own, per_week, terms.service_life)
    way_out = "an hour, the narrowest, is best" if widest is None else f'bucket = "{_width(widest)}" would do'
    if widest is None and terms.bucket <= min(WIDTHS):
        return
    yield Finding(
        "warning",
        about,
        f"a bucket of {duration(terms.bucket)} holds about {per_week * terms.bucket / WEEK:,.0f} labels: a doubled error waits for the "
        f"end of its bucket; {way_out}",
    )


def _width(seconds: int) -> str:
    return "1d" if seconds == 86400 else f"{seconds // 3600}h"


def _rises(about: str, terms: Terms, seen: Sequence[Volume]) -> Iterator[Finding]:
    told = []
    for volume in seen[:SHOWN]:
        own = threshold(terms.risk, volume.cell.part)[0]
        rise = smallest_rise(terms.tolerance, own, int(volume.per_week * terms.service_life / WEEK))
        name = f"{safe(volume.cell.column)} = {safe(volume.cell.value)}" if volume.cell.column else "whole"
        told.append(f"{name} {'none' if rise is None else f'{_up(rise, 2)}x'}")
    more = f" and {len(seen) - SHOWN:,} further slices" if len(seen) > SHOWN else ""
    yield Finding(
        "fact",
        about,
        f"{seen[0].per_week:,.0f} labels a week; the smallest rise over the tolerance, present since the release, that is noticed "
        f"within the service life with chance 90%: {', '.join(told)}{more}",
    )


def _smallest(terms: Terms, own: float, labels: float) -> str:
    rise = smallest_rise(terms.tolerance, own, int(labels))
    if rise is None:
        return "Not even an error rate of 100% would be noticed in it."
    return f"What a whole life can notice is {_up(rise, 2)} times the tolerance ({percent(min(1.0, rise * terms.tolerance), up=True)})."
