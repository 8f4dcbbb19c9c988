"""The bucket cache of one promise version as columns: 400,000 rows are too many for one object each."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from operator import attrgetter
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, Select, func, select

from watcher.ledger.tables import BUCKET, CELL
from watcher.records import INTEGERS, Cell, CellCounts, Counts

_LEVEL: Final = 2
"""Place of the level among the columns of the table."""
_PART: Final = 20_000
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


integers_of: Final[Callable[[Counts], tuple[int, ...]]] = attrgetter(*INTEGERS)
"""The nine integers of a record, in the order of `records.INTEGERS`."""


def counts_of(integers: Sequence[int], newest: int | None) -> Counts:
    """The record of nine integers in the order of `records.INTEGERS`."""
    predictions, labels, errors, positives, misses, false_alarms, loss_down, loss_up, clusters = integers
    return Counts(predictions, labels, errors, positives, misses, false_alarms, loss_down, loss_up, clusters, newest)


def read_counts(
    connection: Connection, term_id: int, cells: Sequence[tuple[int, Cell]], since: int | None = None
) -> CountTable:
    """The cache of a term, buckets starting at or after `since` (None: all)."""
    columns = [func.coalesce(c, NEVER) if c.name in ("newest", "sealed_by") else c for c in BUCKET.c]
    statement = select(*columns).where(BUCKET.c.cell.in_(select(CELL.c.id).where(CELL.c.term == term_id)))
    if since is not None:
        statement = statement.where(BUCKET.c.start >= since)
    numbers, levels = _fetch(connection, statement)
    ids = np.array([cell_id for cell_id, _ in cells], dtype=np.int64)
    by_id = np.argsort(ids)
    place = by_id[np.searchsorted(ids, numbers[:, 0], sorter=by_id)] if len(ids) else numbers[:, 0]
    # Sorted here: the database would sort by the cell's id, and levels by its own collation.
    order = np.lexsort((np.array(levels, dtype=np.str_), numbers[:, 1], place))
    numbers = numbers[order]
    return CountTable(
        cells=tuple(cell for _, cell in cells),
        cell=place[order],
        bucket=numbers[:, 1],
        level=tuple(map(levels.__getitem__, order.tolist())),
        integers=numbers[:, 2 : 2 + len(INTEGERS)],
        newest=numbers[:, -2],
        sealed_by=numbers[:, -1],
    )


def _fetch(connection: Connection, statement: Select[Any]) -> tuple[NDArray[np.int64], list[str]]:
    """All columns but the level as integers, and the levels. The driver's own tuples are taken, a part at a time: these
    columns need no conversion, and 400,000 row objects would be made only to be thrown away.
    """
    cursor = connection.execute(statement).cursor
    assert cursor is not None
    parts = [np.empty((0, len(BUCKET.c) - 1), dtype=np.int64)]
    levels: list[str] = []
    while rows := cursor.fetchmany(_PART):
        columns = list(zip(*rows, strict=True))
        levels += columns.pop(_LEVEL)
        parts.append(np.array(columns, dtype=np.int64).T)
    return np.concatenate(parts), levels
