"""The real daemon with hooks that kill its own process at the n-th hit of a named point; forked from a process that waits
for orders, so that three hundred deaths do not cost three hundred starts of the interpreter.
"""

from __future__ import annotations

import asyncio
import os
import signal
import sys
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

from daemon.house import DAY, RELEASED, Machine, write_day

POINTS = (
    "held-by-another",
    "before-pull",
    "mid-pull",
    "after-pull",
    "buckets",
    "head",
    "committed",
    "before-send",
    "after-send",
)
"""Lock held by another, before the pull, in it, before the commit, inside it (twice), after it, before a request leaves,
after its answer and before our record."""
MACHINES = tuple(Machine(f"m{n}", bad) for n, bad in enumerate((2, 4, 9, 17, 29, None)))
LABELS = 20
NOON = 12 * 3600


def obey(config: str) -> None:
    """For each line `POINT HITS` on standard input run a daemon that dies there; `-` never dies by itself.

    Prints its process number, then how it ended.
    """
    # Imported before the forks, which then cost milliseconds; no thread runs yet.
    import watcher.daemon.service
    import watcher.notices.webhook
    import watcher.sources.files  # noqa: F401

    for line in sys.stdin:
        point, hits = line.split()
        child = os.fork()
        if child == 0:
            live(Path(config), point, int(hits))
            os._exit(0)
        print(child, flush=True)
        _, status = os.waitpid(child, 0)
        print(os.waitstatus_to_exitcode(status), flush=True)


def live(config: Path, point: str, hits: int) -> None:
    """Run until killed; every look is one simulated day later, and the day's rows come before it."""
    from watcher.daemon import logs, service
    from watcher.daemon.service import Hooks, Service

    service.POST = service.PERIODIC = 0.5  # type: ignore[misc]
    service.HELD = 0.2  # type: ignore[misc]
    with (config.parent / "daemon.log").open("a", encoding="utf-8") as stream:
        logs.configure(stream)
        days = Days(config.parent)
        hooks = Hooks(clock=days.clock, at_point=_reached(config.parent, days, point, hits), adjust=_often)

        async def run() -> None:
            await Service(config, hooks).run()

        asyncio.run(run())


class Days:
    """The simulated day, kept in a file so that it never falls."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._path = folder / "day"
        self.day = int(self._path.read_text()) if self._path.exists() else 0

    def clock(self) -> datetime:
        """Two in the morning: the day before is over and its labels are in."""
        return datetime.fromtimestamp(RELEASED + self.day * DAY + 2 * 3600, UTC)

    def next(self) -> None:
        """The rows of the day that ends, then the new day."""
        write_day(self._folder, MACHINES, self.day, LABELS)
        beside = self._folder / "day.part"
        beside.write_text(str(self.day + 1))
        beside.rename(self._path)
        self.day += 1


def _often(settings: object) -> object:
    source = settings.source[0].model_copy(update={"every": 0.3})  # type: ignore[attr-defined]
    return settings.model_copy(update={"source": (source,)})  # type: ignore[attr-defined]


def _reached(folder: Path, days: Days, point: str, hits: int) -> Callable[[str], None]:
    left = [hits]

    def at_point(name: str) -> None:
        if name == "before-look":
            days.next()
        if name != point:
            return
        left[0] -= 1
        if left[0] == 0:
            hit = os.open(folder / "hits", os.O_WRONLY | os.O_CREAT | os.O_APPEND)
            os.write(hit, f"{name}\n".encode())
            os.kill(os.getpid(), signal.SIGKILL)

    return at_point
