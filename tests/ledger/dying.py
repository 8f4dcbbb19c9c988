"""Child processes that write a ledger until they are killed."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable
from pathlib import Path

from ledger.world import DAY, RELEASED, World, make_terms

from watcher.ledger import Ledger


def world() -> World:
    """Every child draws the same looks."""
    return World(9, rate=0.06, promises=(make_terms(), make_terms("scans")))


def replayed(steps: int) -> World:
    """The world after `steps` looks."""
    made = world()
    for step in range(steps):
        made.entry(look_time(step), 0)
    return made


def look_time(step: int) -> int:
    """Three looks a day."""
    return RELEASED + DAY + step * 8 * 3600


def die_at(url: str, point: str, step: int) -> None:
    """Commit looks; at `point` of look number `step` + 1 the process kills itself."""
    made = world()
    with Ledger.open(url, new_id="00ff") as ledger:
        for at in range(step + 1):
            if at == step:
                ledger.at_point = _killer(point)
            ledger.commit(made.entry(look_time(at), at))
    os._exit(0)


def _killer(point: str) -> Callable[[str], None]:
    def reached(name: str) -> None:
        if name == point:
            os.kill(os.getpid(), signal.SIGKILL)

    return reached


def write_on(path: str) -> None:
    """Commit looks from wherever the ledger stands until somebody kills this process."""
    with Ledger.open(f"sqlite:///{path}", new_id="00ff") as ledger:
        step = ledger.head().look
        made = replayed(step)
        while True:
            ledger.commit(made.entry(look_time(step), step))
            step += 1


def hold(path: str) -> None:
    """Be the writer until killed."""
    with Ledger.open(f"sqlite:///{path}") as ledger, ledger.writer():
        Path(f"{path}.held").touch()
        signal.pause()


def write_in_little_room(path: str, limit: int) -> None:
    """Commit looks with files limited to `limit` bytes; exit code 7 when the ledger says so in its own words."""
    import resource

    from watcher.errors import WatcherError

    made = world()
    with Ledger.open(f"sqlite:///{path}", new_id="00ff") as ledger:
        ledger.commit(made.entry(look_time(0), 0))
        resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        step = 1
        try:
            while True:
                ledger.commit(made.entry(look_time(step), step))
                step += 1
        except WatcherError as error:
            Path(f"{path}.said").write_text(f"{step}\n{error}")
            os._exit(7)
