"""The evidence that travels with a retraining notice: counts as CSV, the verdict as JSON."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Sequence
from datetime import UTC, datetime
from typing import Final

from watcher.answer import standing_json
from watcher.notices.base import Attachment
from watcher.notices.envelope import finite, rfc3339
from watcher.records import INTEGERS, CellCounts, Head, Standing, Terms
from watcher.text import csv_cell

MOST: Final = 524_288
"""Characters of the CSV that travel; receivers commonly take 1 MiB. The oldest buckets give way, and it is said."""


def bundle(
    terms: Terms, standings: Sequence[Standing], counts: Sequence[CellCounts], head: Head
) -> tuple[Attachment, ...]:
    """`counts.csv` (one line a slice, bucket and level) and `verdict.json` (the standings in the form of the look's JSON)."""
    table, left_out = counts_csv(counts, terms.released)
    verdict = {
        "promise": terms.promise,
        "model": terms.model,
        "version": terms.version,
        "head": str(head),
        "released": rfc3339(datetime.fromtimestamp(terms.released, UTC)),
        "standings": [finite(standing_json(standing)) for standing in standings],
        "counts_left_out": left_out,
    }
    return (
        Attachment("counts.csv", "text/csv", table),
        Attachment("verdict.json", "application/json", json.dumps(verdict, ensure_ascii=False, allow_nan=False)),
    )


def counts_csv(counts: Sequence[CellCounts], released: int, most: int = MOST) -> tuple[str, int]:
    """(the table, how many of its oldest lines were left out to keep it under `most` characters).

    Sorted by bucket, slice and level; times RFC 3339; slice values are outside text, so those that a spreadsheet would
    take for a formula get a leading apostrophe. `released` is where the first bucket starts, epoch seconds.
    """
    ordered = sorted((row for row in counts if row.bucket >= released), key=_order)
    lines = [_line(_cells(row)) for row in ordered]
    header = _line(("bucket", "slice_column", "slice_value", "level", *INTEGERS, "newest_label"))
    room = most - len(header)
    kept = 0
    for line in reversed(lines):
        room -= len(line)
        if room < 0:
            break
        kept += 1
    left_out = len(lines) - kept
    return header + "".join(lines[left_out:]), left_out


def _order(row: CellCounts) -> tuple[int, str, str, str]:
    return (row.bucket, row.column, row.value, row.level)


def _cells(row: CellCounts) -> tuple[str | int, ...]:
    integers = (getattr(row.counts, name) for name in INTEGERS)
    newest = "" if row.counts.newest is None else _time(row.counts.newest)
    return (_time(row.bucket), csv_cell(row.column), csv_cell(row.value), row.level, *integers, newest)


def _time(epoch: int) -> str:
    return rfc3339(datetime.fromtimestamp(epoch, UTC))


def _line(cells: Sequence[str | int]) -> str:
    out = io.StringIO()
    csv.writer(out, lineterminator="\n").writerow(cells)
    return out.getvalue()
