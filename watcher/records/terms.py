"""The terms of a promise, and the words for them."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Literal

Measure = Literal["error", "miss", "false-alarm", "loss"]
Counting = Literal["sealed", "arriving"]


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
