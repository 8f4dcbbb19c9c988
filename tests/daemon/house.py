"""A small invented workshop with real files, a real configuration and a daemon in a process of its own.

Every promise is about one machine whose verdicts are right until its day comes and wrong from then on: with 20 labels a day
all wrong, its first bad day breaks a promise of 3% at risk 0.001 (20 errors in 20 labels give more than 20*log(1/0.03) -
log(1/share) = 70 - 6 nats at the mixture's largest shift of 3: computed, the tests see the breach).
"""

from __future__ import annotations

import contextlib
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, TypeVar
from urllib.error import HTTPError, URLError
from urllib.request import urlopen

T = TypeVar("T")
DAY = 86400
RELEASED = int(datetime(2026, 3, 2, tzinfo=UTC).timestamp())
RECENT = int(datetime.now(UTC).timestamp()) // DAY * DAY - 20 * DAY
"""A release twenty days ago, for daemons that go by the machine's clock: with a label_lag of 30 days every bucket is open, and
every new row is news."""
PATIENCE = 120.0
"""Seconds; a machine that is busy with other tests starts a daemon slowly."""
TESTS = Path(__file__).parents[1]


@dataclass(frozen=True)
class Machine:
    """One promise: from `bad_day` on every verdict is wrong; None: never."""

    name: str
    bad_day: int | None = None


def configuration(
    machines: Sequence[Machine],
    *,
    routes: str = "",
    source: str = "",
    ledger: str = "sqlite:///watcher.db",
    every: str = "1s",
    timeout: str = "60s",
    released: int = RELEASED,
    lag: str = "1h",
) -> str:
    """The configuration of a folder as TOML; `routes` and `source` are further TOML text."""
    text = f"""
[ledger]
url = "{ledger}"
[web]
listen = "127.0.0.1:0"
[[source]]
name = "bench"
kind = "csv"
path = "rows/*.csv"
every = "{every}"
timeout = "{timeout}"
{source}
[source.columns]
id = "id"
time = "at"
prediction = "said"
label = "was"
"""
    for machine in machines:
        text += f"""
[[promise]]
name = "{machine.name}"
source = "bench"
where = {{ machine = "{machine.name}" }}
tolerance = 0.03
risk = 0.001
released = {stamp(released)}
label_lag = "{lag}"
uncertified = true
"""
    return text + routes


def prepare(folder: Path, machines: Sequence[Machine], **more: Any) -> Path:
    """The folder with its configuration; returns the configuration's path."""
    (folder / "rows").mkdir(parents=True)
    path = folder / "watcher.toml"
    path.write_text(configuration(machines, **more), encoding="utf-8")
    return path


def stamp(at: int) -> str:
    """A time as the rows and the configuration write it."""
    return datetime.fromtimestamp(at, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def write_day(
    folder: Path, machines: Sequence[Machine], day: int, labels: int = 20, *, released: int = RELEASED
) -> None:
    """The rows of one day in a file of its own, there all at once or not at all."""
    lines = ["id,at,said,was,machine"]
    for machine in machines:
        wrong = machine.bad_day is not None and day >= machine.bad_day
        for n in range(labels):
            at = stamp(released + day * DAY + 12 * 3600 + n * 60)
            said = ("chipped", "whole")[n % 2]
            was = said if not wrong else ("whole", "chipped")[n % 2]
            lines.append(f"{machine.name}-{day}-{n},{at},{said},{was},{machine.name}")
    target = folder / "rows" / f"day{day:04}.csv"
    beside = folder / f"day{day:04}.part"
    beside.write_text("\n".join(lines) + "\n", encoding="utf-8")
    beside.rename(target)


def until(found: Callable[[], T | None], patience: float = PATIENCE, pause: float = 0.05) -> T:
    """What `found` returns once that is true. AssertionError after `patience` seconds."""
    end = time.monotonic() + patience
    while time.monotonic() < end:
        got = found()
        if got:
            return got
        time.sleep(pause)
    raise AssertionError(f"nothing came of {found} within {patience:g} s")


@dataclass
class Daemon:
    """`watcher run` in a process of its own; its log is read line by line from a file."""

    process: subprocess.Popen[bytes]
    log_path: Path
    _address: list[str] = field(default_factory=list)

    @property
    def log(self) -> list[dict[str, Any]]:
        """The whole lines so far; each must be JSON."""
        text = self.log_path.read_text(encoding="utf-8")
        return [json.loads(line) for line in text[: text.rfind("\n") + 1].splitlines()]

    def said(self, event: str, **facts: Any) -> list[dict[str, Any]]:
        """The lines of an event with these facts."""
        return [line for line in self.log if line["event"] == event and facts.items() <= line.items()]

    def wait_for(self, event: str, **facts: Any) -> dict[str, Any]:
        """The first such line, once it is there."""
        return until(lambda: self._alive() and self.said(event, **facts))[0]

    def _alive(self) -> bool:
        if self.process.poll() is not None:
            raise AssertionError(f"exit {self.process.returncode}: {self.log_path.read_text()[-3000:]}")
        return True

    @property
    def address(self) -> str:
        """Where it serves."""
        if not self._address:
            self._address.append(self.wait_for("serving page and metrics")["address"])
        return self._address[0]

    def get(self, path: str) -> tuple[int, str]:
        """Status and body; 0 while nobody answers."""
        try:
            with urlopen(self.address + path, timeout=20) as answer:
                return answer.status, answer.read().decode()
        except HTTPError as error:
            return error.code, error.read().decode()
        except (URLError, OSError):
            return 0, ""

    def metric(self, series: str) -> float | None:
        """The value of a series, named as in the text format; None: not there."""
        for line in self.get("/metrics")[1].splitlines():
            name, _, value = line.rpartition(" ")
            if name == series:
                return float(value)
        return None

    def ready(self) -> None:
        """Wait until every source was tried."""
        until(lambda: self._alive() and self.get("/readyz")[0] == 200)

    def stop(self, number: int = signal.SIGTERM, patience: float = 30) -> int:
        """Ask it to end; its exit code."""
        self.process.send_signal(number)
        return self.process.wait(patience)


@contextlib.contextmanager
def running(
    config: Path, *command: str, env: dict[str, str] | None = None, own_group: bool = False
) -> Iterator[Daemon]:
    """A daemon on a configuration, killed at the end of the block if it still runs; `command` in place of `watcher run`."""
    log = config.parent / f"log-{time.monotonic_ns()}.jsonl"
    words = command or (str(Path(sys.executable).parent / "watcher"), "run", str(config))
    with log.open("wb") as stream:
        process = subprocess.Popen(
            words,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
            stderr=stream,
            cwd=config.parent,
            env={**os.environ, "PYTHONPATH": str(TESTS), **(env or {})},
            start_new_session=own_group,
        )
        try:
            yield Daemon(process, log)
        finally:
            if process.poll() is None:
                process.kill()
            process.wait()


def hooked(config: Path, script: str) -> tuple[str, ...]:
    """A command that runs the daemon of `Service` with hooks that a few lines of Python define as `hooks`.

    With -c nothing is imported again in the children.
    """
    return (sys.executable, "-c", f"{_SCRIPT_HEAD}\n{script}\n{_SCRIPT_TAIL}", str(config))


_SCRIPT_HEAD = """
import asyncio, os, signal, sys, time
from datetime import UTC, datetime, timedelta
from pathlib import Path
from watcher.daemon import logs
from watcher.daemon.service import Hooks, Service
logs.configure()
config = Path(sys.argv[1])
"""
_SCRIPT_TAIL = """
async def main():
    await Service(config, hooks).run()
asyncio.run(main())
"""
