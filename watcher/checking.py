"""`check`: every problem of a configuration at once, each with the way to mend it."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from watcher import assembly
from watcher.book import first_cells
from watcher.bounds import windows
from watcher.bounds.exact import exact_upper
from watcher.errors import SettingsError, UsageError, WatcherError
from watcher.judging import threshold
from watcher.look import Watched, question, recognise
from watcher.records import Tally, Terms
from watcher.settings import PromiseTable, Settings, SourceTable, duration
from watcher.sources.base import Source, Survey
from watcher.text import safe
from watcher.verdict import moment


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
    about, evidence = f"promise {promise.name}", promise.release_evidence
    if evidence is None:
        yield Finding("warning", about, "no release_evidence: the promise is shown as uncertified")
    elif promise.measure == "loss":
        yield Finding("warning", about, "release_evidence counts errors and cannot bear out a promise about a loss")
    else:
        bears = float(exact_upper(evidence.labels, evidence.errors, promise.risk / evidence.models))
        told = f"{evidence.errors} errors in {evidence.labels} labels bear out a tolerance of {_up(bears)} at risk {promise.risk}"
        if bears <= promise.tolerance:
            yield Finding("fact", about, told)
        elif promise.uncertified:
            yield Finding("warning", about, f"{told}, not {promise.tolerance}: shown as uncertified")
        else:
            yield Finding(
                "problem",
                about,
                f"{told}, not {promise.tolerance}. Promise {_up(bears)}, bring more labels, or set uncertified = true, "
                "which every page then shows",
            )
    yield from _design(promise.terms(source))


def _up(value: float) -> str:
    return f"{math.ceil(value * 1e5) / 1e5:.5f}".rstrip("0")


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
    if survey.first_time is not None:
        yield Finding("fact", about, f"first prediction found at {moment(survey.first_time).isoformat()}")
        if survey.first_time > terms.released + terms.bucket:
            yield Finding(
                "warning",
                about,
                f"released at {moment(terms.released).isoformat()}: what lay before the first row is missing",
            )
    yield from _volume(about, terms, tally, now)


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


def _volume(about: str, terms: Terms, tally: Tally, now: int) -> Iterator[Finding]:
    """Whether a bucket is fine enough for the volume that was seen."""
    whole = [row.counts for row in tally.cells if row.column == ""]
    labels, spent = sum(c.labels for c in whole), max(now - terms.released, terms.bucket)
    a_bucket = labels * terms.bucket / spent
    if not labels or not 0 < 2 * terms.tolerance < 1:
        return
    own, bar = threshold(terms.risk, first_cells(terms)[0].part)
    count = windows.restarts(terms.service_life, terms.bucket)
    share = float(windows.BREACH.shares(count, 2)[1])
    eps = terms.tolerance
    gain = 2 * eps * math.log(2) + (1 - 2 * eps) * math.log((1 - 2 * eps) / (1 - eps))
    room = (bar - math.log(share)) / gain / 10
    if a_bucket > room and terms.bucket > 3600:
        yield Finding(
            "warning",
            about,
            f"a bucket of {duration(terms.bucket)} holds about {a_bucket:,.0f} labels; at most {room:,.0f} keep a doubled error from "
            "waiting for the end of its bucket: a narrower bucket notices it sooner",
        )
    del own
