"""/metrics of a real daemon, read by the tools of the formats and by a real Prometheus."""

from __future__ import annotations

import contextlib
import json
import socket
import subprocess
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from functools import partial
from pathlib import Path
from types import SimpleNamespace
from urllib.error import URLError
from urllib.parse import urlencode
from urllib.request import Request, urlopen

import pytest
from daemon import house
from daemon.house import RELEASED, Daemon, Machine, running, until
from prometheus_client import CollectorRegistry, generate_latest
from prometheus_client.openmetrics.parser import text_string_to_metric_families

from watcher import settings
from watcher.daemon import parts as building
from watcher.daemon.children import Children
from watcher.daemon.hooks import Hooks
from watcher.daemon.serving import Reader, Snapshots
from watcher.errors import WatcherError
from watcher.ledger.store import Ledger
from watcher.metrics import LedgerCollector, possible_reasons
from watcher.records import REASONS

LATHE = Machine("lathe")
prepare = partial(house.prepare, released=house.RECENT, lag="30d")
write_day = partial(house.write_day, released=house.RECENT)
SLICED = f"""
[[promise]]
name = "sliced"
source = "bench"
tolerance = 0.03
risk = 0.001
released = {house.stamp(house.RECENT)}
label_lag = "30d"
uncertified = true
slices = {{ machine = ["lathe", "drill"] }}
[[route]]
name = "desk"
kind = "log"
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Two promises, one with declared slices, and two days of rows."""
    prepare(tmp_path, [LATHE], routes=SLICED)
    for day in range(2):
        write_day(tmp_path, [LATHE], day)
    return tmp_path


def text(daemon: Daemon, accept: str = "text/plain") -> tuple[str, str]:
    """Content type and body of a scrape."""
    with urlopen(Request(daemon.address + "/metrics", headers={"accept": accept}), timeout=20) as answer:
        return answer.headers["content-type"], answer.read().decode()


def series(exposition: str) -> set[str]:
    """The names of all series with their labels."""
    return {line.rpartition(" ")[0] for line in exposition.splitlines() if line and not line.startswith("#")}


def test_both_formats_are_accepted_by_their_own_tools(folder: Path) -> None:
    """promtool finds nothing in the text format, the OpenMetrics parser reads the other; both say the same."""
    with running(folder / "watcher.toml") as daemon:
        daemon.wait_for("look recorded")
        kind, plain = text(daemon)
        open_kind, opened = text(daemon, "application/openmetrics-text; version=1.0.0")
        daemon.stop()
    checked = subprocess.run(["promtool", "check", "metrics"], input=plain, capture_output=True, text=True, check=False)
    families = {family.name: family for family in text_string_to_metric_families(opened)}

    assert kind.startswith("text/plain; version=")
    assert open_kind.startswith("application/openmetrics-text; version=1.0.0")
    assert (checked.returncode, checked.stdout, checked.stderr) == (0, "", "")
    assert families["watcher_state"].type == "stateset"
    assert families["watcher_build"].type == "info"
    assert len(families["watcher_labels"].samples) == 4  # two wholes, two declared slices


test_both_formats_are_accepted_by_their_own_tools = pytest.mark.peer("prometheus")(
    test_both_formats_are_accepted_by_their_own_tools
)


def test_every_series_is_there_from_the_first_scrape_and_stays(folder: Path) -> None:
    """Before the first look, after it, and while the source fails: nothing is missing that was there before."""
    (folder / "rows").rename(folder / "away")
    with running(folder / "watcher.toml") as daemon:
        first = series(text(daemon)[1])
        daemon.wait_for("source-failed")
        failed = series(text(daemon)[1])
        (folder / "away").rename(folder / "rows")
        daemon.wait_for("look recorded")
        until(lambda: daemon.metric("watcher_ledger_look") == 2.0)
        looked = series(text(daemon)[1])
        (folder / "rows").rename(folder / "away")
        until(lambda: daemon.metric('watcher_source_failing{source="bench"}') == 1.0)
        again = series(text(daemon)[1])
        daemon.stop()

    assert 'watcher_labels{promise="sliced",slice="machine=drill",version="1"}' in first
    assert 'watcher_rows_rejected{promise="lathe",reason="bad-time",source="bench"}' in first
    assert first <= failed <= looked <= again


def test_series_outlive_a_ledger_that_cannot_be_read(folder: Path) -> None:
    """With the ledger gone the figures stay as they were read last, and watcher_ledger_up is 0."""
    config = settings.read(folder / "watcher.toml")
    parts = building.build(config, Children(), lambda _: None, lambda: datetime.fromtimestamp(RELEASED, UTC))
    service = SimpleNamespace(parts=parts, hooks=Hooks(), lease_held=False)
    ledgers: list[Ledger] = []

    def open_it() -> Ledger:
        if not ledgers:
            raise WatcherError("gone")
        return ledgers[-1]

    registry = CollectorRegistry()
    snapshots = Snapshots(service, Reader(open_it))  # type: ignore[arg-type]
    registry.register(LedgerCollector(snapshots, slices=True))
    never = generate_latest(registry).decode()
    with Ledger.memory(new_id="0b") as ledger:
        ledgers.append(ledger)
        read = generate_latest(registry).decode()
        ledgers.clear()
        snapshots._reader.close()
    lost = generate_latest(registry).decode()

    assert series(never) == series(read) == series(lost)
    assert ["watcher_ledger_up 0.0" in scrape for scrape in (never, read, lost)] == [True, False, True]


def test_the_reasons_shown_are_those_that_can_occur(folder: Path) -> None:
    """A promise without clusters, weights or losses has no series for their reasons; one with a cluster column has."""
    config = settings.read(folder / "watcher.toml")
    terms = config.promise[0].terms(config.source[0])

    assert possible_reasons(terms) == ("no-id", "bad-time", "future-time", "conflicting-duplicate")
    assert set(possible_reasons(terms)) <= set(REASONS)


@contextlib.contextmanager
def prometheus(folder: Path, target: str) -> Iterator[str]:
    """A real Prometheus that scrapes the target every second; yields its address."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        address = f"127.0.0.1:{free.getsockname()[1]}"
    config = folder / "prometheus.yml"
    host = target.removeprefix("http://")
    config.write_text(
        "global: {scrape_interval: 1s}\nscrape_configs:\n- job_name: watcher\n"
        f"  static_configs: [{{targets: ['{host}']}}]\n"
    )
    command = ["prometheus", f"--config.file={config}", f"--storage.tsdb.path={folder / 'tsdb'}"]
    with (folder / "prometheus.log").open("wb") as log:
        process = subprocess.Popen([*command, f"--web.listen-address={address}"], stdout=log, stderr=log)
        try:
            yield f"http://{address}"
        finally:
            process.terminate()
            process.wait(20)


def asked(address: str, query: str) -> Callable[[], list[dict[str, object]]]:
    """A question to Prometheus, as something to wait for."""

    def ask() -> list[dict[str, object]]:
        try:
            with urlopen(f"{address}/api/v1/query?{urlencode({'query': query})}", timeout=10) as answer:
                found: list[dict[str, object]] = json.load(answer)["data"]["result"]
                return found
        except (URLError, OSError):
            return []

    return ask


@pytest.mark.peer("prometheus")
def test_a_real_prometheus_scrapes_it(folder: Path) -> None:
    """The target is up, state and flags can be queried, and every sample of a scrape was taken."""
    with running(folder / "watcher.toml") as daemon:
        daemon.wait_for("look recorded")
        count = len(series(text(daemon)[1]))
        with prometheus(folder, daemon.address) as server:
            until(asked(server, 'up{job="watcher"} == 1'))
            undecided = until(asked(server, 'watcher_state{watcher_state="undecided"} == 1'))
            taken = until(asked(server, "scrape_samples_scraped"))
        daemon.stop()

    names = {(found["metric"]["promise"], found["metric"].get("slice", "")) for found in undecided}  # type: ignore[index]
    assert names == {("lathe", ""), ("sliced", ""), ("sliced", "machine=lathe"), ("sliced", "machine=drill")}
    assert int(taken[0]["value"][1]) == count  # type: ignore[index]
