"""The table of a promise, and its terms."""

from __future__ import annotations

from decimal import Decimal
from typing import Annotated, Final

from pydantic import BeforeValidator, Field, model_validator

from watcher.records import Counting, Measure, Slice, Terms
from watcher.settings.tables import SourceTable, Table
from watcher.settings.values import Duration, Instant, Level, Name, Span, Text, Zone, _bucket

MAX_LEVELS: Final = 16


class EvidenceTable(Table):
    """What the tolerance was certified on."""

    labels: Annotated[int, Field(gt=0)]
    errors: Annotated[int, Field(ge=0)]
    models: Annotated[int, Field(gt=0)] = 1

    @model_validator(mode="after")
    def _fewer(self) -> EvidenceTable:
        if self.errors > self.labels:
            raise ValueError(f"errors = {self.errors} is more than labels = {self.labels}")
        return self


class PromiseTable(Table):
    """One promise: its terms, and what may change freely beside them."""

    name: Name
    model: str = ""
    version: Annotated[Text, Field(min_length=1, max_length=80)] = "1"
    source: str
    where: dict[str, Text] = Field(default_factory=dict)
    classes: tuple[Text, ...] = ()
    positive: Text | None = None
    measure: Measure = "error"
    tolerance: Annotated[float, Field(gt=0, lt=1)]
    risk: Annotated[float, Field(gt=0, lt=1)]
    released: Instant
    service_life: Duration = 52 * 604800
    bucket: Annotated[int, BeforeValidator(_bucket)] = 86400
    time_zone: Zone = "UTC"
    label_lag: Span
    count: Counting = "sealed"
    slices: dict[str, tuple[Text, ...] | dict[str, Level]] = Field(default_factory=dict)
    weight_levels: tuple[Level, ...] = ()
    n_max: Annotated[int, Field(ge=1, le=200)] | None = None
    cluster_span: Duration | None = None
    labelling_probabilities: tuple[Level, ...] = ()
    label_noise: tuple[float, float] | None = None
    window_at_least: Duration | None = None
    support_at_least: Duration = 7 * 86400
    warn_every: Duration = 1095 * 86400
    stale_after: Duration | None = None
    release_evidence: EvidenceTable | None = None
    uncertified: bool = False
    retired: bool = False
    unit: str = "sample"

    @model_validator(mode="after")
    def _whole(self) -> PromiseTable:
        for problem in _promise_problems(self):
            raise ValueError(problem)
        return self

    @property
    def staleness(self) -> int:
        """Seconds after which the newest label is too old."""
        return self.stale_after or max(7 * 86400, 2 * self.label_lag)

    def terms(self, source: SourceTable) -> Terms:
        """The terms to be frozen: everything that enters a probability or selects a row."""
        return Terms(
            promise=self.name,
            model=self.model,
            version=self.version,
            source=self.source,
            where=tuple(sorted(self.where.items())),
            columns=source.columns.record(),
            time_format=source.time_format,
            source_time_zone=source.time_zone,
            classes=tuple(sorted(self.classes)),
            positive=self.positive,
            measure=self.measure,
            tolerance=self.tolerance,
            risk=self.risk,
            released=int(self.released.timestamp()),
            service_life=self.service_life,
            bucket=self.bucket,
            time_zone=self.time_zone,
            label_lag=self.label_lag,
            count=self.count,
            slices=tuple(_slice(column, values) for column, values in sorted(self.slices.items())),
            weight_levels=self.weight_levels,
            n_max=self.n_max,
            cluster_span=self.cluster_span,
            labelling_probabilities=self.labelling_probabilities,
            label_noise=self.label_noise,
            window_at_least=self.window_at_least,
            support_at_least=self.support_at_least,
            warn_every=self.warn_every,
        )


def _slice(column: str, values: tuple[str, ...] | dict[str, str]) -> Slice:
    if isinstance(values, dict):
        return Slice(column, tuple(values), tuple(values.values()))
    return Slice(column, values, ("1",) * len(values))


def _promise_problems(promise: PromiseTable) -> list[str]:
    found = []
    if promise.released.microsecond:
        found.append(f"released = {promise.released} must be a whole second")
    if promise.measure in ("miss", "false-alarm") and promise.positive is None:
        found.append(f'measure = "{promise.measure}" needs positive: the label that counts as positive')
    if promise.positive is not None and promise.classes and promise.positive not in promise.classes:
        found.append(f"positive = {promise.positive!r} is not among classes = {list(promise.classes)}")
    for key in ("weight_levels", "labelling_probabilities"):
        levels = getattr(promise, key)
        if len(levels) > MAX_LEVELS or len(set(levels)) != len(levels):
            found.append(f"{key} must hold at most {MAX_LEVELS} different values")
    if any(Decimal(level) > 1 for level in promise.labelling_probabilities):
        found.append("labelling_probabilities must be at most 1")
    if promise.label_noise is not None:
        low, high = promise.label_noise
        if not (0 <= low <= high and low + high < 1):
            found.append(f"label_noise = [{low}, {high}] must satisfy 0 <= a <= b and a + b < 1")
        elif promise.measure == "loss":
            found.append("label_noise is about flipped errors and does not go with measure = 'loss'")
    for column, values in promise.slices.items():
        if len(set(values)) != len(values):
            found.append(f"slices.{column} names a value twice")
    return found
