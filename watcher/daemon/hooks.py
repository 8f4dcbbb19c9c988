"""What is passed into the daemon: clock, timer, and what to call at named points."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime

from watcher.settings import Settings


def _nowhere(point: str) -> None:
    """The point at which nothing happens."""


def wall_clock() -> datetime:
    """The machine's clock in UTC."""
    return datetime.now(UTC)


@dataclass(frozen=True, slots=True)
class Hooks:
    """The clock, the timer, and what to call at named points (tests kill the process there)."""

    clock: Callable[[], datetime] = wall_clock
    timer: Callable[[], float] = time.monotonic
    at_point: Callable[[str], None] = _nowhere
    """Points: held-by-another, before-look, before-pull, mid-pull, after-pull, those of a commit (ledger/store.py),
    before-send, after-send."""
    started: Callable[[str], None] = _nowhere
    """Called once with the address when page and metrics are served."""
    adjust: Callable[[Settings], Settings] = field(default=lambda settings: settings)
    """Applied to every configuration that is read; the demo looks more often than its file says."""
