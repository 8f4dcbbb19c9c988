"""What is known of one promise version, laid out for the verdict; the live look and the audit build it alike."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from itertools import pairwise

from watcher.bounds.parts import declared_parts, discovered_part, part_of_whole
from watcher.buckets import bucket_end, bucket_starts
from watcher.judging import Book, Key, Memory
from watcher.path import NOTHING, Levels, add, entered, path, total
from watcher.records import Cell, CellCounts, Counts, Terms

Table = dict[Key, dict[int, dict[str, Counts]]]
"""Counts by cell, bucket and level."""


def table(rows: Iterable[CellCounts]) -> Table:
    """Counts as a nested mapping."""
    result: Table = {}
    for row in rows:
        result.setdefault((row.column, row.value), {}).setdefault(row.bucket, {})[row.level] = row.counts
    return result


def first_cells(terms: Terms) -> tuple[Cell, ...]:
    """The cells that the terms declare: the whole, then every declared slice value, with its part of the risk."""
    cells = [Cell("", "", part_of_whole(bool(terms.slices)), 0)]
    weights = [weight for each in terms.slices for weight in each.weights]
    names = [(each.column, value) for each in terms.slices for value in each.values]
    parts = declared_parts(weights) if weights else ()
    cells += [Cell(*name, part, 0) for name, part in zip(names, parts, strict=True)]
    return tuple(sorted(cells, key=lambda cell: cell.key))


def discovered(known: Sequence[Cell], rows: Iterable[CellCounts]) -> tuple[Cell, ...]:
    """New cells for slice values that occur and are not known yet, in order of their first bucket, then by name."""
    seen = {cell.key for cell in known}
    order = max((cell.discovered for cell in known), default=0)
    first: dict[Key, int] = {}
    for row in rows:
        key = (row.column, row.value)
        if key not in seen and row.counts.predictions:
            first[key] = min(row.bucket, first.get(key, row.bucket))
    new = sorted(first, key=lambda key: (first[key], key))
    return tuple(Cell(*key, discovered_part(order + i), order + i) for i, key in enumerate(new, start=1))


def sealing(terms: Terms, sealed_until: int, now: int) -> tuple[tuple[int, ...], int]:
    """Starts of the buckets that a successful look at `now` seals, and the end of the newest one."""
    # One second more: a bucket that ends exactly label_lag ago is due, and its end is the start of the next.
    starts = bucket_starts(terms.released, now - terms.label_lag + 1, terms.bucket, terms.time_zone)
    done, end = [], sealed_until
    for start, stop in pairwise(starts):
        if start >= sealed_until and stop + terms.label_lag <= now:
            done.append(start)
            end = stop
    return tuple(done), end


def next_sealing(terms: Terms, sealed_until: int) -> int:
    """When the oldest open bucket is due, epoch seconds."""
    following = bucket_starts(sealed_until, sealed_until + 2 * max(terms.bucket, 86400), terms.bucket, terms.time_zone)
    return following[1] + terms.label_lag


def build(
    terms: Terms,
    digest: str,
    cells: Sequence[Cell],
    counts: Mapping[Key, Mapping[int, Levels]],
    before: int,
    until: int,
    memories: Mapping[Key, Memory],
    previous: Mapping[Key, Mapping[int, Levels]] | None = None,
) -> Book:
    """The book of a promise version: buckets below `until` are sealed, those from `before` on in this look.

    `previous`: the counts as of the look before; arriving labels need them, sealed counting does not. None: as now.
    """
    arriving = terms.count == "arriving"
    end = _newest_counted(terms, counts) if arriving else until
    starts = tuple(s for s in bucket_starts(terms.released, end, terms.bucket, terms.time_zone) if s < end)
    provisional = {}
    for key, buckets in counts.items():
        waiting = NOTHING
        for start, levels in buckets.items():
            if start >= end:
                waiting = add(waiting, total(levels))
        provisional[key] = waiting
    ordered = tuple(sorted(cells, key=lambda cell: cell.key))
    return Book(
        terms=terms,
        digest=digest,
        cells=ordered,
        starts=starts,
        end=end,
        fresh=sum(start < before for start in starts),
        paths={cell.key: path(terms, starts, counts.get(cell.key, {})) for cell in ordered},
        provisional=provisional,
        memories=memories,
        before=_pairs(terms, counts if previous is None else previous) if arriving else {},
        sealed=tuple(start for start in starts if before <= start < until),
        sealed_until=until,
    )


def _newest_counted(terms: Terms, counts: Mapping[Key, Mapping[int, Levels]]) -> int:
    """End of the newest bucket in which anything of the measure was labelled; `released` while there is none."""
    whole = counts.get(("", ""), {})
    newest = max((start for start, levels in whole.items() if entered(terms, total(levels))[0]), default=None)
    return terms.released if newest is None else bucket_end(newest, terms.bucket, terms.time_zone)


def _pairs(terms: Terms, counts: Mapping[Key, Mapping[int, Levels]]) -> dict[Key, dict[int, tuple[int, int]]]:
    """Labels and errors of the measure by cell and bucket, where there are labels."""
    found: dict[Key, dict[int, tuple[int, int]]] = {}
    for key, buckets in counts.items():
        inner = found.setdefault(key, {})
        for start, levels in buckets.items():
            n, k = entered(terms, total(levels))
            if n:
                inner[start] = (n, int(k))
    return found
