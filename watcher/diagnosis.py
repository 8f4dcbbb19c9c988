"""What is shown beside a verdict and has no influence on it: numbers, and the two flags that rest on them.

`verdict` knows nothing of this room; the look (and the audit, when it repeats a look) adds it afterwards.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from itertools import zip_longest
from typing import Any, Final

from watcher.bounds.diagnostics import error_by_lag, labelled_share, mean_weight, over_dispersion, tipping_point
from watcher.buckets import bucket_starts
from watcher.path import NOTHING, Levels, entered, total
from watcher.records import FLAGS, Standing, Terms

WEEK: Final = 7 * 86400
LAST: Final = 28
"""Sealed buckets that the test of over-dispersion looks at."""
Buckets = Mapping[int, Levels]


def diagnose(
    terms: Terms,
    counts: Mapping[tuple[str, str], Buckets],
    until: int,
    now: int,
    standings: Sequence[Standing],
    memories: Sequence[Mapping[str, Any]] = (),
) -> tuple[Standing, ...]:
    """The same standings with their diagnostics, and the flags `clustered` and `weights-off` where they apply.

    `memories` beside the standings, as the verdict leaves them: arriving labels tell there how early and late ones differ.
    """
    starts = [start for start in bucket_starts(terms.released, until, terms.bucket, terms.time_zone) if start < until]
    weekly = [start for start in starts if start < until - (until - terms.released) % WEEK]
    found = [_diagnosed(terms, counts.get((s.column, s.value), {}), starts, weekly, now, s) for s in standings]
    lags = [_by_lag(memory) for memory in memories] if terms.count == "arriving" else []
    return tuple(
        replace(standing, diagnostics={**standing.diagnostics, "error_by_lag": lag}) if lag else standing
        for standing, lag in zip_longest(found, lags)
    )


def _diagnosed(
    terms: Terms, buckets: Buckets, starts: Sequence[int], weekly: Sequence[int], now: int, standing: Standing
) -> Standing:
    labels = sum(total(buckets[start]).labels for start in starts if start in buckets)
    found: dict[str, Any] = {
        "labelled_share": _finite(float(labelled_share(labels, standing.predictions)))
        if standing.predictions
        else None,
        "unlabelled": standing.predictions - labels,
        "label_age_seconds": None if standing.newest_label is None else now - int(standing.newest_label.timestamp()),
    }
    flags = set(standing.flags)
    if standing.estimate is not None and terms.measure == "error" and not terms.labelling_probabilities:
        for name, rate in (("tipping_point", standing.estimate), ("tipping_point_upper", standing.life.upper)):
            found[name] = _finite(float(tipping_point(labels, rate, standing.predictions, terms.tolerance)))
    if terms.measure != "loss" and terms.n_max is None and not terms.labelling_probabilities:
        bunched = _bunched(terms, buckets, weekly)
        if bunched is not None:
            found["over_dispersion"], clustered = bunched
            flags |= {"clustered"} if clustered else set()
    if terms.weight_levels:
        found["mean_weight"], off = _weights(terms, buckets, weekly)
        flags |= {"weights-off"} if off else set()
    return replace(standing, diagnostics=found, flags=tuple(flag for flag in FLAGS if flag in flags))


def _bunched(terms: Terms, buckets: Buckets, starts: Sequence[int]) -> tuple[float | None, bool] | None:
    rows = [entered(terms, total(buckets[start])) if start in buckets else (0, 0) for start in starts[-LAST:]]
    if not any(n for n, _ in rows):
        return None
    seen = over_dispersion([n for n, _ in rows], [int(k) for _, k in rows])
    return _finite(seen.ratio), seen.clustered


def _weights(terms: Terms, buckets: Buckets, starts: Sequence[int]) -> tuple[float | None, bool]:
    labels = [
        sum(buckets.get(start, {}).get(level, NOTHING).labels for start in starts) for level in terms.weight_levels
    ]
    seen = mean_weight(labels, terms.weight_levels)
    return _finite(seen.mean), seen.off


def _by_lag(memory: Mapping[str, Any]) -> dict[str, Any] | None:
    """Early labels against late ones over all sealed buckets; the whole alone keeps these tables."""
    tables = memory.get("delays", ())
    if not tables:
        return None
    seen = error_by_lag(*zip(*tables, strict=True))
    return {
        "early": _finite(seen.early),
        "late": _finite(seen.late),
        "early_labels": seen.early_labels,
        "late_labels": seen.late_labels,
    }


def _finite(value: float) -> float | None:
    return round(value, 9) if math.isfinite(value) else None
