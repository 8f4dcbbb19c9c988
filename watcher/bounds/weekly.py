"""Weekly intervals that hold for all weeks at once (method.md section 9)."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import ArrayLike

from watcher.bounds.designs import UNIFORM, Design
from watcher.bounds.evidence import lower_limit, upper_limit
from watcher.bounds.mixture import Floats

WEEK: Final = 7 * 86400


def weeks_of_life(service_life_seconds: int) -> int:
    """W = ceil(service_life / 7 days) + 1: the first and the last week of a life are partial."""
    return -(-service_life_seconds // WEEK) + 1


def week_risk(week: ArrayLike, weeks: int, risk: ArrayLike) -> Floats:
    """The risk of EACH SIDE of the interval of a week (1, 2, ...); over all weeks and both sides it sums to `risk`.

    `weeks` = W, the weeks of the service life: 0.95*risk/(2W) a side for weeks 1..W, and 0.025*risk*W/((W+i-1)(W+i)) for
    week W + i. `risk` is the cell's. Raises ValueError for a week below 1.
    """
    week = np.asarray(week, dtype=np.float64)
    if (week < 1).any():
        raise ValueError(f"week = {week.min():.0f}: weeks are numbered from 1")
    beyond = np.maximum(week, weeks + 1.0)
    share = np.where(week <= weeks, 0.95 / (2.0 * weeks), 0.025 * weeks / ((beyond - 1.0) * beyond))
    return np.asarray(risk, dtype=np.float64) * share


def week_limits(
    statistics: ArrayLike, week: ArrayLike, weeks: int, risk: ArrayLike, *, design: Design = UNIFORM
) -> tuple[Floats, Floats]:
    """Lower and upper limits of sealed weeks; `statistics` (..., D), `week` (...) and `risk` (...) broadcast.

    The average error of every week lies inside its interval, for all weeks at once and under any drift, with chance at
    least 1 - risk. [0, 1] for a week without labels.
    """
    goal = -np.log(week_risk(week, weeks, risk))
    lower = lower_limit(statistics, goal, design=design)
    return lower, upper_limit(statistics, goal, design=design)
