"""The depot with the new camera breaches when it should, and nothing else does."""

from __future__ import annotations

import pytest
from demo import quantiles
from demo.counting import count

from watcher.demo.scenario import CAMERA_DAY, CAMERA_DEPOT, generate

EARLIEST, MEDIAN, LATEST = 67, 89, 126
"""1%, 50% and 99% of the day (0 = release) at whose seal the depot's slice breaches, over 2,000 simulated streams;
computed with `PYTHONPATH=tests python -m demo.quantiles`."""
SEEDS = range(20)


@pytest.fixture(scope="module")
def breaches():
    """Breach day of every cell (None: none) for each of 20 seeds."""
    found = []
    for seed in SEEDS:
        cells = count(generate(seed))
        found.append({key: quantiles.breach_day(days.labels, days.errors, key[0]) for key, days in cells.items()})
    return found


def test_the_depot_breaches_when_the_shipped_rule_would(breaches):
    """In at least 19 of 20 seeds the depot's breach lies between the 1% and the 99% quantile of the simulation."""
    days = [cells["depot", CAMERA_DEPOT] for cells in breaches]
    inside = [day for day in days if day is not None and EARLIEST <= day <= LATEST]

    assert EARLIEST >= CAMERA_DAY
    assert len(inside) >= 19, days


def test_nothing_else_breaches_in_any_seed(breaches):
    """Whole, carriers and the other depots keep the promise in every seed."""
    others = [(key, day) for cells in breaches for key, day in cells.items() if key != ("depot", CAMERA_DEPOT)]

    assert len(others) == 5 * len(SEEDS)
    assert [each for each in others if each[1] is not None] == []


def test_the_constants_are_what_the_simulation_gives():
    """The simulation, run afresh, gives the quantiles that are written above."""
    assert quantiles.constants() == (EARLIEST, MEDIAN, LATEST)
