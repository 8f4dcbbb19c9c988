"""What travels between the rooms: frozen records, aware datetimes, integers for counts.

Times inside counts and paths are whole seconds since 1970-01-01 UTC (`epoch`); times shown to people are aware datetimes.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from fractions import Fraction
from typing import Any, Final, Literal

Measure = Literal["error", "miss", "false-alarm", "loss"]
Counting = Literal["sealed", "arriving"]
State = Literal["breached", "supported", "undecided"]

STATES: Final[tuple[State, ...]] = ("breached", "supported", "undecided")
FLAGS: Final = (
    "warning",
    "stale",
    "delay-depends-on-outcome",
    "weights-off",
    "clustered",
    "unlisted",
    "uncertified",
)
REASONS: Final = (
    "no-id",
    "bad-time",
    "future-time",
    "conflicting-duplicate",
    "unknown-label",
    "bad-weight",
    "no-cluster",
    "cluster-too-long",
    "cluster-too-large",
    "bad-loss",
)
"""One reason a rejected row, by this precedence."""
EVENTS: Final = (
    "breach",
    "breach-withdrawn",
    "warning",
    "warning-over",
    "supported",
    "support-lost",
    "stale",
    "labels-resumed",
    "source-failed",
    "source-restored",
    "rows-rejected",
    "evidence-shrank",
    "late-labels",
    "clock-went-back",
    "released",
    "superseded",
    "acknowledged",
)


@dataclass(frozen=True, slots=True)
class Columns:
    """Which column of the source plays which part; None = not mapped. A term of the promise."""

    time: str
    prediction: str | None
    id: str | None = None
    revision: str | None = None
    labelled_at: str | None = None
    label: str | None = None
    error: str | None = None
    loss: str | None = None
    weight: str | None = None
    cluster: str | None = None
    labelling_probability: str | None = None
    selected: str | None = None


@dataclass(frozen=True, slots=True)
class Slice:
    """A column by which the promise is also judged; `values` declared in the terms, each with its relative weight."""

    column: str
    values: tuple[str, ...]
    weights: tuple[str, ...]
    """Decimal text, one per value, positive; equal weights are all "1"."""


@dataclass(frozen=True, slots=True)
class Terms:
    """Everything of a promise that enters a probability or selects a row; frozen at the first look."""

    promise: str
    model: str
    version: str
    source: str
    where: tuple[tuple[str, str], ...]
    columns: Columns
    time_format: str
    source_time_zone: str | None
    classes: tuple[str, ...]
    """Empty: whatever occurs."""
    positive: str | None
    measure: Measure
    tolerance: float
    risk: float
    released: int
    """Epoch seconds."""
    service_life: int
    """Seconds, as every span below."""
    bucket: int
    time_zone: str
    label_lag: int
    count: Counting
    slices: tuple[Slice, ...]
    weight_levels: tuple[str, ...]
    """Decimal text as declared; empty: every sample weighs 1."""
    n_max: int | None
    cluster_span: int | None
    labelling_probabilities: tuple[str, ...]
    """Declared levels of the labelling probability (Horvitz-Thompson); empty: not used."""
    label_noise: tuple[float, float] | None
    window_at_least: int | None
    support_at_least: int
    warn_every: int
    """Seconds; divided by `bucket` it is the mean number of buckets to a false warning."""


@dataclass(frozen=True, slots=True)
class Cell:
    """The whole of a promise (column and value empty) or one slice value, with its part of the risk."""

    column: str
    value: str
    part: Fraction
    """Its part of the promise's risk in (0, 1], exact; the threshold is log(1/(risk*part))."""
    discovered: int
    """0: the whole or declared; 1, 2, ...: order of discovery within the term."""

    @property
    def key(self) -> tuple[str, str]:
        """('', '') is the whole."""
        return (self.column, self.value)


@dataclass(frozen=True, slots=True)
class Counts:
    """Integers of one (cell, bucket, level). Added up they give the counts of larger groups."""

    predictions: int = 0
    """All usable rows: labelled and unlabelled."""
    labels: int = 0
    errors: int = 0
    """prediction != label; for a source with an `error` column, its ones."""
    positives: int = 0
    """Labelled positives."""
    misses: int = 0
    false_alarms: int = 0
    loss_ppm_down: int = 0
    loss_ppm_up: int = 0
    clusters: int = 0
    newest: int | None = None
    """Prediction time of the newest labelled row, epoch seconds."""


INTEGERS: Final = (
    "predictions",
    "labels",
    "errors",
    "positives",
    "misses",
    "false_alarms",
    "loss_ppm_down",
    "loss_ppm_up",
    "clusters",
)
"""The additive fields of `Counts`, in the order of every sheet and table."""


@dataclass(frozen=True, slots=True)
class Question:
    """What a source is asked to count for one promise in one look."""

    promise: str
    version: str
    columns: Columns
    time_format: str
    source_time_zone: str | None
    where: tuple[tuple[str, str], ...]
    classes: tuple[str, ...]
    positive: str | None
    measure: Measure
    slices: tuple[str, ...]
    """Names of the slice columns."""
    weight_levels: tuple[str, ...]
    n_max: int | None
    cluster_span: int | None
    labelling_probabilities: tuple[str, ...]
    time_zone: str
    bucket: int
    released: int
    open_from: int
    """Start of the oldest bucket that is not sealed yet; `released` at first. Usable rows before it are `outside`."""
    label_lag: int
    now: int
    """The time of the look."""
    at_given: bool
    """True: `now` was given as --at, rows with time >= now are `outside`. False: rows with time > now are `future-time`."""
    slice_limit: int = 200


@dataclass(frozen=True, slots=True)
class CellCounts:
    """What was counted for one cell, bucket and level."""

    column: str
    value: str
    bucket: int
    """Start of the bucket, epoch seconds; the first bucket starts at `released`."""
    level: str
    """"" without weights and clusters; a declared weight level; "n:k" for clusters of n labels with k errors;
    a declared labelling probability ("" = not selected)."""
    counts: Counts


@dataclass(frozen=True, slots=True)
class Tally:
    """The answer to one question. Every row of the source is in exactly one of
    predictions (of the whole), duplicates, outside, rejected, blank.
    """

    promise: str
    version: str
    cells: tuple[CellCounts, ...]
    """Whole and slices; sorted by (column, value, bucket, level)."""
    rejected: Mapping[str, int]
    """Reason -> rows; every reason that cannot occur for this question may be absent."""
    duplicates: int
    outside: int
    late_labels: int
    """Labels of buckets that are sealed by now with labelled_at at or after end + label_lag (0 unless `labelled_at` is mapped)."""
    lines: int | None = None
    """Files: physical lines without headers and without newlines inside quoted fields."""
    blank: int = 0
    has_future: bool = False
    """A row lay in the future: it will count later although the file does not change."""


@dataclass(frozen=True, slots=True)
class RejectedRow:
    """A row that could not be used, as it was read (outside text: make it safe before showing it)."""

    promise: str
    reason: str
    file: str
    line: int | None
    id: str | None
    values: Mapping[str, str | None]


@dataclass(frozen=True, slots=True)
class Event:
    """Something that happened to a promise (or a source) and was recorded at a look."""

    kind: str
    promise: str
    """"" for events of a source."""
    version: str
    column: str
    value: str
    bucket: int | None
    """Start of the bucket that brought it about."""
    facts: Mapping[str, Any] = field(default_factory=dict)
    """JSON-able: strings, integers, booleans, None, floats only as decimal text or rounded numbers for show."""


@dataclass(frozen=True, slots=True)
class Interval:
    """A lower and an upper limit, fractions in [0, 1]."""

    lower: float
    upper: float


@dataclass(frozen=True, slots=True)
class Recent:
    """The window of the last restart at or before 28 days before the end of the newest counted bucket."""

    since: datetime
    labels: int
    errors: float
    lower: float
    upper: float


@dataclass(frozen=True, slots=True)
class Support:
    """The shortest window whose upper bound is at most the tolerance."""

    since: datetime
    until: datetime
    upper: float


@dataclass(frozen=True, slots=True)
class Breach:
    """A breach that stands."""

    number: int
    at: datetime
    """End of the newest bucket counted when the total crossed."""
    noticed: datetime
    """The look."""
    since: datetime
    """Start of the window with the largest share: the likeliest start, not a bound."""
    lower: float
    """Some window ending at `at` averages above it; >= the tolerance."""


@dataclass(frozen=True, slots=True)
class ToDecide:
    """Further labels until window 0 is broken or supported at the present estimate; None: over 1,000,000."""

    median: int | None
    p90: int | None


@dataclass(frozen=True, slots=True)
class Standing:
    """Where a promise or one of its slices stands after a look: the JSON of the look, the verdict row of the ledger,
    the input of page, report and metrics.
    """

    promise: str
    version: str
    column: str
    value: str
    state: State
    flags: tuple[str, ...]
    tolerance: float
    risk: float
    part: float
    terms: str
    """Digest of the frozen terms, 64 hex digits."""
    predictions: int
    """Usable predictions of the sealed (counted) buckets."""
    labels: int
    """What has entered the evidence."""
    errors: float
    """An integer except for measure `loss`."""
    provisional_labels: int
    provisional_errors: float
    provisional_predictions: int
    late_labels: int
    estimate: float | None
    life: Interval
    recent: Recent | None
    support: Support | None
    total: float
    """Nats, rounded down to 1e-6."""
    threshold: float
    breach: Breach | None
    to_decide: ToDecide | None
    """None once breached."""
    newest_label: datetime | None
    counted_until: datetime | None
    """End of the newest counted bucket."""
    diagnostics: Mapping[str, Any] = field(default_factory=dict)
    """Descriptive only; no influence on the verdict (labelled share, tipping point, ...)."""


@dataclass(frozen=True, slots=True)
class Failure:
    """A source that gave no answer."""

    source: str
    reason: str
    detail: str
    since: datetime


@dataclass(frozen=True, slots=True)
class Head:
    """The newest look of the ledger and the digest of the chain up to it."""

    look: int
    digest: str

    def __str__(self) -> str:
        return f"{self.look}:{self.digest}"


@dataclass(frozen=True, slots=True)
class Remarks:
    """What a look knows of a promise besides counts; part of the sheet, so that audit can repeat the look."""

    unlisted: bool = False
    uncertified: bool = False
    stale_after: int = 7 * 86400
    """Seconds; may change freely, hence recorded with every look."""
    late_labels: int = 0


@dataclass(frozen=True, slots=True)
class TermDraft:
    """One promise version inside an entry."""

    promise: str
    version: str
    new_terms: Terms | None
    """Given at the first look only."""
    new_cells: tuple[Cell, ...]
    """In order of discovery; the whole first."""
    counts: tuple[CellCounts, ...]
    """The counts that entered or changed since the newest look, whole new values (not differences)."""
    gone: tuple[tuple[str, str, int, str], ...]
    """(column, value, bucket, level) that had counts and have none any more."""
    sealed: tuple[int, ...]
    """Starts of the buckets sealed by this look, ascending."""
    sealed_until: int
    """End of the newest sealed bucket; `released` while none is."""
    remarks: Remarks
    standings: tuple[Standing, ...]
    """One for every cell, the whole first, then by (column, value)."""
    memories: tuple[Mapping[str, Any], ...]
    """Beside each standing: what the next look must know of it, JSON of strings, integers, booleans and None only."""
    closed: bool = False
    """Superseded by a newer version in this entry."""


@dataclass(frozen=True, slots=True)
class NoticeDraft:
    """One event on its way over one route; `event` is the position in the entry's events."""

    route: str
    event: int
    breach_number: int | None = None
    """Given for a route that starts retraining: at most one notice per route, promise version and breach number."""


@dataclass(frozen=True, slots=True)
class Entry:
    """What one look (or acknowledgement) adds to the ledger in one transaction."""

    source: str
    at: int
    """Epoch seconds."""
    kind: Literal["pull", "acknowledge", "supersede"]
    method: int
    """Number of the method of `bounds`; raised when a formula changes."""
    expected: int
    """Newest look number of this source when the look began (0: none); the entry is refused if it moved on."""
    terms: tuple[TermDraft, ...]
    events: tuple[Event, ...]
    notices: tuple[NoticeDraft, ...] = ()
    rejected: tuple[RejectedRow, ...] = ()
    """Samples, at most 20 a reason; replace the stored ones of the same promise and reason."""
    rejected_counts: Mapping[str, Mapping[str, int]] = field(default_factory=dict)
    """promise -> reason -> rows, of this look."""


@dataclass(frozen=True, slots=True)
class StoredTerm:
    """A promise version as the ledger knows it."""

    id: int
    terms: Terms
    digest: str
    first_look: int
    closed_by: int | None
    """Look number of the superseding entry."""
    sealed_until: int


@dataclass(frozen=True, slots=True)
class StoredEvent:
    """An event with its place in the chain."""

    look: int
    n: int
    at: datetime
    event: Event
    acknowledged_by: str | None = None


@dataclass(frozen=True, slots=True)
class SourceState:
    """How the pulls of a source went; not chained."""

    source: str
    last_try: datetime | None = None
    last_success: datetime | None = None
    failures: int = 0
    """In a row, up to now."""
    failures_total: int = 0
    reason: str | None = None
    detail: str | None = None
    failing_since: datetime | None = None
    duration: float | None = None
    """Seconds of the newest pull."""
    signature: str | None = None
    """Of the files at the newest success: unchanged files need no read until a bucket is due."""


@dataclass(frozen=True, slots=True)
class Notice:
    """A row of the outbox."""

    key: str
    route: str
    kind: str
    """The event's kind, or heartbeat, reminder, report."""
    promise: str
    version: str
    look: int
    event: int | None
    state: Literal["waiting", "delivered", "dead", "cancelled"]
    tries: int
    next_at: datetime
    created: datetime
    answer: str | None
    breach_number: int | None
