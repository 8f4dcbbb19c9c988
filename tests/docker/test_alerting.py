"""Debian's Prometheus scrapes the metrics, a rule fires, Debian's Alertmanager posts it to a receiver."""

from __future__ import annotations

import contextlib
import json
import socket
import subprocess
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import httpx
import pytest
import yaml
from notices.memory import some_standing
from peers.http_receiver import Receiver, Reply, receiver
from prometheus_client import CollectorRegistry
from prometheus_client.exposition import CONTENT_TYPE_LATEST, generate_latest

from watcher.metrics import LedgerCollector, Snapshot
from watcher.records import Head, SourceState, Standing

RULES = Path(__file__).parents[2] / "docker" / "prometheus" / "rules.yml"
PATIENCE = 90
"""Seconds; a machine that is busy with other tests starts two servers slowly."""

pytestmark = [pytest.mark.peer("prometheus"), pytest.mark.peer("alertmanager")]


def _metrics(*standings: Standing) -> bytes:
    snapshot = Snapshot(
        standings=standings,
        waiting=(),
        sources=(SourceState("inspection-desk"),),
        rejected={},
        notices={},
        routes=("desk",),
        lease_held=True,
        head=Head(7, "ab" * 32),
        ledger_bytes=1,
        version="0",
    )
    registry = CollectorRegistry()
    registry.register(LedgerCollector(lambda: snapshot, slices=True))
    return generate_latest(registry)


@contextlib.contextmanager
def _running(*command: str, folder: Path) -> Iterator[None]:
    with (folder / "log").open("ab") as log:
        program = subprocess.Popen(command, cwd=folder, stdout=log, stderr=subprocess.STDOUT)
        try:
            yield
        finally:
            program.terminate()
            program.wait(30)


def _free_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as free:
        return int(free.getsockname()[1])


def _until(found: Callable[[], Any], folder: Path) -> Any:
    end = time.monotonic() + PATIENCE
    while time.monotonic() < end:
        with contextlib.suppress(httpx.TransportError):
            if (answer := found()) is not None:
                return answer
        time.sleep(0.1)
    raise AssertionError(f"nothing within {PATIENCE} s: {(folder / 'log').read_text()[-2000:]}")


@contextlib.contextmanager
def _alerting(folder: Path, daemon: Receiver, people: Receiver) -> Iterator[str]:
    """Prometheus with the shipped rules on the daemon's metrics, Alertmanager in front of people; Prometheus' address."""
    ports = _free_port(), _free_port()
    target, prometheus, alertmanager = daemon.url.split("/")[2], *(f"127.0.0.1:{port}" for port in ports)
    (folder / "prometheus.yml").write_text(
        yaml.safe_dump(
            {
                "global": {"scrape_interval": "1s", "evaluation_interval": "1s"},
                "rule_files": [str(RULES)],
                "scrape_configs": [{"job_name": "watcher", "static_configs": [{"targets": [target]}]}],
                "alerting": {"alertmanagers": [{"static_configs": [{"targets": [alertmanager]}]}]},
            }
        )
    )
    (folder / "alertmanager.yml").write_text(
        yaml.safe_dump(
            {
                "route": {"receiver": "people", "group_by": ["..."], "group_wait": "0s"},
                "receivers": [{"name": "people", "webhook_configs": [{"url": people.url}]}],
            }
        )
    )
    with (
        _running(
            "prometheus-alertmanager",
            "--config.file=alertmanager.yml",
            f"--web.listen-address={alertmanager}",
            "--cluster.listen-address=",
            "--storage.path=alerts",
            folder=folder,
        ),
        _running(
            "prometheus",
            "--config.file=prometheus.yml",
            f"--web.listen-address={prometheus}",
            "--storage.tsdb.path=series",
            folder=folder,
        ),
    ):
        yield f"http://{prometheus}"


def test_a_broken_promise_reaches_people_through_prometheus(tmp_path: Path) -> None:
    """Scraped, fired, posted: for the slice that broke, and not for the whole that stands."""
    broken = some_standing(column="depot", value="Birch")
    whole = replace(some_standing(), state="undecided", breach=None, flags=())
    with receiver() as daemon, receiver() as people:
        body = _metrics(whole, broken)
        daemon.answer = lambda _: Reply(200, body, {"content-type": CONTENT_TYPE_LATEST})
        with _alerting(tmp_path, daemon, people) as prometheus:
            scraped = _until(
                lambda: _value(prometheus, 'watcher_state{watcher_state="breached",slice="depot=Birch"}'), tmp_path
            )
            posted = _until(lambda: _posted(people, "WatcherPromiseBroken"), tmp_path)
    names = {alert["labels"]["alertname"] for got in people.received for alert in json.loads(got.body)["alerts"]}

    assert scraped == "1"
    assert [alert["labels"]["slice"] for alert in posted] == ["depot=Birch"]
    assert posted[0]["annotations"]["summary"] == "damage-photos 1, depot=Birch: the promise is broken"
    assert names == {"WatcherPromiseBroken"}


def _value(prometheus: str, query: str) -> str | None:
    found = httpx.get(f"{prometheus}/api/v1/query", params={"query": query}, trust_env=False).json()
    result = found.get("data", {}).get("result", [])
    return result[0]["value"][1] if result else None


def _posted(people: Receiver, name: str) -> list[Any] | None:
    alerts = [alert for got in people.received for alert in json.loads(got.body)["alerts"]]
    return [alert for alert in alerts if alert["labels"]["alertname"] == name] or None
