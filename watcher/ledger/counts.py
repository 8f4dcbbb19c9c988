"""The bucket cache of one promise version as columns: 400,000 rows are too many for one object each."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, select

from watcher.ledger.tables import BUCKET, CELL
from watcher.records import INTEGERS, Cell, CellCounts, Counts

NEVER: Final = -1
"""Stands for "none" in the columns of times and look numbers."""


@dataclass(frozen=True, slots=True)
class CountTable:
    """Rows sorted by (cell, bucket, level); every array has one item a row."""

    cells: tuple[Cell, ...]
    cell: NDArray[np.int64]
    """Position in `cells`."""
    bucket: NDArray[np.int64]
    """Start, epoch seconds."""
    level: tuple[str, ...]
    integers: NDArray[np.int64]
    """(rows, 9), the columns in the order of `records.INTEGERS`."""
    newest: NDArray[np.int64]
    """Epoch seconds; -1: no label yet."""
    sealed_by: NDArray[np.int64]
    """Number of the look that sealed the bucket; -1: open."""

    def __len__(self) -> int:
        return len(self.level)

    def column(self, name: str) -> NDArray[np.int64]:
        """One of `records.INTEGERS`. Raises ValueError for another name."""
        values: NDArray[np.int64] = self.integers[:, INTEGERS.index(name)]
        return values

    def records(self) -> list[CellCounts]:
        """The rows as records, sorted by (column, value, bucket, level): for the few open buckets, not for a year."""
        keys = [c.key for c in self.cells]
        rows = zip(
            self.cell.tolist(),
            self.bucket.tolist(),
            self.level,
            self.integers.tolist(),
            self.newest.tolist(),
            strict=True,
        )
        made = [
            CellCounts(
                keys[cell][0], keys[cell][1], bucket, level, counts_of(integers, None if newest == NEVER else newest)
            )
            for cell, bucket, level, integers, newest in rows
        ]
        return sorted(made, key=lambda c: (c.column, c.value, c.bucket, c.level))


def counts_of(integers: Sequence[int], newest: int | None) -> Counts:
    """The record of nine integers in the order of `records.INTEGERS`."""
    predictions, labels, errors, positives, misses, false_alarms, loss_down, loss_up, clusters = integers
    return Counts(predictions, labels, errors, positives, misses, false_alarms, loss_down, loss_up, clusters, newest)


def read_counts(
    connection: Connection, term_id: int, cells: Sequence[tuple[int, Cell]], since: int | None = None
) -> CountTable:
    """The cache of a term, buckets starting at or after `since` (None: all)."""
    statement = (
        select(BUCKET)
        .join_from(CELL, BUCKET, BUCKET.c.cell == CELL.c.id)
        .where(CELL.c.term == term_id)
        .order_by(BUCKET.c.cell, BUCKET.c.start, BUCKET.c.level)
    )
    if since is not None:
        statement = statement.where(BUCKET.c.start >= since)
    return _table(connection.execute(statement).fetchall(), cells)


def _table(rows: Iterable[Any], cells: Sequence[tuple[int, Cell]]) -> CountTable:
    columns = list(zip(*rows, strict=True)) or [()] * (5 + len(INTEGERS))
    ids, starts, levels, *integers, newest, sealed_by = columns
    order = np.array([i for i, _ in cells], dtype=np.int64)
    by_id = np.argsort(order)
    at = by_id[np.searchsorted(order, np.array(ids, dtype=np.int64), sorter=by_id)] if len(order) else by_id
    return CountTable(
        cells=tuple(cell for _, cell in cells),
        cell=at.astype(np.int64),
        bucket=np.array(starts, dtype=np.int64),
        level=tuple(levels),
        integers=np.array(integers, dtype=np.int64).T.reshape(-1, len(INTEGERS)),
        newest=_optional(newest),
        sealed_by=_optional(sealed_by),
    )


def _optional(values: Sequence[int | None]) -> NDArray[np.int64]:
    return np.array([NEVER if v is None else v for v in values], dtype=np.int64)
