"""A plain Python count of the same rows, written from the contract alone: it shares no code with the statement."""

from __future__ import annotations

import math
import re
from collections import Counter, defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo

from watcher.records import INTEGERS, Question, Tally

Row = dict[str, str | None]


def norm(value: str | None) -> str | None:
    if value is None:
        return None
    value = value.strip(" \t\r\n")
    if value == "":
        return None
    head, dot, tail = value.partition(".")
    digits = head.removeprefix("-")
    if dot and tail and set(tail) == {"0"} and digits.isascii() and digits.isdigit():
        return head
    return {"True": "true", "TRUE": "true", "False": "false", "FALSE": "false"}.get(value, value)


def number(value: str | None) -> float | None:
    value = (value or "").strip(" \t\r\n")
    if not re.fullmatch(r"[-+]?(\d+\.?\d*|\.\d+)([eE][-+]?\d\d?)?", value, re.ASCII):
        return None
    return float(value)


def instant(value: str | None, zone: str | None) -> int | None:
    value = (value or "").strip(" \t\r\n")
    match = re.fullmatch(
        r"(\d{4})-(\d\d)-(\d\d)[T ](\d\d):(\d\d):(\d\d)(?:\.\d{1,9})?([Zz]|[-+]\d\d:\d\d)?", value, re.ASCII
    )
    if not match:
        return None
    *parts, offset = match.groups()
    try:
        wall = datetime(*map(int, parts))  # noqa: DTZ001 - a wall clock reading has no zone
    except ValueError:
        return None
    if offset is None:
        if zone is None:
            return None
        there = wall.replace(tzinfo=ZoneInfo(zone), fold=0)
        if there.astimezone(UTC).astimezone(ZoneInfo(zone)).replace(tzinfo=None) != wall:
            return None
        result = there.timestamp()
    elif offset in "Zz":
        result = wall.replace(tzinfo=UTC).timestamp()
    else:
        hours, minutes = int(offset[1:3]), int(offset[4:6])
        if hours > 23 or minutes > 59:
            return None
        shift = timedelta(hours=hours, minutes=minutes) * (1 if offset[0] == "+" else -1)
        result = (wall - shift).replace(tzinfo=UTC).timestamp()
    result = math.floor(result)
    return result if 1970 <= datetime.fromtimestamp(result, UTC).year <= 2100 else None


def nominal(at: int, q: Question) -> datetime:
    """The wall clock reading at which the bucket of `at` starts."""
    wall = datetime.fromtimestamp(at, ZoneInfo(q.time_zone)).replace(tzinfo=None, fold=0)
    since_midnight = wall - wall.replace(hour=0, minute=0, second=0)
    width = timedelta(seconds=q.bucket)
    return wall - since_midnight % width


def first_instant(wall: datetime, q: Question) -> int:
    return int(wall.replace(tzinfo=ZoneInfo(q.time_zone), fold=0).timestamp())


def start_of(at: int, q: Question) -> int:
    return max(q.released, first_instant(nominal(at, q), q))


def end_of(at: int, q: Question) -> int:
    return first_instant(nominal(at, q) + timedelta(seconds=q.bucket), q)


@dataclass
class Item:
    """A row on its way."""

    row: Row
    kind: str
    at: int | None
    late: bool
    outcome: Any
    id: str | None
    prediction: str | None
    rank: tuple[Any, ...]
    level: str = ""
    bucket: int = 0
    extras: tuple[str, ...] = field(default=())

    @property
    def says(self) -> tuple[Any, ...]:
        return (self.at, self.prediction, self.outcome)


def revision_key(value: str | None) -> tuple[int, bytes]:
    if value is None:
        return (-1, b"")
    if re.fullmatch("[0-9]+", value):
        digits = value.lstrip("0")
        return (len(digits), digits.encode())
    return (0, value.encode())


def items(rows: Sequence[Row], q: Question) -> list[Item]:
    c = q.columns
    read_from = q.open_from - (q.cluster_span or 0 if c.cluster else 0)
    found = []
    for row in rows:
        at = instant(row[c.time], q.source_time_zone)
        seen_text = norm(row[c.labelled_at]) if c.labelled_at else None
        seen = instant(seen_text, q.source_time_zone)
        late = at is not None and at >= 0 and seen is not None and seen >= min(q.now, end_of(at, q) + q.label_lag)
        raw = row[c.loss] if c.loss else row[c.error] if c.error else row[c.label or ""]
        outcome = norm(raw) if not c.loss else ((raw or "").strip(" \t\r\n") or None)
        if late or (c.selected and norm(row[c.selected]) not in ("1", "true")):
            outcome = None
        ident = norm(row[c.id]) if c.id else None
        if any(norm(row[name]) != norm(value) for name, value in q.where) or (
            at is not None and (at < read_from or (q.at_given and at >= q.now))
        ):
            kind = "outside"
        elif c.id and ident is None:
            kind = "no-id"
        elif at is None or (seen_text is not None and seen is None):
            kind = "bad-time"
        elif at > q.now:
            kind = "future-time"
        else:
            kind = "usable"
        revision = revision_key(norm(row[c.revision])) if c.revision else (0, b"")
        prediction = norm(row[c.prediction]) if c.prediction else None
        found.append(Item(row, kind, at, late, outcome, ident, prediction, (not late, revision)))
    return found


def without_repetitions(found: list[Item], q: Question) -> None:
    groups: dict[str, list[Item]] = defaultdict(list)
    for item in found:
        if item.kind == "usable" and q.columns.id:
            groups[str(item.id)].append(item)
    for group in groups.values():
        best = max(item.rank for item in group)
        top = [item for item in group if item.rank == best]
        for item in group:
            if item.rank != best:
                item.kind = "duplicate"
        if len({item.says for item in top}) > 1:
            for item in top:
                item.kind = "conflicting-duplicate"
        else:
            # equal rows may differ in other columns: the one whose other values sort first stands for all
            top.sort(key=lambda item: others(item.row, q))
            for item in top[1:]:
                item.kind = "duplicate"


def others(row: Row, q: Question) -> tuple[float | bytes, ...]:
    c = q.columns
    numbers = [number(row[name]) for name in (c.weight, c.labelling_probability) if name]
    texts = [norm(row[name]) for name in (c.cluster, c.selected) if name]
    return (
        *[-1.0 if value is None else value for value in numbers],
        *[(text or "").encode() for text in [*texts, *[norm(row[name]) for name in q.slices]]],
    )


def judge(found: list[Item], q: Question) -> None:
    c = q.columns
    classes = {norm(value) for value in q.classes}
    for item in found:
        if item.kind != "usable":
            continue
        labelled = item.outcome is not None
        weight = number(item.row[c.weight]) if c.weight else None
        chance = number(item.row[c.labelling_probability]) if c.labelling_probability else None
        chosen = norm(item.row[c.selected]) if c.selected else None
        if (c.error and labelled and item.outcome not in ("0", "1", "true", "false")) or (
            c.label
            and (
                item.prediction is None
                or (classes and not {item.prediction, item.outcome or item.prediction} <= classes)
            )
        ):
            item.kind = "unknown-label"
        elif (
            (c.weight and labelled and weight not in [float(level) for level in q.weight_levels])
            or (c.selected and chosen not in ("0", "1", "true", "false"))
            or (
                c.selected
                and chosen in ("1", "true")
                and chance not in [float(level) for level in q.labelling_probabilities]
            )
        ):
            item.kind = "bad-weight"
        elif c.cluster and norm(item.row[c.cluster]) is None:
            item.kind = "no-cluster"
        elif c.loss and labelled and not 0 <= (number(item.outcome) if number(item.outcome) is not None else -1) <= 1:
            item.kind = "bad-loss"
        if c.weight and labelled and item.kind == "usable":
            item.level = next(level for level in q.weight_levels if float(level) == weight)
        if c.selected and chosen in ("1", "true") and item.kind == "usable":
            item.level = next(level for level in q.labelling_probabilities if float(level) == chance)
        if item.kind == "usable" and item.at is not None and item.at >= q.open_from:
            item.bucket = start_of(item.at, q)


def sums(item: Item, q: Question) -> Counter[str]:
    c = q.columns
    result = Counter({"predictions": 1})
    if item.outcome is None:
        return result
    result["labels"] = 1
    if c.loss:
        value = number(item.outcome) or 0.0
        result["loss_ppm_down"], result["loss_ppm_up"] = math.floor(value * 1e6), math.ceil(value * 1e6)
        return result
    wrong = item.outcome in ("1", "true") if c.error else item.outcome != item.prediction
    result["errors"] = int(wrong)
    if q.positive is not None and c.label:
        positive = item.outcome == norm(q.positive)
        result["positives"], result["misses"] = int(positive), int(positive and wrong)
        result["false_alarms"] = int(wrong and not positive)
    return result


def size_and_wrong(total: Counter[str], q: Question) -> tuple[int, int]:
    if q.measure == "miss":
        return total["positives"], total["misses"]
    if q.measure == "false-alarm":
        return total["labels"] - total["positives"], total["false_alarms"]
    return total["labels"], total["errors"]


def cluster(found: list[Item], q: Question) -> None:
    groups: dict[str, list[Item]] = defaultdict(list)
    for item in found:
        if item.kind == "usable":
            groups[str(norm(item.row[q.columns.cluster or ""]))].append(item)
    for group in groups.values():
        began = min(item.at or 0 for item in group)
        inside = [item for item in group if (item.at or 0) <= began + (q.cluster_span or 0)]
        total = sum((sums(item, q) for item in inside), Counter())
        for item in group:
            if item not in inside:
                item.kind = "cluster-too-long"
            elif began < q.open_from:
                item.kind = "outside"
            elif size_and_wrong(total, q)[0] > (q.n_max or 0):
                item.kind = "cluster-too-large"
            else:
                item.bucket = start_of(began, q)
    for item in found:
        if item.at is not None and item.at < q.open_from:
            item.kind = "outside"


def count(rows: Sequence[Row], q: Question) -> dict[str, Any]:
    """Count everything that a tally holds."""
    found = items(rows, q)
    without_repetitions(found, q)
    judge(found, q)
    if q.columns.cluster:
        cluster(found, q)
    cells: dict[tuple[str, str, int, str], Counter[str]] = defaultdict(Counter)
    newest: dict[tuple[str, str, int, str], int] = {}
    for column in ("", *q.slices):
        groups: dict[tuple[str, int, str], list[Item]] = defaultdict(list)
        for item in found:
            if item.kind == "usable":
                value = (norm(item.row[column]) or "") if column else ""
                unit = str(norm(item.row[q.columns.cluster])) if q.columns.cluster else ""
                groups[(value, item.bucket, unit)].append(item)
        for (value, bucket, _), members in groups.items():
            total = sum((sums(item, q) for item in members), Counter())
            for item in members:
                level = item.level
                if q.columns.cluster:
                    level = "{}:{}".format(*size_and_wrong(total, q))
                key = (column, value, bucket, level)
                cells[key] += sums(item, q)
                if item.outcome is not None and item.at is not None:
                    newest[key] = max(newest.get(key, item.at), item.at)
            if q.columns.cluster:
                cells[key]["clusters"] += 1
    kinds = Counter(item.kind for item in found)
    late = [
        item
        for item in late_candidates(rows, q)
        if item.at is not None
        and item.at >= q.released
        and end_of(item.at, q) + q.label_lag <= q.now
        and item.late
        and item.outcome is not None
    ]
    return {
        "cells": {key: (*[total[name] for name in INTEGERS], newest.get(key)) for key, total in cells.items()},
        "rejected": {kind: n for kind, n in kinds.items() if kind not in ("usable", "outside", "duplicate")},
        "duplicates": kinds["duplicate"],
        "outside": kinds["outside"],
        "late": (len({item.id for item in late if item.id is not None}) if q.columns.id else len(late))
        if q.columns.labelled_at
        else 0,
    }


def late_candidates(rows: Sequence[Row], q: Question) -> list[Item]:
    c = q.columns
    found = []
    for row in rows:
        at = instant(row[c.time], q.source_time_zone)
        seen = instant(row[c.labelled_at], q.source_time_zone) if c.labelled_at else None
        if at is None or seen is None or any(norm(row[name]) != norm(value) for name, value in q.where):
            continue
        late = seen >= end_of(at, q) + q.label_lag and seen < q.now
        raw = row[c.loss] if c.loss else row[c.error] if c.error else row[c.label or ""]
        found.append(Item(row, "", at, late, norm(raw), norm(row[c.id]) if c.id else None, None, ()))
    return found


def told(tally: Tally) -> dict[str, Any]:
    """Return a tally in the oracle's form."""
    return {
        "cells": {
            (cell.column, cell.value, cell.bucket, cell.level): (
                *[getattr(cell.counts, name) for name in INTEGERS],
                cell.counts.newest,
            )
            for cell in tally.cells
        },
        "rejected": dict(tally.rejected),
        "duplicates": tally.duplicates,
        "outside": tally.outside,
        "late": tally.late_labels,
    }
