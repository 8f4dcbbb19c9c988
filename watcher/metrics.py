"""From a snapshot of the ledger to metric families: everything is read at scrape time, nothing is computed or remembered.

Names follow the Prometheus rules (docs/metrics.md lists them all). A series is there from the first scrape of its promise on
and never disappears while the promise lives; a value that is not known yet is NaN.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from math import nan
from typing import Final

from prometheus_client.core import (
    CounterMetricFamily,
    GaugeMetricFamily,
    InfoMetricFamily,
    Metric,
    StateSetMetricFamily,
)
from prometheus_client.registry import Collector

from watcher.records import FLAGS, REASONS, STATES, Head, SourceState, Standing, Terms

NAMED: Final = ("promise", "version", "slice")
OUTCOMES: Final = ("waiting", "delivered", "dead", "cancelled")


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What a scrape shows."""

    standings: Sequence[Standing]
    """Of every promise version that is not superseded: whole and slices."""
    waiting: Sequence[Terms]
    """Promises of the configuration that no look has seen yet."""
    sources: Sequence[SourceState]
    rejected: Mapping[tuple[str, str], Mapping[str, int]]
    """(source, promise) -> reason -> rows of the newest look."""
    notices: Mapping[tuple[str, str], int]
    """(route, state) -> notices."""
    routes: Sequence[str]
    lease_held: bool
    head: Head
    ledger_bytes: float
    version: str
    readable: bool = True
    """False: the ledger could not be read, and what comes of it is what was read last."""
    clock_behind: float = 0.0
    """Seconds by which the clock lies behind the newest look; above 0 no look is made."""


class LedgerCollector(Collector):
    """Calls for a snapshot at each scrape."""

    def __init__(self, snapshot: Callable[[], Snapshot], *, slices: bool) -> None:
        self._snapshot = snapshot
        self._slices = slices

    def describe(self) -> Iterable[Metric]:
        """Nothing beforehand: the ledger need not be there when the registry is made."""
        return []

    def collect(self) -> Iterator[Metric]:
        """All families, in a fixed order."""
        yield from families(self._snapshot(), slices=self._slices)


def possible_reasons(terms: Terms) -> tuple[str, ...]:
    """The reasons for which a row of this promise may be rejected, in the order of `REASONS`.

    Each has its series from the first scrape on, so that the first reject of a kind is an increase and no new series.
    """
    columns = terms.columns
    needs = {
        "no-id": columns.id is not None,
        "conflicting-duplicate": columns.id is not None,
        "unknown-label": bool(terms.classes) or columns.error is not None,
        "bad-weight": columns.weight is not None or columns.labelling_probability is not None,
        "no-cluster": columns.cluster is not None,
        "cluster-too-long": columns.cluster is not None,
        "cluster-too-large": columns.cluster is not None,
        "bad-loss": columns.loss is not None,
    }
    return tuple(reason for reason in REASONS if needs.get(reason, True))


def families(snapshot: Snapshot, *, slices: bool) -> Iterator[Metric]:
    """Every family of a snapshot."""
    yield _gauge(
        "watcher_ledger_up", "1 when the ledger could be read at this scrape.", (), [((), float(snapshot.readable))]
    )
    yield from _promises(snapshot, slices=slices)
    yield from _sources(snapshot)
    yield from _notices(snapshot)
    yield _gauge(
        "watcher_lease_held", "1 when this process is the one that writes.", (), [((), float(snapshot.lease_held))]
    )
    yield _gauge("watcher_ledger_look", "Number of the newest look.", (), [((), float(snapshot.head.look))])
    yield _gauge("watcher_ledger_bytes", "Size of the ledger.", (), [((), float(snapshot.ledger_bytes))])
    yield _gauge(
        "watcher_clock_behind_seconds",
        "By how much the clock lies behind the newest look; above 0 no look is made.",
        (),
        [((), snapshot.clock_behind)],
    )
    build = InfoMetricFamily("watcher_build", "The program.")
    build.add_metric((), {"version": snapshot.version})
    yield build


Rows = Iterable[tuple[Sequence[str], float]]


def _gauge(name: str, text: str, labels: Sequence[str], rows: Rows) -> GaugeMetricFamily:
    family = GaugeMetricFamily(name, text, labels=labels)
    for values, number in rows:
        family.add_metric(values, number)
    return family


def _named(standing: Standing) -> tuple[str, str, str]:
    where = f"{standing.column}={standing.value}" if standing.column else ""
    return standing.promise, standing.version, where


def _declared(terms: Terms) -> list[tuple[str, str, str]]:
    return [(terms.promise, terms.version, f"{s.column}={value}") for s in terms.slices for value in s.values]


def _epoch(moment: datetime | None) -> float:
    return nan if moment is None else moment.timestamp()


def _promises(snapshot: Snapshot, *, slices: bool) -> Iterator[Metric]:
    every = [s for s in snapshot.standings if slices or not s.column]
    wholes = [s for s in snapshot.standings if not s.column]
    new = [(terms.promise, terms.version, "") for terms in snapshot.waiting]
    new_cells = new + [cell for terms in snapshot.waiting if slices for cell in _declared(terms)]
    ratio = GaugeMetricFamily(
        "watcher_error_ratio",
        "Error rate: limits that hold at all times at once, and the estimate.",
        labels=(*NAMED, "window", "bound"),
    )
    for standing in wholes:
        recent = standing.recent
        rates = {
            "life": (standing.life.lower, _known(standing.estimate), standing.life.upper),
            "recent": (nan, nan, nan)
            if recent is None
            else (recent.lower, recent.errors / recent.labels if recent.labels else nan, recent.upper),
        }
        for window, values in rates.items():
            for bound, value in zip(("lower", "estimate", "upper"), values, strict=True):
                ratio.add_metric((*_named(standing), window, bound), value)
    for name in new:
        for window in ("life", "recent"):
            for bound in ("lower", "estimate", "upper"):
                ratio.add_metric((*name, window, bound), nan)
    yield ratio
    tolerances = [(_named(s), s.tolerance) for s in wholes] + [
        ((t.promise, t.version, ""), t.tolerance) for t in snapshot.waiting
    ]
    yield _gauge("watcher_tolerance_ratio", "The promised error rate.", NAMED, tolerances)
    yield _gauge(
        "watcher_total_nats",
        "Evidence against the promise over all windows.",
        NAMED,
        [(_named(s), s.total) for s in every] + [(name, nan) for name in new_cells],
    )
    yield _gauge(
        "watcher_threshold_nats",
        "The total at which the promise is broken.",
        NAMED,
        [(_named(s), s.threshold) for s in wholes] + [(name, nan) for name in new],
    )
    state = StateSetMetricFamily("watcher_state", "Where the promise stands.", labels=NAMED)
    for standing in every:
        state.add_metric(_named(standing), {name: name == standing.state for name in STATES})
    for name in new_cells:
        state.add_metric(name, {each: each == "undecided" for each in STATES})
    yield state
    yield _gauge(
        "watcher_flag",
        "1 while the flag is up.",
        (*NAMED, "flag"),
        [((*_named(s), flag), float(flag in s.flags)) for s in wholes for flag in FLAGS]
        + [((*name, flag), 0.0) for name in new for flag in FLAGS],
    )
    yield _gauge(
        "watcher_breach_timestamp_seconds",
        "When the standing breach was noticed; 0: none.",
        NAMED,
        [(_named(s), _epoch(s.breach.noticed) if s.breach else 0.0) for s in wholes] + [(name, 0.0) for name in new],
    )
    yield _gauge(
        "watcher_labels",
        "Labels that have entered the evidence.",
        NAMED,
        [(_named(s), float(s.labels)) for s in every] + [(name, 0.0) for name in new_cells],
    )
    yield _gauge(
        "watcher_predictions",
        "Usable predictions of the counted buckets.",
        NAMED,
        [(_named(s), float(s.predictions)) for s in wholes] + [(name, 0.0) for name in new],
    )
    yield _gauge(
        "watcher_newest_label_timestamp_seconds",
        "Prediction time of the newest labelled sample.",
        NAMED,
        [(_named(s), _epoch(s.newest_label)) for s in wholes] + [(name, nan) for name in new],
    )


def _known(value: float | None) -> float:
    return nan if value is None else value


def _sources(snapshot: Snapshot) -> Iterator[Metric]:
    label = ("source",)
    yield _gauge(
        "watcher_look_timestamp_seconds",
        "When the source was last pulled with success; NaN: never.",
        label,
        [((s.source,), _epoch(s.last_success)) for s in snapshot.sources],
    )
    yield _gauge(
        "watcher_look_duration_seconds",
        "How long the newest look took.",
        label,
        [((s.source,), _known(s.duration)) for s in snapshot.sources],
    )
    failures = CounterMetricFamily("watcher_look_failures", "Pulls that gave no answer.", labels=label)
    for source in snapshot.sources:
        failures.add_metric((source.source,), float(source.failures_total))
    yield failures
    yield _gauge(
        "watcher_source_failing",
        "1 while the newest pull of the source gave no answer.",
        label,
        [((s.source,), float(s.failing_since is not None)) for s in snapshot.sources],
    )
    yield _gauge(
        "watcher_rows_rejected",
        "Rows that the newest look could not use.",
        ("source", "promise", "reason"),
        [
            ((source, promise, reason), float(rows))
            for (source, promise), reasons in snapshot.rejected.items()
            for reason, rows in sorted(reasons.items())
        ],
    )


def _notices(snapshot: Snapshot) -> Iterator[Metric]:
    total = CounterMetricFamily("watcher_notices", "Notices by what became of them.", labels=("route", "outcome"))
    for route in snapshot.routes:
        for outcome in OUTCOMES[1:]:
            total.add_metric((route, outcome), float(snapshot.notices.get((route, outcome), 0)))
    yield total
    waiting = [((route,), float(snapshot.notices.get((route, "waiting"), 0))) for route in snapshot.routes]
    yield _gauge("watcher_notices_waiting", "Notices that have not left yet.", ("route",), waiting)
