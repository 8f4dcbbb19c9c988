"""When the rule notices the camera: the breach day of the depot's slice over many simulated streams.

Run it from the folder of the tests' parent with `PYTHONPATH=tests python -m demo.quantiles`; it prints the constants of
`test_breach.py`. The streams are drawn anew with numpy from the rates alone; the scenario's generator is not used.
"""

from __future__ import annotations

import math

import numpy as np

from watcher.bounds import windows
from watcher.demo.scenario import CAMERA_DAY, CAMERA_DEPOT, DAY, DAYS, DEPOTS, TOLERANCE, error_rate

STREAMS = 2000
SEED = 20_260_105
RISK = 0.001
SERVICE_LIFE = 52 * 7 * DAY
PARTS = {"": 0.5, "depot": 0.4 / 5, "carrier": 0.4 / 5}
"""Half for the whole, 0.4 split equally over the five declared slice values, 0.1 for values discovered later."""
PHOTOS = 340
RHYTHM = np.array([1.25, 1.15, 1.10, 1.10, 1.20, 0.75, 0.45])
LABELLED = 0.88


def breach_day(labels: np.ndarray, errors: np.ndarray, column: str) -> int | None:
    """Index of the day (0 = release) whose seal brings the shipped total over the threshold; None: it never does."""
    buckets = np.stack([labels, errors], axis=-1).astype(np.int64)
    totals = windows.totals(buckets, TOLERANCE, windows.restarts(SERVICE_LIFE, DAY))
    over = np.flatnonzero(totals >= math.log(1 / (RISK * PARTS[column])))
    return int(over[0]) if over.size else None


def stream(draw: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Labels and errors per day in the depot with the camera."""
    day = np.arange(DAYS)
    photos = np.rint(PHOTOS * RHYTHM[day % 7] * draw.uniform(0.9, 1.1, DAYS)).astype(int)
    labels = draw.binomial(photos, dict(DEPOTS)[CAMERA_DEPOT] * LABELLED)
    return labels, draw.binomial(labels, [error_rate(CAMERA_DEPOT, int(d)) for d in day])


def simulated() -> list[int]:
    """Breach days of all streams, sorted; a stream without a breach counts as the day after the last."""
    draw = np.random.default_rng(SEED)
    found = [breach_day(*stream(draw), "depot") for _ in range(STREAMS)]
    return sorted(DAYS if day is None else day for day in found)


def constants() -> tuple[int, int, int]:
    """The 1% quantile (rounded down), the median, the 99% quantile (rounded up)."""
    days = simulated()
    return days[STREAMS // 100 - 1], days[STREAMS // 2], days[STREAMS - STREAMS // 100]


if __name__ == "__main__":
    low, middle, high = constants()
    print(f"EARLIEST, MEDIAN, LATEST = {low}, {middle}, {high}  # the camera comes on day {CAMERA_DAY}")
