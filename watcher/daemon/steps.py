"""Steps of the machine's clock, seen by comparing it with one that only grows."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

LEAST: Final = 5.0
"""Seconds: less is what network time corrects, and what a busy machine takes between two readings."""


class Steps:
    """`wall` and `steady` give seconds; `steady` is never set."""

    def __init__(self, wall: Callable[[], float], steady: Callable[[], float]) -> None:
        self._wall, self._steady = wall, steady
        self._apart = wall() - steady()

    def moved(self) -> float:
        """By how much the clock was set since the last call; 0.0 for less than 5 seconds. Sleeping of the machine counts."""
        apart = self._wall() - self._steady()
        step = apart - self._apart
        if abs(step) < LEAST:
            return 0.0
        self._apart = apart
        return step
