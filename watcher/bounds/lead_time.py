"""From labels to weeks: when a count of labels speaks, given the volume, the buckets and the label lag."""

from __future__ import annotations

import math

from watcher.bounds.planning import WEEK

_SLACK = 1e-9


def weeks_until(
    labels: int | None, labels_per_week: float, label_lag: int, *, bucket: int | None = None
) -> float | None:
    """Weeks from a moment until that many further labels have entered the evidence; None for None.

    `labels_per_week` > 0; `label_lag` >= 0 seconds after which a bucket counts, once for all: buckets come one after the
    other. `bucket` (seconds): round up to the end of the bucket that holds the last of them; None for a number of labels
    that ends with a bucket. ValueError names the argument.
    """
    if not labels_per_week > 0.0 or label_lag < 0:
        raise ValueError(
            f"labels_per_week = {labels_per_week!r}, label_lag = {label_lag!r}: a positive number and seconds from 0 on are allowed"
        )
    if labels is None:
        return None
    seconds = labels / labels_per_week * WEEK
    if bucket is not None:
        seconds = math.ceil(seconds / bucket - _SLACK) * bucket
    return (seconds + label_lag) / WEEK
