"""Notices as they leave a real daemon for a real HTTP receiver, by a clock that the test sets."""

from __future__ import annotations

import json
import threading
from collections import Counter
from collections.abc import Iterator
from pathlib import Path

import pytest
from daemon.house import DAY, RELEASED, Machine, hooked, prepare, running, until, write_day
from peers.http_receiver import Received, Receiver, Reply, receiver

from watcher.ledger.store import Ledger

BAD = Machine("press", bad_day=1)
GOOD = Machine("lathe")
ROUTES = """
[[route]]
name = "desk"
kind = "webhook"
url = "{url}/desk"
heartbeat = "1d"
[[route]]
name = "retraining"
kind = "webhook"
url = "{url}/retraining"
retrain = true
"""
BY_THE_FILE = """
from watcher.daemon import service
service.PERIODIC = service.POST = 0.5
def clock():
    return datetime.fromtimestamp(int((config.parent / "now").read_text()), UTC)
hooks = Hooks(clock=clock)
"""


@pytest.fixture
def heard() -> Iterator[Receiver]:
    """A receiver that answers 204 to everything."""
    with receiver() as made:
        yield made


def at(folder: Path, day: int, hour: int = 2) -> None:
    """Set the clock of the daemon, after the rows of the days before."""
    for before in range(day):
        if not (folder / "rows" / f"day{before:04}.csv").exists():
            write_day(folder, [BAD, GOOD], before)
    beside = folder / "now.part"
    beside.write_text(str(RELEASED + day * DAY + hour * 3600))
    beside.rename(folder / "now")


def to(heard: Receiver, route: str) -> list[Received]:
    """What a route's receiver got."""
    return [got for got in heard.received if got.path == f"/hook/{route}"]


def kinds(heard: Receiver, route: str) -> Counter[tuple[str, str | None]]:
    """Kind and promise of every notice that was sent over a route."""
    bodies = [json.loads(got.body) for got in to(heard, route)]
    return Counter((n["kind"], n["promise"]) for body in bodies for n in body["data"]["notices"])


def test_a_breach_starts_retraining_once_and_people_hear_of_it(tmp_path: Path, heard: Receiver) -> None:
    """One breach: one notice on each route however many looks follow; a heartbeat a day; a reminder from the next day on."""
    config = prepare(tmp_path, [BAD, GOOD], routes=ROUTES.format(url=heard.url))
    at(tmp_path, 1)
    with running(config, *hooked(config, BY_THE_FILE)) as daemon:
        daemon.wait_for("look recorded")
        at(tmp_path, 2)
        until(lambda: to(heard, "retraining"))
        until(lambda: kinds(heard, "desk")["breach", "press"])
        early = kinds(heard, "desk")["reminder", "press"]
        at(tmp_path, 3, hour=1)  # the breach was noticed at 02:00 the day before
        until(lambda: kinds(heard, "desk")["heartbeat", None] == 3)
        before = kinds(heard, "desk")["reminder", "press"]
        at(tmp_path, 3, hour=3)
        until(lambda: kinds(heard, "desk")["reminder", "press"])
        at(tmp_path, 5)
        until(lambda: kinds(heard, "desk")["reminder", "press"] == 2)
        delivered = until(lambda: daemon.metric('watcher_notices_total{outcome="delivered",route="retraining"}'))
        waiting = daemon.metric('watcher_notices_waiting{route="desk"}')
        daemon.stop()

    assert (early, before) == (0, 0)
    assert delivered == 1.0
    assert waiting == 0.0
    assert kinds(heard, "retraining") == {("breach", "press"): 1}
    assert kinds(heard, "desk")["breach", "press"] == 1
    assert ("breach", "lathe") not in kinds(heard, "desk")
    link = json.loads(to(heard, "desk")[-1].body)["data"]["notices"][0]["where"]
    assert link.startswith(daemon.address)


def test_a_receiver_that_hangs_holds_up_no_other_route(tmp_path: Path, heard: Receiver) -> None:
    """The desk's receiver never answers; the retraining one hears of the breach meanwhile, and the daemon can be ended."""
    asked, over = threading.Event(), threading.Event()

    def slow(got: Received) -> Reply:
        if got.path == "/hook/desk":
            asked.set()
            over.wait(300)
        return Reply()

    heard.answer = slow
    routes = ROUTES.format(url=heard.url).replace('heartbeat = "1d"', 'heartbeat = "1d"\ntimeout = "10m"')
    config = prepare(tmp_path, [BAD], routes=routes)
    at(tmp_path, 1)
    with running(config, *hooked(config, BY_THE_FILE)) as daemon:
        assert asked.wait(60)
        at(tmp_path, 2)
        until(lambda: to(heard, "retraining"))
        code = daemon.stop()  # within 30 seconds
        over.set()

    assert code == 0
    assert len(to(heard, "desk")) == 1


def test_a_clock_that_is_set_back_stops_looks_and_says_so(tmp_path: Path, heard: Receiver) -> None:
    """No look; the log says it at each try, event, notice and metric once; looks go on when the clock has caught up."""
    config = prepare(tmp_path, [GOOD], routes=ROUTES.format(url=heard.url))
    at(tmp_path, 3)
    with running(config, *hooked(config, BY_THE_FILE)) as daemon:
        daemon.wait_for("look recorded")
        at(tmp_path, 1)
        until(lambda: len(daemon.said("clock-went-back")) >= 3)
        until(lambda: kinds(heard, "desk")["clock-went-back", None])
        behind = daemon.metric("watcher_clock_behind_seconds")
        head = daemon.metric("watcher_ledger_look")
        at(tmp_path, 4)
        daemon.wait_for("look recorded", look=3)
        until(lambda: daemon.metric("watcher_clock_behind_seconds") == 0.0)
        daemon.stop()
    with Ledger.open(f"sqlite:///{tmp_path}/watcher.db", write=False) as ledger:
        events = [e.event.kind for e in ledger.events(kinds=("clock-went-back",))]

    assert behind == 2.0 * DAY
    assert head == 2.0  # the look, and the event of the step back
    assert events == ["clock-went-back"]
    assert kinds(heard, "desk")["clock-went-back", None] == 1
