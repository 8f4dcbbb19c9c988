"""Turns for looks: few at a time, so that a start with many sources does not ask for the memory of them all."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager


class Turns:
    """At most `most` holders count at a time; one that has held its turn for `patience` seconds counts no more.

    So a source that hangs takes a place for some seconds only, and never holds up the others.
    """

    def __init__(self, most: int, patience: float, timer: Callable[[], float] = time.monotonic) -> None:
        self._most, self._patience, self._timer = most, patience, timer
        self._changed = threading.Condition()
        self._begun: dict[object, float] = {}

    @contextmanager
    def turn(self) -> Iterator[None]:
        """Wait for a turn and hold it for the block."""
        me = object()
        with self._changed:
            while self._counting() >= self._most:
                self._changed.wait(1.0)
            self._begun[me] = self._timer()
        try:
            yield
        finally:
            with self._changed:
                del self._begun[me]
                self._changed.notify()

    def _counting(self) -> int:
        since = self._timer() - self._patience
        return sum(begun > since for begun in self._begun.values())
