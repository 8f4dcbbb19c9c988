"""The hedged betting process of Waudby-Smith and Ramdas 2023 (section 4), written anew as a yardstick for weights."""

from __future__ import annotations

import math

import numpy as np


def bets(x: np.ndarray, alpha: float) -> np.ndarray:
    """Predictable plug-in bets (..., n): bet t uses x_1..x_{t-1}."""
    x = np.asarray(x, dtype=float)
    t = np.arange(1, x.shape[-1] + 1)
    mean = (0.5 + x.cumsum(axis=-1)) / (t + 1)
    variance = (0.25 + ((x - mean) ** 2).cumsum(axis=-1)) / (t + 1)
    before = np.concatenate([np.full((*x.shape[:-1], 1), 0.25), variance[..., :-1]], axis=-1)
    return np.sqrt(2 * math.log(1 / alpha) / (before * t * np.log1p(t)))


def log_capitals(x: np.ndarray, m: float, alpha: float = 0.05, part: float = 0.5) -> tuple[np.ndarray, np.ndarray]:
    """Log capitals (..., n) of the bets that the mean exceeds (falls short of) m; bets cut at part/m and part/(1 - m)."""
    lam = bets(x, alpha / 2)
    up, down = np.minimum(lam, part / m), np.minimum(lam, part / (1 - m))
    return np.log1p(up * (x - m)).cumsum(axis=-1), np.log1p(-down * (x - m)).cumsum(axis=-1)


def martingale(x: np.ndarray, m: float, alpha: float = 0.05) -> np.ndarray:
    """max(K+, K-)/2."""
    up, down = log_capitals(x, m, alpha)
    return 0.5 * np.exp(np.maximum(up, down))
