"""The decision: a pure function (terms, what is known so far, the path, now) -> (standings, memories, events).

It imports `bounds` and `records` only (through `path`) and takes no diagnostics. What it must remember between looks is a
small mapping a cell (`memory`): strings, integers, booleans and None, so that it can stand in the ledger's chain.

Guarantee: with the terms frozen and the buckets entering in order, the chance that a breach is EVER raised for a cell although
at that moment every window ending then averages at most the tolerance is at most risk * part; see docs/method.md.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

import numpy as np

from watcher.bounds import windows
from watcher.bounds.deciding import labels_to_decide
from watcher.bounds.noise import true_limits
from watcher.judging import Book, Judged, Memory, judge
from watcher.path import CellPath, add, design_of, entered, estimate
from watcher.records import (
    Breach,
    Cell,
    Counts,
    Event,
    Interval,
    Recent,
    Remarks,
    Standing,
    State,
    Support,
    Terms,
    ToDecide,
)

RECENT = 28 * 86400
"""Seconds of the `recent` window."""


@dataclass(frozen=True, slots=True)
class Verdict:
    """What the evidence supports now."""

    standings: tuple[Standing, ...]
    memories: tuple[Memory, ...]
    events: tuple[Event, ...]


def moment(epoch: int) -> datetime:
    """An aware datetime from epoch seconds."""
    return datetime.fromtimestamp(epoch, UTC)


def advance(book: Book, now: int, remarks: Remarks) -> Verdict:
    """Judge the new buckets of a promise version, one after the other, and say where it stands.

    Depends on nothing but its arguments; one call over a year says what daily calls would have said.
    """
    judged = [judge(book, cell, now) for cell in book.cells]
    number, opened = _numbers(book, judged)
    limits = _limits(book, judged)
    standings, memories, events = [], [], []
    for each, (life, recent) in zip(judged, limits, strict=True):
        standing, memory, new = _stand(book, each, life, recent, now, remarks, number)
        standings.append(standing)
        memories.append(memory | {"breaches": opened})
        events += new
    events.sort(key=lambda event: (event.bucket if event.bucket is not None else now, event.column, event.value))
    return Verdict(tuple(standings), tuple(memories), tuple(events))


def _numbers(book: Book, judged: Sequence[Judged]) -> tuple[int, int]:
    """The number of the breach that new crossings join or open, and how many were ever opened."""
    memories = [book.memories.get(each.cell.key, {}) for each in judged]
    opened = max((int(memory.get("breaches", 0)) for memory in memories), default=0)
    standing = [
        memory["breach"]["number"]
        for each, memory in zip(judged, memories, strict=True)
        if memory.get("breach") and not each.withdrawn
    ]
    number = max(standing) if standing else opened + 1
    crossed = any(each.crossing for each in judged)
    return number, max(opened, number) if crossed or standing else opened


def _limits(book: Book, judged: Sequence[Judged]) -> list[tuple[Interval, Recent | None]]:
    terms, design = book.terms, design_of(book.terms)
    if not book.starts:
        return [(Interval(0.0, 1.0), None)] * len(judged)
    restarts = windows.restarts(terms.service_life, terms.bucket)
    begin = int(np.searchsorted(np.array(book.starts), book.end - RECENT, side="right")) - 1
    index = max(begin, 0)
    paths = [book.paths[each.cell.key] for each in judged]
    risk = np.array([each.risk for each in judged])
    found = []
    for j in (0, index):
        statistics = np.array([p.statistics[j:].sum(axis=0) for p in paths])
        lower, upper = windows.window_limits(statistics, np.full(len(paths), j), risk, restarts, design=design)
        found.append(
            [true_limits(a, b, terms.label_noise) for a, b in zip(lower.tolist(), upper.tolist(), strict=True)]
        )
    result: list[tuple[Interval, Recent | None]] = []
    for each, life, (low, high) in zip(paths, *found, strict=True):
        counts = CellPath(each.statistics[index:], each.counts[index:]).sum
        labels, errors = entered(terms, counts)
        recent = Recent(moment(book.starts[index]), labels, float(errors), low, high)
        result.append((Interval(*life), recent))
    return result


def _stand(
    book: Book, judged: Judged, life: Interval, recent: Recent | None, now: int, remarks: Remarks, number: int
) -> tuple[Standing, dict[str, Any], list[Event]]:
    terms, cell = book.terms, judged.cell
    memory, path = book.memories.get(cell.key, {}), book.paths[cell.key]
    counts, open_counts = path.sum, book.provisional.get(cell.key, Counts())
    newest = add(counts, open_counts).newest
    stale = now - (terms.released if newest is None else newest) > remarks.stale_after
    breach, events = _breach(book, judged, now, number)
    support, trail = _support(book, judged, breach, stale)
    events += trail
    events += [_event(book, cell, each.kind, each.bucket, {}) for each in judged.trail if each.kind is not None]
    if cell.column == "" and stale != bool(memory.get("stale", False)):
        facts = {"newest_label": None if newest is None else moment(newest).isoformat()}
        events.append(_event(book, cell, "stale" if stale else "labels-resumed", None, facts))
    labels, errors = entered(terms, counts)
    open_labels, open_errors = entered(terms, open_counts)
    state: State = "breached" if breach else "supported" if support else "undecided"
    flags = {
        "warning": judged.warning.standing,
        "stale": stale,
        "delay-depends-on-outcome": judged.depends,
        "unlisted": remarks.unlisted,
        "uncertified": remarks.uncertified,
    }
    standing = Standing(
        promise=terms.promise,
        version=terms.version,
        column=cell.column,
        value=cell.value,
        state=state,
        flags=tuple(name for name, up in flags.items() if up),
        tolerance=terms.tolerance,
        risk=terms.risk,
        part=float(cell.part),
        terms=book.digest,
        predictions=counts.predictions,
        labels=labels,
        errors=float(errors),
        provisional_labels=open_labels,
        provisional_errors=float(open_errors),
        provisional_predictions=open_counts.predictions,
        late_labels=remarks.late_labels if cell.column == "" else 0,
        estimate=estimate(terms, path.statistics.sum(axis=0).tolist(), counts),
        life=life,
        recent=recent,
        support=support,
        total=judged.total,
        threshold=judged.threshold,
        breach=breach,
        to_decide=None if breach else _to_decide(terms, judged, path),
        newest_label=None if newest is None else moment(newest),
        counted_until=moment(book.end) if book.starts else None,
    )
    return standing, _remember(judged, breach, support, stale), events


def _event(book: Book, cell: Cell, kind: str, bucket: int | None, facts: Mapping[str, Any]) -> Event:
    terms = book.terms
    start = None if bucket is None else book.starts[bucket]
    return Event(kind, terms.promise, terms.version, cell.column, cell.value, start, facts)


def _breach(book: Book, judged: Judged, now: int, number: int) -> tuple[Breach | None, list[Event]]:
    known = book.memories.get(judged.cell.key, {}).get("breach")
    if known and judged.withdrawn:
        facts = {"number": known["number"], "noticed": moment(known["noticed"]).isoformat()}
        return None, [_event(book, judged.cell, "breach-withdrawn", None, facts)]
    if known:
        return (
            Breach(
                known["number"],
                moment(known["at"]),
                moment(known["noticed"]),
                moment(known["since"]),
                float(known["lower"]),
            ),
            [],
        )
    if judged.crossing is None:
        return None, []
    at, crossing = judged.crossing
    ends, path, j = book.ends, book.paths[judged.cell.key], crossing.likeliest
    window = CellPath(path.statistics[j : at + 1], path.counts[j : at + 1]).sum
    labels, errors = judged.window or entered(book.terms, window)
    lower = crossing.lower
    if book.terms.label_noise is not None:
        lower = max(true_limits(lower, 1.0, book.terms.label_noise)[0], book.terms.tolerance)
    breach = Breach(number, moment(int(ends[at])), moment(now), moment(book.starts[j]), lower)
    facts = {
        "number": number,
        "at": breach.at.isoformat(),
        "since": breach.since.isoformat(),
        "lower": repr(lower),
        "window_labels": labels,
        "window_errors": str(errors),
        "window": j,
    }
    return breach, [_event(book, judged.cell, "breach", at, facts)]


def _support(book: Book, judged: Judged, breach: Breach | None, stale: bool) -> tuple[Support | None, list[Event]]:
    """The support that stands now, and every change of it in bucket order."""
    events, memory = [], book.memories.get(judged.cell.key, {})
    was, standing, broken = bool(memory.get("supported", False)), judged.warned_before, bool(memory.get("breach"))
    for moment_ in judged.trail:
        standing = {"warning": True, "warning-over": False}.get(moment_.kind or "", standing)
        broken = (broken and not judged.withdrawn) or moment_.crossed
        is_now = moment_.window >= 0 and not broken and not standing
        if is_now != was:
            facts = _window_facts(book, moment_.window) if is_now else {}
            events.append(_event(book, judged.cell, "supported" if is_now else "support-lost", moment_.bucket, facts))
        was = is_now
    window = judged.support
    holds = breach is None and window >= 0 and not judged.warning.standing and not stale
    if was and not holds:
        events.append(_event(book, judged.cell, "support-lost", None, {"because": "stale"}))
    if holds and not was:
        events.append(_event(book, judged.cell, "supported", None, _window_facts(book, window)))
    if not holds:
        return None, events
    return _shown_support(book, judged, window), events


def _window_facts(book: Book, window: int) -> dict[str, Any]:
    return {"since": moment(book.starts[window]).isoformat(), "window": window}


def _shown_support(book: Book, judged: Judged, window: int) -> Support:
    terms, statistics = book.terms, book.paths[judged.cell.key].statistics[window:].sum(axis=0)
    restarts = windows.restarts(terms.service_life, terms.bucket)
    _, upper = windows.window_limits(
        statistics, np.array(window), np.array(judged.risk), restarts, design=design_of(terms)
    )
    shown = true_limits(0.0, float(upper), terms.label_noise)[1]
    return Support(moment(book.starts[window]), moment(book.end), min(shown, terms.tolerance))


def _to_decide(terms: Terms, judged: Judged, path: CellPath) -> ToDecide | None:
    """Only where one label is one trial of section 1; other designs have no such figure."""
    if (
        terms.measure == "loss"
        or terms.weight_levels
        or terms.n_max
        or terms.labelling_probabilities
        or terms.label_noise
    ):
        return None
    n, k = path.statistics.sum(axis=0).tolist()
    return ToDecide(*labels_to_decide(n, k, terms.tolerance, judged.risk))


def _remember(judged: Judged, breach: Breach | None, support: Support | None, stale: bool) -> dict[str, Any]:
    known = None
    if breach:
        known = {
            "number": breach.number,
            "at": int(breach.at.timestamp()),
            "noticed": int(breach.noticed.timestamp()),
            "since": int(breach.since.timestamp()),
            "lower": repr(breach.lower),
        }
    warning = judged.warning
    return {
        "total_micronats": math.floor(judged.total * 1e6 + 0.5),
        "breach": known,
        "supported": support is not None,
        "support": judged.support,
        "stale": stale,
        "warning": {name: getattr(warning, name) for name in warning.__dataclass_fields__},
        **judged.memory,
    }
