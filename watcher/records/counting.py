"""What a source is asked and what it answers: integers."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

from watcher.records.terms import Columns, Measure

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
