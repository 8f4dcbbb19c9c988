"""`count = "arriving"`: labels count in the order in which looks first saw them, corrections amend earlier steps.

A step is what one look newly saw of one bucket. Within a look the steps go bucket by bucket; the total is compared after every
one. Steps whose bucket is sealed can no longer be amended; a beginning of the path that consists of such steps only is folded
into the counts, so that what must be remembered stays as short as the open buckets make it.

Right only if the delay of a label does not depend on its outcome. Then P(a breach that still stands when all corrections are in
is false) <= risk; breaches that are withdrawn later are not bounded (docs/method.md).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from watcher.records import Terms

Pair = tuple[int, int]
"""Labels and errors."""


@dataclass(frozen=True, slots=True)
class Step:
    """What one look newly saw of one bucket."""

    bucket: int
    """Start, epoch seconds."""
    labels: int
    errors: int


@dataclass(frozen=True, slots=True)
class Path:
    """The path after a look."""

    base: Mapping[int, Pair]
    """Counts by bucket of everything before `steps`."""
    steps: tuple[Step, ...]
    """Old steps, amended where corrections made it necessary, then the new ones."""
    replay: int
    """Position of the first step that must be judged (again)."""
    amended: bool
    """A step that had been judged changed."""


def known_steps(memory: Mapping[str, Any]) -> tuple[Step, ...]:
    """The steps that a cell's memory keeps."""
    return tuple(Step(*step) for step in memory.get("steps", ()))


def advance_path(before: Mapping[int, Pair], now: Mapping[int, Pair], steps: Sequence[Step]) -> Path:
    """The path after counts went from `before` to `now`, bucket by bucket.

    `steps` are those remembered, whose sums are part of `before`. Where 0 <= errors <= labels holds for the difference of
    a bucket it is a new step; otherwise steps of that bucket are amended, newest first, by the least change that keeps
    0 <= errors <= labels in each.
    """
    kept = list(steps)
    base = dict(before)
    for step in kept:
        n, k = base.get(step.bucket, (0, 0))
        base[step.bucket] = (n - step.labels, k - step.errors)
    first, amended = len(kept), False
    new: list[Step] = []
    for bucket in sorted(set(before) | set(now)):
        dn, dk = (a - b for a, b in zip(now.get(bucket, (0, 0)), before.get(bucket, (0, 0)), strict=True))
        fresh_n = max(dn, 0)
        fresh_k = min(max(dk, 0), fresh_n)
        if fresh_n:
            new.append(Step(bucket, fresh_n, fresh_k))
        rest = (dn - fresh_n, dk - fresh_k)
        if rest != (0, 0):
            position = _amend(kept, new, bucket, *rest)
            first, amended = min(first, position), amended or position < len(steps)
    return Path({b: pair for b, pair in base.items() if pair != (0, 0)}, (*kept, *new), first, amended)


def _amend(kept: list[Step], new: list[Step], bucket: int, dn: int, dk: int) -> int:
    """Spread a correction (dn <= 0) over the steps of a bucket, newest first; return the first position that changed."""
    first = len(kept)
    places = [(new, i) for i in range(len(new) - 1, -1, -1)] + [(kept, i) for i in range(len(kept) - 1, -1, -1)]
    for steps, i in places:
        if (dn, dk) == (0, 0):
            break
        step = steps[i]
        if step.bucket != bucket:
            continue
        n, k = step.labels, step.errors
        fewer = min(max(dk, -k), 0)
        k, dk = k + fewer, dk - fewer
        gone = -min(-dn, n - k)
        n, dn = n + gone, dn - gone
        more = min(max(dk, 0), n - k)
        k, dk = k + more, dk - more
        if (n, k) != (step.labels, step.errors):
            steps[i] = Step(bucket, n, k)
            first = min(first, i) if steps is kept else first
    if (dn, dk) != (0, 0):
        raise ValueError(f"bucket {bucket}: a correction by {dn} labels and {dk} errors finds no labels to correct")
    return first


def remembered(steps: Iterable[Step], sealed_until: int) -> list[list[int]]:
    """The steps that must be kept: from the first on whose bucket is still open; empty ones are left out."""
    kept = list(steps)
    position = next((i for i, step in enumerate(kept) if step.bucket >= sealed_until), len(kept))
    return [[step.bucket, step.labels, step.errors] for step in kept[position:] if step.labels]


@dataclass(frozen=True, slots=True)
class Delays:
    """Early and late labels of sealed buckets, for the test whether the delay depends on the outcome."""

    early: Mapping[int, Pair]
    """Open buckets: what was seen no later than label_lag/2 after the end of the bucket."""
    tables: tuple[tuple[int, int, int, int], ...]
    """Sealed buckets in order: early labels, early errors, late labels, late errors."""


def known_delays(memory: Mapping[str, Any]) -> Delays:
    """What a cell's memory keeps of the delays."""
    early = {int(bucket): (n, k) for bucket, n, k in memory.get("early", ())}
    return Delays(early, tuple((a, b, c, d) for a, b, c, d in memory.get("delays", ())))


def advance_delays(
    known: Delays, terms: Terms, ends: Mapping[int, int], counts: Mapping[int, Pair], sealed: Sequence[int], now: int
) -> Delays:
    """The delays after a look: `ends` by start of the bucket, `counts` as seen now, `sealed` the buckets just sealed."""
    seen = {bucket: pair for bucket, pair in counts.items() if now <= ends[bucket] + terms.label_lag // 2}
    early = {**known.early, **seen}
    tables = list(known.tables)
    for bucket in sealed:
        n, k = counts.get(bucket, (0, 0))
        early_n, early_k = early.pop(bucket, (0, 0))
        # A corrected bucket may hold fewer labels or errors than were seen early: the late part is then empty.
        early_n, early_k = min(early_n, n), min(early_k, k)
        early_k = min(early_k, early_n)
        late_n = n - early_n
        late_k = min(k - early_k, late_n)
        tables.append((early_n, early_k, late_n, late_k))
    return Delays(early, tuple(tables))


def delays_memory(delays: Delays) -> dict[str, Any]:
    """What a cell's memory keeps."""
    return {
        "early": [[bucket, n, k] for bucket, (n, k) in sorted(delays.early.items())],
        "delays": [list(table) for table in delays.tables],
    }
