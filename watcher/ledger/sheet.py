"""The sheet of a look: the very bytes that are hashed, as sorted lines of canonical JSON, and their parser.

    ["promise",0,"damage-photos","1",SEALED_UNTIL,CLOSED,UNLISTED,UNCERTIFIED,STALE_AFTER,LATE_LABELS]
    ["terms",0,{...}]                                  at the first look only
    ["cell",0,"depot","Alder","2/15",0]                column, value, part, order of discovery
    ["count",0,"depot","Alder",START,LEVEL,PREDICTIONS,LABELS,ERRORS,...,NEWEST - START or null]
    ["gone",0,"depot","Alder",START,LEVEL]
    ["sealed",0,START]
    ["event",0,KIND,PROMISE,VERSION,COLUMN,VALUE,BUCKET,{facts}]
    ["rejected",PROMISE,REASON,ROWS]

The second item of the first six is the place of the promise in the look, the second of an event its number.
"""

from __future__ import annotations

import zlib
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from watcher.ledger import canon
from watcher.ledger.counts import counts_of, integers_of
from watcher.ledger.terms import canonical_terms, terms_from
from watcher.records import Cell, CellCounts, Entry, Event, Remarks, TermDraft, Terms

ZLIB_LEVEL = 9


@dataclass(frozen=True, slots=True)
class Sheet:
    """What a sheet says: drafts without standings and memories, events, rejected counts."""

    terms: tuple[TermDraft, ...]
    events: tuple[Event, ...]
    rejected_counts: dict[str, dict[str, int]]


def sheet_text(entry: Entry) -> str:
    """The sheet of an entry; equal entries give equal bytes, whatever order their counts came in."""
    lines = [line for place, draft in enumerate(entry.terms) for line in _draft_lines(place, draft)]
    lines += [event_line(n, event) for n, event in enumerate(entry.events)]
    lines += [
        canon.line(["rejected", promise, reason, rows])
        for promise, reasons in entry.rejected_counts.items()
        for reason, rows in reasons.items()
        if rows
    ]
    lines.sort()
    return "".join(f"{line}\n" for line in lines)


def pack(text: str) -> bytes:
    """The stored form of a sheet."""
    return zlib.compress(text.encode(), ZLIB_LEVEL)


def unpack(blob: bytes) -> str:
    """The inverse of `pack`. Raises ValueError when the bytes are no sheet."""
    try:
        return zlib.decompress(blob).decode()
    except zlib.error as error:
        raise ValueError(f"the sheet cannot be unpacked: {error}") from error


def event_facts(event: Event) -> str:
    """The canonical JSON of an event's facts, as the event table holds it."""
    return canon.text(canon.plain(event.facts))


def event_line(n: int, event: Event) -> str:
    """The line of the n-th event."""
    e = event
    return canon.text(["event", n, e.kind, e.promise, e.version, e.column, e.value, e.bucket, canon.plain(e.facts)])


def part_text(part: Fraction) -> str:
    """A part of the risk as "p/q"."""
    return f"{part.numerator}/{part.denominator}"


def part_from(text: str) -> Fraction:
    """The inverse of `part_text`."""
    p, q = text.split("/")
    return Fraction(int(p), int(q))


def _draft_lines(place: int, draft: TermDraft) -> Iterator[str]:
    r = draft.remarks
    promise = ["promise", place, draft.promise, draft.version, draft.sealed_until, draft.closed]
    yield canon.text([*promise, r.unlisted, r.uncertified, r.stale_after, r.late_labels])
    if draft.new_terms is not None:
        # Spliced in as text: the object of this line is byte for byte what the term table holds.
        yield f'["terms",{place},{canonical_terms(draft.new_terms)}]'
    for cell in draft.new_cells:
        yield canon.line(["cell", place, cell.column, cell.value, part_text(cell.part), cell.discovered])
    yield from _count_lines(place, draft.counts)
    for column, value, bucket, level in draft.gone:
        yield canon.line(["gone", place, column, value, bucket, level])
    for start in draft.sealed:
        yield canon.line(["sealed", place, start])


def _count_lines(place: int, counts: Iterable[CellCounts]) -> Iterator[str]:
    # Put together by hand: the encoder would take seconds for the 400,000 rows of a first look. The texts are its own.
    heads: dict[tuple[str, str], str] = {}
    levels: dict[str, str] = {}
    for c in counts:
        key = (c.column, c.value)
        if key not in heads:
            heads[key] = canon.line(["count", place, *key])[:-1]
        if c.level not in levels:
            levels[c.level] = canon.text(c.level)
        newest = "null" if c.counts.newest is None else c.counts.newest - c.bucket
        integers = ",".join(map(str, integers_of(c.counts)))
        yield f"{heads[key]},{c.bucket},{levels[c.level]},{integers},{newest}]"


def parse_sheet(text: str) -> Sheet:
    """What the lines of a sheet say. Raises ValueError when a line cannot be read."""
    try:
        kinds = _by_kind(text)
        drafts = _drafts(kinds)
        events = _events(kinds.get("event", []))
        rejected: dict[str, dict[str, int]] = {}
        for promise, reason, rows in kinds.get("rejected", []):
            rejected.setdefault(promise, {})[reason] = rows
    except (TypeError, KeyError, IndexError, AttributeError, RecursionError) as error:
        raise ValueError(f"a line of the sheet cannot be read: {error!r}") from error
    return Sheet(drafts, events, rejected)


def _by_kind(text: str) -> dict[str, list[list[Any]]]:
    if text and not text.endswith("\n"):
        raise ValueError("the last line of the sheet is cut")
    kinds: dict[str, list[list[Any]]] = {}
    # One call for all lines: 400,000 calls of the JSON parser would take seconds.
    for kind, *rest in canon.parse(f"[{','.join(text.splitlines())}]"):
        kinds.setdefault(kind, []).append(rest)
    unknown = set(kinds) - {"promise", "terms", "cell", "count", "gone", "sealed", "event", "rejected"}
    if unknown:
        raise ValueError(f"the sheet has lines of unknown kinds {sorted(unknown)}")
    return kinds


def _drafts(kinds: dict[str, list[list[Any]]]) -> tuple[TermDraft, ...]:
    terms = {place: terms_from(canon.text(found)) for place, found in kinds.get("terms", [])}
    cells = _grouped(kinds.get("cell", []))
    counts = _grouped(kinds.get("count", []))
    gone = _grouped(kinds.get("gone", []))
    sealed = _grouped(kinds.get("sealed", []))
    return tuple(
        _draft(
            line,
            terms.get(line[0]),
            cells.get(line[0], []),
            counts.get(line[0], []),
            gone.get(line[0], []),
            sealed.get(line[0], []),
        )
        for line in sorted(kinds.get("promise", []))
    )


def _grouped(lines: Iterable[list[Any]]) -> dict[int, list[list[Any]]]:
    groups: dict[int, list[list[Any]]] = {}
    for place, *rest in lines:
        groups.setdefault(place, []).append(rest)
    return groups


def _draft(
    line: list[Any],
    terms: Terms | None,
    cells: list[list[Any]],
    counts: list[list[Any]],
    gone: list[list[Any]],
    sealed: list[list[Any]],
) -> TermDraft:
    _, promise, version, sealed_until, closed, unlisted, uncertified, stale_after, late = line
    return TermDraft(
        promise=promise,
        version=version,
        new_terms=terms,
        new_cells=tuple(
            Cell(c, v, part_from(part), n) for c, v, part, n in sorted(cells, key=lambda x: (x[3], x[0], x[1]))
        ),
        counts=tuple(sorted(map(_counted, counts), key=_place)),
        gone=tuple(sorted((c, v, bucket, level) for c, v, bucket, level in gone)),
        sealed=tuple(sorted(start for (start,) in sealed)),
        sealed_until=sealed_until,
        remarks=Remarks(unlisted, uncertified, stale_after, late),
        standings=(),
        memories=(),
        closed=closed,
    )


def _counted(line: list[Any]) -> CellCounts:
    column, value, bucket, level, *integers, newest = line
    return CellCounts(column, value, bucket, level, counts_of(integers, None if newest is None else newest + bucket))


def _place(counted: CellCounts) -> tuple[str, str, int, str]:
    return (counted.column, counted.value, counted.bucket, counted.level)


def _events(lines: list[list[Any]]) -> tuple[Event, ...]:
    ordered = sorted(lines, key=lambda line: line[0])
    if [line[0] for line in ordered] != list(range(len(ordered))):
        raise ValueError("the events of the sheet are not numbered 0, 1, 2, ...")
    return tuple(
        Event(kind, promise, version, column, value, bucket, canon.unplain(facts))
        for _, kind, promise, version, column, value, bucket, facts in ordered
    )
