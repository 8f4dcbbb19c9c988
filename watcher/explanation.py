"""How a verdict came about, down to counts, windows, shares and thresholds: enough to redo it by hand."""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import datetime

import numpy as np

from watcher.bounds import windows
from watcher.bounds.evidence import evidence
from watcher.bounds.mixture import LIFE, RESTART
from watcher.bounds.noise import breach_rate, support_rate
from watcher.judging import Book, Key, threshold
from watcher.path import CellPath, design_of, entered
from watcher.verdict import moment


@dataclass(frozen=True, slots=True)
class Window:
    """One window [since, end of the newest counted bucket]."""

    index: int
    since: datetime
    labels: int
    errors: float
    share: float
    """Of the breach budget."""
    above: float
    """Evidence (nats) that the average error of the window exceeds the tolerance."""
    part: float
    """share * exp(above): the windows' parts and `remainder` add up to exp(total)."""
    support_share: float
    below: float
    """Evidence (nats) that it falls short of the tolerance."""
    needed: float
    """Nats of `below` at which this window alone supports the promise: log(1/(risk * part * support_share))."""
    counted: bool
    """False: younger than window_at_least."""


@dataclass(frozen=True, slots=True)
class Explanation:
    """All windows that end with the newest counted bucket, and how they add up."""

    until: datetime
    buckets: int
    restarts: int
    rate_above: float
    rate_below: float
    risk: float
    """Of this cell: the promise's risk times its part."""
    threshold: float
    total: float
    remainder: float
    """Shares of the windows that have not started yet."""
    windows: tuple[Window, ...]


def explain(book: Book, key: Key) -> Explanation:
    """Lay the total of one cell open. Raises KeyError for an unknown cell."""
    terms, path = book.terms, book.paths[key]
    cell = next(cell for cell in book.cells if cell.key == key)
    design, restarts = design_of(terms), windows.restarts(terms.service_life, terms.bucket)
    above, below = (rate(terms.tolerance, terms.label_noise) for rate in (breach_rate, support_rate))
    own, bar = threshold(terms.risk, cell.part)
    count = len(book.starts)
    tails = np.ascontiguousarray(path.statistics[::-1].cumsum(axis=0)[::-1])
    shares, supports = windows.BREACH.shares(restarts, count), windows.SUPPORT.shares(restarts, count)
    found = []
    for j, since in enumerate(book.starts):
        mixture = LIFE if j == 0 else RESTART
        up = float(evidence(tails[j], above, "above", design=design, mixture=mixture))
        down = float(evidence(tails[j], below, "below", design=design, mixture=mixture))
        mature = terms.window_at_least is None or book.end - since >= terms.window_at_least
        labels, errors = entered(terms, CellPath(path.statistics[j:], path.counts[j:]).sum)
        part = float(shares[j]) * math.exp(min(up, 700.0)) if mature else 0.0
        need = -math.log(own * float(supports[j]))
        found.append(
            Window(
                j,
                moment(since),
                labels,
                float(errors),
                float(shares[j]),
                up,
                part,
                float(supports[j]),
                down,
                need,
                mature,
            )
        )
    mature_flags = None
    if terms.window_at_least is not None:
        mature_flags = np.array([window.counted for window in found], dtype=bool)
    return Explanation(
        until=moment(book.end),
        buckets=count,
        restarts=restarts,
        rate_above=above,
        rate_below=below,
        risk=own,
        threshold=bar,
        total=windows.total(tails, above, restarts, design=design, mature=mature_flags),
        remainder=windows.BREACH.remainder(restarts, count),
        windows=tuple(found),
    )
