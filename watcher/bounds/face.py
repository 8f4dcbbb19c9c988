"""The checked functions behind `import watcher`: counts of uniformly drawn labels in, evidence and limits out."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from watcher.bounds import arguments
from watcher.bounds.evidence import evidence as evidence_of_statistics
from watcher.bounds.evidence import lower_limit, upper_limit
from watcher.bounds.exact import Bounds, exact_bounds, operating_characteristics
from watcher.bounds.mixture import Floats, Side
from watcher.bounds.release import certify

__all__ = ["certify", "confidence_bounds", "evidence", "exact_bounds", "operating_characteristics"]


def evidence(labels: ArrayLike, errors: ArrayLike, rate: ArrayLike, side: Side = "above") -> Floats:
    """Evidence in nats that the average error of the labels lies above (below) a rate.

    `labels` n >= 0 and `errors` 0 <= k <= n, whole numbers; `rate` strictly between 0 and 1; they broadcast. `side`
    "above" or "below".

    However often one looks, the chance that the evidence at the running mean of the true error probabilities ever
    reaches log(1/risk) is at most the risk, whatever the drift (Ville 1939; Robbins 1970). Raises ValueError for
    impossible counts, rates or sides.

    Example: 126 errors in 3,000 labels against a tolerance of 0.03 give `evidence(3000, 126, 0.03)` = 4.4 nats, the
    same 4.2% in 6,000 labels 10.7: more than log(1/0.001) = 6.9.
    """
    arguments.side(side)
    statistics, rates = arguments.statistics(labels, errors), arguments.fractions("rate", rate)
    result: Floats = evidence_of_statistics(statistics, rates, side)[()]
    return result


def confidence_bounds(labels: ArrayLike, errors: ArrayLike, risk: ArrayLike) -> Bounds:
    """Limits of the average error that hold at all times at once, risk/2 a side, rounded outward.

    `labels` n >= 0 and `errors` 0 <= k <= n, whole numbers; `risk` strictly between 0 and 1; they broadcast. The chance
    that the running mean of the true error probabilities EVER lies outside is at most the risk, whatever the drift and
    however often one looks. Without labels [0, 1]; with very few errors the lower limit is 0, with very few correct
    labels the upper limit is 1. Raises ValueError for impossible counts or risks.
    """
    statistics, risks = arguments.statistics(labels, errors), arguments.fractions("risk", risk)
    threshold = -np.log(risks / 2.0)
    lower, upper = lower_limit(statistics, threshold), upper_limit(statistics, threshold)
    return Bounds(lower=lower[()], upper=upper[()])
