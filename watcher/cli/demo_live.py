"""The demo through the real daemon: about a simulated day a second, page and metrics following."""

from __future__ import annotations

import asyncio
import contextlib
import logging
import socket
import time
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

from rich.console import Console
from rich.text import Text

from watcher import assembly, settings, wording
from watcher.cli import show
from watcher.daemon import logs
from watcher.daemon.service import Hooks, Service
from watcher.demo.scenario import CAMERA_DAY, CAMERA_DEPOT, DAY, DAYS, RELEASED, Row, generate
from watcher.demo.writing import append, prepare
from watcher.errors import WatcherError
from watcher.ledger.store import Ledger
from watcher.records import Event, Standing
from watcher.settings import Settings

AHEAD: Final = 1.5
"""Days that the simulated clock may be ahead of the newest look: a busy machine plays more slowly, not another story."""
TOLD: Final = frozenset({"breach", "breach-withdrawn", "warning", "warning-over", "supported", "support-lost", "stale"})
WEEK: Final = 7 * DAY


class Clock:
    """Runs a day a second through the scenario, never far ahead of the looks, and at the usual pace after it."""

    def __init__(self, end: int, timer: Callable[[], float] = time.monotonic) -> None:
        self._timer, self._last = timer, timer()
        self._end = end
        self._now = float(RELEASED)
        self._most = RELEASED + AHEAD * DAY

    def __call__(self) -> datetime:
        """The simulated time."""
        spent, self._last = self._timer() - self._last, self._timer()
        if self.over:
            self._now += spent
        else:
            self._now = min(self._now + spent * DAY, self._most, self._end)
        return datetime.fromtimestamp(int(self._now), UTC)

    def looked(self) -> None:
        """A look begins: time may go on."""
        self._most = max(self._most, self().timestamp() + AHEAD * DAY)

    @property
    def over(self) -> None:
        """The end of the scenario."""
        self._out.print()
        self._out.print(Text("The scenario is over; the daemon goes on at the usual pace until Ctrl-C."))


def _sentence(event: Event) -> Text:
    return Text(wording.event_sentence(event), style="bold" if event.kind == "breach" else "")


def _figures(week: int, standings: list[Standing]) -> str:
    whole = next(standing for standing in standings if standing.column == "")
    if whole.estimate is None:
        return f"week {week:2}      no day is old enough to be counted yet"
    worst = max((s for s in standings if s.column == "depot"), key=lambda s: s.total)
    told = "broken" if worst.breach else f"{worst.total:.1f} of {worst.threshold:.1f} nats"
    return (
        f"week {week:2}      {whole.labels:,} labels, {wording.percent(whole.estimate)} wrong "
        f"({wording.span(whole.life.lower, whole.life.upper)}), {whole.state}. Worst depot {worst.value}: {told}"
    )
