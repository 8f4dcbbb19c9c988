"""A configuration to start from, guessed from the columns and first rows of a source; what cannot be guessed is marked."""

from __future__ import annotations

import json
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Final

from watcher.sources.base import Survey

MARK: Final = "# <-- decide"
NAMES: Final = {
    "id": ("id", "sample_id", "uuid", "key", "request_id", "case_id"),
    "revision": ("revision", "rev", "version_no"),
    "labelled_at": ("labelled_at", "labeled_at", "label_time", "inspected_at", "verified_at"),
    "time": ("time", "timestamp", "predicted_at", "decided_at", "created_at", "ts", "datetime", "date"),
    "prediction": ("prediction", "predicted", "pred", "predicted_label", "y_pred", "decision"),
    "label": ("label", "observed", "actual", "truth", "true_label", "y_true", "target", "outcome"),
    "error": ("error", "is_error", "wrong"),
    "weight": ("weight", "sample_weight"),
}
"""Usual column names by part, the likeliest first."""
MAX_SLICE_VALUES: Final = 12


@dataclass(frozen=True, slots=True)
class Guess:
    """What the columns seem to be, and a sentence on each decision."""

    columns: dict[str, str]
    time_format: str
    time_zone: str | None
    released: datetime
    slices: dict[str, tuple[str, ...]]
    notes: tuple[str, ...]
    missing: tuple[str, ...]
    """Required parts for which no column was found."""


def guess(survey: Survey) -> Guess:
    """Guess the part of every column from names and the first rows."""
    columns: dict[str, str] = {}
    for part, names in NAMES.items():
        found = _named(names, [c for c in survey.columns if c not in columns.values()])
        if found is not None and not (part == "error" and "label" in columns):
            columns[part] = found
    samples = {
        name: [row[i] for row in survey.rows if row[i] not in (None, "")] for i, name in enumerate(survey.columns)
    }
    if "time" not in columns:
        timely = [c for c in survey.columns if c not in columns.values() and _times(samples[c]) is not None]
        if timely:
            columns["time"] = timely[0]
    times = samples.get(columns.get("time", ""), [])
    time_format, zone = _times(times) or ("rfc3339", None)
    missing = [
        part
        for part in ("time", "prediction")
        if part not in columns and not (part == "prediction" and "error" in columns)
    ]
    if "label" not in columns and "error" not in columns:
        missing.append("label")
    notes = [f"column {name!r} is taken as {part}" for part, name in columns.items()]
    notes += [f"no column looks like {part}; name it in [source.columns]" for part in missing]
    if "id" not in columns:
        notes.append("no column looks like an id: repeated rows cannot be told apart")
    if zone:
        notes.append(f"times carry no offset; they are read as {zone}")
    slices = _slices(survey, columns, samples)
    notes += [f"column {name!r} has {len(values)} values and is taken as a slice" for name, values in slices.items()]
    return Guess(columns, time_format, zone, _first(times, time_format), slices, tuple(notes), tuple(missing))


def _named(names: Sequence[str], columns: Sequence[str]) -> str | None:
    plain = {re.sub(r"[^a-z0-9]+", "_", column.lower()).strip("_"): column for column in reversed(columns)}
    return next((plain[name] for name in names if name in plain), None)


def _times(values: Sequence[str | None]) -> tuple[str, str | None] | None:
    """(time_format, assumed zone) when every value reads as a time."""
    texts = [value for value in values if value]
    if not texts:
        return None
    if all(re.fullmatch(r"\d{4}-\d\d-\d\d[T ]\d\d:\d\d.*", text) for text in texts):
        bare = any(not re.search(r"(Z|[+-]\d\d:?\d\d)$", text, re.IGNORECASE) for text in texts)
        return "rfc3339", "UTC" if bare else None
    if all(re.fullmatch(r"\d{9,10}(\.\d+)?", text) for text in texts):
        return "epoch-seconds", None
    if all(re.fullmatch(r"\d{12,13}", text) for text in texts):
        return "epoch-milliseconds", None
    return None


def _first(values: Sequence[str | None], time_format: str) -> datetime:
    """Midnight UTC of the earliest time among the first rows."""
    found = []
    for value in values:
        try:
            if time_format == "rfc3339":
                parsed = datetime.fromisoformat(str(value))
                found.append(parsed if parsed.tzinfo else parsed.replace(tzinfo=UTC))
            else:
                found.append(datetime.fromtimestamp(float(str(value)) / (1000 if "milli" in time_format else 1), UTC))
        except (ValueError, OverflowError, OSError):
            continue
    first = min(found, default=datetime(1970, 1, 1, tzinfo=UTC)).astimezone(UTC)
    return first.replace(hour=0, minute=0, second=0, microsecond=0)


def _slices(
    survey: Survey, columns: dict[str, str], samples: dict[str, list[str | None]]
) -> dict[str, tuple[str, ...]]:
    chosen = {}
    for name in survey.columns:
        if name in columns.values():
            continue
        counts = Counter(samples[name])
        if 2 <= len(counts) <= MAX_SLICE_VALUES and len(survey.rows) >= 10 * len(counts) and all(counts):
            chosen[name] = tuple(sorted(str(value) for value in counts))
    return chosen


def configuration(
    found: Guess, *, kind: str, place: dict[str, str], tolerance: float | None = None, risk: float | None = None
) -> str:
    """A commented TOML text; lines that need a decision carry a mark."""
    lines = [
        "# A configuration to start from. Lines marked with an arrow need a decision before the first look:",
        "# the terms of a promise are frozen then. `watcher check THIS-FILE` tells whether it all fits together.",
        "",
        "[ledger]",
        'url = "sqlite:///watcher.db"          # the evidence, one file beside this one',
        "",
        "[[source]]",
        'name = "labels"',
        f"kind = {_quote(kind)}",
        *(f"{key} = {_quote(value)}" for key, value in place.items()),
        'every = "10m"',
    ]
    if found.time_format != "rfc3339":
        lines.append(f"time_format = {_quote(found.time_format)}")
    if found.time_zone:
        lines.append(
            f"time_zone = {_quote(found.time_zone)}  {MARK}: the times carry no offset; which zone are they in?"
        )
    lines += ["", "[source.columns]"]
    lines += [f"{part} = {_quote(name)}" for part, name in found.columns.items()]
    lines += [f"# {part} =   {MARK}: no column looks like it" for part in found.missing]
    lines += [
        "",
        "[[promise]]",
        'name = "my-classifier"',
        'source = "labels"',
        f"tolerance = {tolerance or 0.05}   {MARK}: the error rate that was promised, at most",
        f"risk = {risk or 0.01}        {MARK}: the chance of ever raising a false alarm",
        f"released = {found.released.strftime('%Y-%m-%dT%H:%M:%SZ')}   {MARK}: when it went live; earlier rows do not count",
        f'label_lag = "7d"     {MARK}: how long after a prediction its label may still come',
    ]
    if found.slices:
        inner = ", ".join(f"{_key(c)} = [{', '.join(map(_quote, values))}]" for c, values in found.slices.items())
        lines.append(
            f"slices = {{ {inner} }}   {MARK}: each slice takes a part of the risk; delete what nobody asks about"
        )
    lines += [
        f"# release_evidence = {{ labels = 0, errors = 0 }}   {MARK}: the hold-out sample that the tolerance rests on",
        f"uncertified = true   {MARK}: delete this line once release_evidence is there",
    ]
    return "\n".join(lines) + "\n"


def _quote(text: str) -> str:
    """A TOML basic string; JSON's escapes are a subset of TOML's, DEL apart."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _key(text: str) -> str:
    return text if re.fullmatch(r"[A-Za-z0-9_-]+", text) else _quote(text)
