"""Where a promise stands after a look, and what happened."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any, Final, Literal

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
