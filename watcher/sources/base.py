"""What every source offers, whatever holds its rows.

A source counts; it decides nothing. It answers questions of one look from one consistent read, or raises `SourceFailed`
and then nothing of the look counts.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal, Protocol

from watcher.records import Question, RejectedRow, Tally

Kind = Literal["csv", "parquet", "database", "spark"]


@dataclass(frozen=True, slots=True)
class SourceSpec:
    """Where the rows of a source are and how much of them may be read."""

    name: str
    kind: Kind
    path: str | None = None
    """csv, parquet: a file or a glob, relative to `base`."""
    url: str | None = field(default=None, repr=False)
    """database: an SQLAlchemy url with its credentials resolved; never printed with them."""
    table: str | None = None
    """database: the table, or schema.table."""
    query: str | None = None
    """database: a SELECT in place of a table."""
    base: Path = field(default_factory=Path.cwd)
    """The folder of the configuration file."""
    max_rows: int | None = None
    max_bytes: int | None = None
    """csv: after decompression."""
    timeout: float = 600.0
    """Seconds for all statements of one call."""
    slice_limit: int = 200
    """The most values that a slice column may have; a question's own limit holds where it is lower."""
    keep_raw: bool = True
    """False: rejected rows are returned without their values and ids."""
    memory: int = 1 << 30
    """Bytes that an embedded engine may use before it spills to disk."""


@dataclass(frozen=True, slots=True)
class Survey:
    """What `check`, `draft` and the first look want to know of a source before they trust it."""

    columns: tuple[str, ...]
    rows: tuple[tuple[str | None, ...], ...]
    """The first rows as text, at most 200, in the order of `columns`; none when a question was given."""
    predictions: tuple[tuple[str, int], ...] = ()
    """The most frequent normalised prediction values with their rows, at most 50; usable or not."""
    labels: tuple[tuple[str, int], ...] = ()
    pairs: int = 0
    """Rows with both a prediction and a label."""
    differing: int = 0
    """Pairs that differ."""
    first_time: int | None = None
    """Earliest believable prediction time of the question's rows (its `where` applied), epoch seconds."""
    last_time: int | None = None
    slices: tuple[tuple[str, int], ...] = ()
    """Slice column -> number of distinct values."""

    @property
    def disjoint(self) -> bool:
        """Labels and predictions both occur and share no value: the columns do not speak of the same thing."""
        known = {value for value, _ in self.predictions}
        return bool(known) and bool(self.labels) and not any(value in known for value, _ in self.labels)


class Source(Protocol):
    """The interface that `look`, `check`, `draft` and `rejects` know."""

    @property
    def name(self) -> str:
        """The source's name in the configuration."""

    def tally(self, questions: Sequence[Question]) -> list[Tally]:
        """Answer all questions, in their order, from one consistent read.

        Raises `SourceFailed` when any of them cannot be answered in full; `UsageError` when a question makes no sense.
        """

    def rejected(self, question: Question, reason: str, limit: int = 20) -> list[RejectedRow]:
        """Return at most `limit` of the rows that were rejected for `reason`."""

    def signature(self) -> str | None:
        """Files: changes whenever path, size, modification time or inode of any file does. Databases: None."""

    def columns(self) -> list[str]:
        """Return the names of the columns, in order."""

    def survey(self, question: Question | None = None) -> Survey:
        """Look at the columns and first rows (no question), or at the values that a question would read."""
