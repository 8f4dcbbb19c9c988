"""kill -9 at named points and at any time, of the real daemon with real files, a real ledger and a real HTTP receiver.

After each death: the chain verifies and every verdict is derived again from the sheets, the bucket cache equals a fresh
count of the files, each breach has its notices, and no breach number has a second one.
"""

from __future__ import annotations

import contextlib
import json
import os
import random
import signal
import subprocess
import sys
import time
from collections import Counter
from collections.abc import Iterator
from pathlib import Path

import pytest
from daemon.dying import MACHINES, POINTS
from daemon.house import TESTS, prepare, until
from peers.http_receiver import Receiver, receiver

from watcher import assembly, settings
from watcher.ledger.audit import audit
from watcher.ledger.store import Ledger
from watcher.look import question
from watcher.records import Notice
from watcher.replay import Replay

ROUTES = """
[[route]]
name = "desk"
kind = "webhook"
url = "{url}/desk"
heartbeat = "1h"
events = ["breach", "supported", "support-lost"]
[[route]]
name = "retraining"
kind = "webhook"
url = "{url}/retraining"
retrain = true
"""


class Workshop:
    """A folder, its receiver, and a process that starts daemons in it."""

    def __init__(self, folder: Path, heard: Receiver, orders: subprocess.Popen[str]) -> None:
        self.folder, self.heard, self._orders = folder, heard, orders
        self.config = folder / "watcher.toml"
        self.url = f"sqlite:///{folder}/watcher.db"

    def start(self, point: str = "-", hits: int = 1) -> int:
        """Start a daemon that dies at a point; its process number."""
        assert self._orders.stdin is not None
        self._orders.stdin.write(f"{point} {hits}\n")
        self._orders.stdin.flush()
        return self._line()

    def ended(self) -> int:
        """How it ended, once it did."""
        return self._line()

    def _line(self) -> int:
        assert self._orders.stdout is not None
        line = self._orders.stdout.readline()
        assert line, (self.folder / "daemon.log").read_text()[-3000:]
        return int(line)

    def hits(self) -> Counter[str]:
        """How often each point was reached by a daemon that died there."""
        path = self.folder / "hits"
        return Counter(path.read_text().split()) if path.exists() else Counter()

    def die_at(self, point: str, hits: int) -> None:
        """Start a daemon and see it die at the point."""
        with self._held() if point == "held-by-another" else contextlib.nullcontext():
            self.start(point, hits)
            assert self.ended() == -signal.SIGKILL

    @contextlib.contextmanager
    def _held(self) -> Iterator[None]:
        with Ledger.open(self.url) as ledger, ledger.writer():
            yield

    def die_within(self, seconds: float) -> None:
        """Start a daemon and kill it that long after its newest work began."""
        child = self.start()
        time.sleep(seconds)
        os.kill(child, signal.SIGKILL)
        assert self.ended() == -signal.SIGKILL

    def run_until_told(self) -> None:
        """Run a daemon until nothing of the two routes but heartbeats waits, and end it by SIGTERM."""
        before = self._served()
        child = self.start()
        until(lambda: self._served() > before and self._told(), 120)
        os.kill(child, signal.SIGTERM)
        assert self.ended() == 0

    def _served(self) -> int:
        path = self.folder / "daemon.log"
        return path.read_text().count("serving page and metrics") if path.exists() else 0

    def _told(self) -> bool:
        with Ledger.open(self.url, write=False) as ledger:
            waiting = [n for route in ("desk", "retraining") for n in ledger.undelivered(route) if n.event is not None]
            return not waiting and len(breach_numbers(ledger)) >= 1

    def check(self) -> None:
        """Everything that must hold after a death."""
        if not (self.folder / "watcher.db").exists():
            return
        with Ledger.open(self.url, write=False) as ledger:
            found = audit(ledger, replay=Replay())
            assert found.findings == ()
            assert found.rederived == found.looks
            self._check_cache(ledger)
            breaches = breach_numbers(ledger)
            started = Counter((n.promise, n.version, n.breach_number) for n in notices(ledger, "retraining"))
            assert started == Counter(breaches)
            told = {(n.promise, n.version) for n in notices(ledger, "desk") if n.kind == "breach"}
            assert told == {name[:2] for name in breaches}
            assert self.started() <= {n.key for n in notices(ledger, "retraining")}

    def _check_cache(self, ledger: Ledger) -> None:
        config = settings.read(self.config)
        source = assembly.source_of(config, config.source[0])
        stored = ledger.terms()
        now = ledger.newest_at()
        tallies = (
            source.tally([question(t.terms, t.terms.released, now, at_given=True) for t in stored]) if stored else []
        )
        for term, tally in zip(stored, tallies, strict=True):
            cached = {(c.column, c.value, c.bucket, c.level): c.counts for c in ledger.counts(term.id)}
            assert cached == {(c.column, c.value, c.bucket, c.level): c.counts for c in tally.cells}

    def started(self) -> set[str]:
        """The distinct ids that the retraining receiver was sent."""
        return {got.headers["webhook-id"] for got in self.heard.received if got.path == "/hook/retraining"}

    def check_told(self) -> None:
        """Each breach reached both receivers; the retraining one under one id a breach number."""
        with Ledger.open(self.url, write=False) as ledger:
            breaches = breach_numbers(ledger)
            assert self.started() == {n.key for n in notices(ledger, "retraining")}
            assert len(self.started()) == len(breaches)
            desk = [n for n in notices(ledger, "desk") if n.kind == "breach"]
        assert {(n.promise, n.version) for n in desk} == {name[:2] for name in breaches}
        assert {n.key for n in desk} <= self.told()

    def told(self) -> set[str]:
        """The keys of all notices that the desk's receiver was sent."""
        bodies = [json.loads(got.body) for got in self.heard.received if got.path == "/hook/desk"]
        return {key for body in bodies for key in body["data"]["keys"]}


def notices(ledger: Ledger, route: str) -> list[Notice]:
    """All notices of a route that an event brought."""
    return [n for n in ledger.notices(route=route, limit=100_000) if n.event is not None]


def breach_numbers(ledger: Ledger) -> set[tuple[str, str, int]]:
    """(promise, version, breach number) of every breach that was recorded."""
    events = ledger.events(kinds=("breach",), limit=100_000)
    return {(e.event.promise, e.event.version, int(e.event.facts["number"])) for e in events}


@pytest.fixture
def workshop(tmp_path: Path) -> Iterator[Workshop]:
    """An empty workshop."""
    with receiver() as heard:
        prepare(tmp_path, MACHINES, routes=ROUTES.format(url=heard.url))
        command = [sys.executable, "-c", "import sys; from daemon.dying import obey; obey(sys.argv[1])"]
        with subprocess.Popen(
            [*command, str(tmp_path / "watcher.toml")],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
            env={**os.environ, "PYTHONPATH": str(TESTS)},
        ) as orders:
            try:
                yield Workshop(tmp_path, heard, orders)
            finally:
                orders.kill()


def random_deaths(workshop: Workshop, seed: int, times: int) -> None:
    """Kill at random moments of work: a look takes some tenths of a second and follows the one before at once."""
    draw = random.Random(seed)
    for _ in range(times):
        workshop.die_within(0.5 + 4.0 * draw.random())
        workshop.check()


def test_it_survives_a_few_deaths_at_each_point_and_at_any_time(workshop: Workshop) -> None:
    """Twice at every named point and six times at random; each point was really hit as often as asked."""
    for hits in (1, 2):
        for point in POINTS:
            workshop.die_at(point, hits)
            workshop.check()
    random_deaths(workshop, 5, 6)
    workshop.run_until_told()
    workshop.check()
    workshop.check_told()

    assert workshop.hits() == dict.fromkeys(POINTS, 2)


@pytest.mark.long
@pytest.mark.parametrize("point", POINTS)
def test_it_survives_thirty_deaths_at_a_point(workshop: Workshop, point: str) -> None:
    """The same, thirty times at one point, at its first, second or third hit."""
    draw = random.Random(point)
    for _ in range(30):
        workshop.die_at(point, draw.choice((1, 1, 2, 3)))
        workshop.check()
    workshop.run_until_told()
    workshop.check()
    workshop.check_told()

    assert workshop.hits() == {point: 30}


@pytest.mark.long
def test_it_survives_sixty_deaths_at_any_time(workshop: Workshop) -> None:
    """Sixty kills while work is under way."""
    random_deaths(workshop, 60, 60)
    workshop.run_until_told()
    workshop.check()
    workshop.check_told()


def test_killed_between_answer_and_record_it_sends_the_same_again(workshop: Workshop) -> None:
    """The receiver has answered and nothing is recorded yet: exactly two deliveries, both under one id."""
    desk, _ = workshop.config.read_text().split("[[route]]")[1:]
    assert "heartbeat" in desk
    workshop.config.write_text(workshop.config.read_text().replace(f"[[route]]{desk}", ""))
    workshop.die_at("after-send", 1)
    first = [got.headers["webhook-id"] for got in workshop.heard.received]
    workshop.run_until_told()
    sent = [got.headers["webhook-id"] for got in workshop.heard.received]

    assert len(first) == 1
    assert sent.count(first[0]) == 2
    assert all(count == 1 for key, count in Counter(sent).items() if key != first[0])
