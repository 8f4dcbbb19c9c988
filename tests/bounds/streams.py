"""Streams of labels for the tests of validity: error probabilities p (streams, labels) and outcomes drawn from them."""

from __future__ import annotations

import numpy as np


def constant(streams, labels, rng):
    return _drawn(np.full((streams, labels), 0.03), rng)


def step(streams, labels, rng):
    p = np.full((streams, labels), 0.01)
    p[np.arange(labels) >= rng.integers(0, labels, (streams, 1))] = 0.08
    return _drawn(p, rng)


def sine(streams, labels, rng):
    phase = rng.uniform(0, 2 * np.pi, (streams, 1))
    return _drawn(0.04 + 0.035 * np.sin(np.arange(labels) / 150 + phase), rng)


def adversary(streams, labels, rng):
    """Raises p after every error-free run of 25 labels and lets it fall after an error."""
    p, x = np.empty((streams, labels)), np.empty((streams, labels), dtype=bool)
    rate, run = np.full(streams, 0.02), np.zeros(streams, dtype=int)
    for i in range(labels):
        p[:, i] = rate
        x[:, i] = rng.random(streams) < rate
        run = np.where(x[:, i], 0, run + 1)
        rate = np.where(x[:, i], 0.01, np.where(run % 25 == 24, np.minimum(rate * 1.6, 0.3), rate))
    return p, x


def _drawn(p, rng):
    return p, rng.random(p.shape) < p


KINDS = {"constant": constant, "step": step, "sine": sine, "adversary": adversary}


def ever_wrong(p, x, bounds, possible=None):
    """The number of streams whose running mean of p lies outside `bounds(n, k)` after some label.

    `possible(n, k, mean)`, where given, is False only where the mean cannot lie outside: those limits are not computed.
    """
    n = np.broadcast_to(np.arange(1, p.shape[1] + 1), p.shape)
    k = np.cumsum(x, axis=1)
    mean = np.cumsum(p, axis=1) / n
    stream, label = np.nonzero(np.ones(p.shape, dtype=bool) if possible is None else possible(n, k, mean))
    n, k, mean = n[stream, label], k[stream, label], mean[stream, label]
    # The same (n, k) occurs in many streams: its limits are computed once.
    code, place = np.unique(n.astype(np.int64) * (p.shape[1] + 1) + k, return_inverse=True)
    found = bounds(code // (p.shape[1] + 1), code % (p.shape[1] + 1))
    outside = (mean < found.lower[place]) | (mean > found.upper[place])
    return np.unique(stream[outside]).size
