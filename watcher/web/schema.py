"""The JSON of the API as models: they make the OpenAPI document and hold every answer to it.

Rates are fractions, evidence is in nats, times are RFC 3339 in UTC. A number that is infinite is null.
"""

from __future__ import annotations

from typing import Annotated, Any

from pydantic import BaseModel, BeforeValidator, Field

from watcher.records import State


class SliceName(BaseModel):
    """A column and one of its values."""

    column: str
    value: str


class Span(BaseModel):
    """Limits that hold at all times at once."""

    lower: float
    upper: float


class Provisional(BaseModel):
    """What does not count yet."""

    predictions: int
    labels: int
    errors: float


class Recent(BaseModel):
    """The last 28 days."""

    since: str
    labels: int
    errors: float
    lower: float
    upper: float


class Support(BaseModel):
    """The shortest window whose upper limit is at most the tolerance."""

    since: str
    until: str
    upper: float


class Breach(BaseModel):
    """A breach that stands."""

    number: int
    at: str
    noticed: str
    since: str
    lower: float


class ToDecide(BaseModel):
    """Further labels until the promise is decided; null: more than 1,000,000."""

    median: int | None
    p90: int | None


class Standing(BaseModel):
    """Where a promise or a slice stands."""

    promise: str
    version: str
    slice: SliceName | None
    state: State
    flags: list[str]
    tolerance: float
    risk: float
    part: float
    terms: str
    predictions: int
    labels: int
    errors: float
    provisional: Provisional
    late_labels: int
    estimate: float | None
    life: Span
    recent: Recent | None
    support: Support | None
    total: float | None
    threshold: float
    breach: Breach | None
    labels_to_decide: ToDecide | None
    newest_label: str | None
    counted_until: str | None
    diagnostics: dict[str, Any]


class Promises(BaseModel):
    """Every promise as of one look."""

    at: str | None
    look: int
    head: str
    promises: list[Standing]


class Promise(BaseModel):
    """One promise in full."""

    at: str | None
    look: int
    head: str
    sentence: str
    flags: list[str]
    terms: dict[str, Any]
    whole: Standing
    slices: list[Standing]


class Day(BaseModel):
    """The last verdict of a UTC day."""

    day: str
    look: int
    standing: Standing


class History(BaseModel):
    """Verdicts, newest day first; `next` is the address of the page before."""

    days: list[Day]
    next: str | None


class DayCount(BaseModel):
    """Predictions and labels of one local day."""

    day: str
    predictions: int
    labels: int
    late: int
    sealed: bool


class DayCounts(BaseModel):
    """The last 400 days, oldest first."""

    days: list[DayCount]


class Event(BaseModel):
    """One event with its place in the ledger."""

    look: int
    n: int
    at: str
    kind: str
    promise: str
    version: str
    slice: SliceName | None
    bucket: str | None
    facts: dict[str, Any]
    acknowledged_by: str | None
    sentence: str


class Events(BaseModel):
    """Events, newest first; `next` is the address of the page before."""

    events: list[Event]
    next: str | None


class Report(BaseModel):
    """An archived weekly report."""

    week: str
    revision: int
    final: bool
    look: int
    head: str
    created: str
    files: list[str]


class Reports(BaseModel):
    """The archive, newest first."""

    reports: list[Report]


class Reject(BaseModel):
    """A row that could not be used; its fields are outside text."""

    reason: str
    file: str
    line: int | None
    id: str | None
    values: dict[str, str | None]


class Rejects(BaseModel):
    """What the newest look could not use: rows by reason, and at most 20 samples a reason."""

    counts: dict[str, int]
    samples: list[Reject]


class Source(BaseModel):
    """How the pulls of a source went."""

    source: str
    last_try: str | None
    last_success: str | None
    failures: int
    reason: str | None
    failing_since: str | None


class Sources(BaseModel):
    """Every source that was ever tried."""

    sources: list[Source]


def _whole(value: Any) -> Any:
    # JSON has one kind of number: 1.0 is the integer 1, and "1" is none.
    return int(value) if isinstance(value, float) and value.is_integer() else value


class Acknowledge(BaseModel):
    """An acknowledgement: who is taken from the token."""

    model_config = {"extra": "forbid"}

    promise: str = Field(min_length=1, max_length=80)
    version: str = Field(min_length=1, max_length=80)
    breach: Annotated[int, Field(ge=1, lt=10**9, strict=True), BeforeValidator(_whole)]
    why: str = Field(min_length=1, max_length=500, pattern=r"\S")


class Acknowledged(BaseModel):
    """The look that recorded it."""

    look: int
    head: str
    who: str


class ProblemError(BaseModel):
    """One part of the request that does not fit."""

    place: str
    message: str


class Problem(BaseModel):
    """A problem document (RFC 9457)."""

    type: str
    title: str
    status: int
    detail: str
    errors: list[ProblemError] | None = None
