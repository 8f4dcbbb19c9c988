"""Disk full, file system read-only, database locked: no crash, a clear line in the log, and recovery."""

from __future__ import annotations

import sqlite3
import subprocess
from collections.abc import Iterator
from functools import partial
from pathlib import Path

import pytest
from daemon import house
from daemon.house import Daemon, Machine, running, until

from watcher.ledger.audit import audit
from watcher.ledger.store import Ledger
from watcher.replay import Replay

LATHE = Machine("lathe")
prepare = partial(house.prepare, released=house.RECENT, lag="30d")
write_day = partial(house.write_day, released=house.RECENT)


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of its own with one MiB; needs the right to mount, which the tests' container has."""
    place = tmp_path / "disk"
    place.mkdir()
    subprocess.run(["mount", "-t", "tmpfs", "-o", "size=1m", "none", str(place)], check=True)
    try:
        yield place
    finally:
        subprocess.run(["umount", "--lazy", str(place)], check=True)


def started(folder: Path, ledger: str) -> Path:
    """A folder with one day of rows and its ledger elsewhere."""
    config = prepare(folder / "house", [LATHE], ledger=ledger)
    write_day(config.parent, [LATHE], 0)
    return config


def goes_on(daemon: Daemon, config: Path, day: int) -> None:
    """New rows are counted."""
    write_day(config.parent, [LATHE], day)
    before = len(daemon.said("look recorded"))
    until(lambda: len(daemon.said("look recorded")) > before)
    assert daemon.get("/healthz")[0] == 200


def verifies(url: str) -> bool:
    """The chain, the caches and the verdicts hold."""
    with Ledger.open(url, write=False) as ledger:
        return audit(ledger, replay=Replay()).findings == ()


def test_a_full_disk_is_told_and_outlived(tmp_path: Path, small_disk: Path) -> None:
    """The look fails with the remedy in the log, page and metrics stay, and it is counted when there is room again."""
    url = f"sqlite:///{small_disk}/watcher.db"
    config = started(tmp_path, url)
    filler = small_disk / "filler"
    with running(config) as daemon:
        daemon.wait_for("look recorded")
        with filler.open("wb", buffering=0) as full:
            try:
                while True:
                    full.write(bytes(4096))
            except OSError:
                pass
        write_day(config.parent, [LATHE], 1)
        told = until(lambda: [line for line in daemon.log if "disk is full" in str(line.get("detail"))])[0]
        answers = [daemon.get(path)[0] for path in ("/healthz", "/readyz", "/", "/metrics")]
        filler.unlink()
        goes_on(daemon, config, 2)
        code = daemon.stop()
        verified = verifies(url)

    assert "free space" in told["detail"]
    assert "look" in told
    assert answers == [200, 200, 200, 200]
    assert (code, verified) == (0, True)


def test_a_read_only_file_system_is_told_and_outlived(tmp_path: Path, small_disk: Path) -> None:
    """Read-only at the start, and writable later: it says what cannot be done, and goes on."""
    url = f"sqlite:///{small_disk}/watcher.db"
    config = started(tmp_path, url)
    # Open descriptors for writing keep a file system from being made read-only: the start is what meets it.
    subprocess.run(["mount", "-o", "remount,ro", str(small_disk)], check=True)
    with running(config) as daemon:
        told = until(lambda: daemon.said("the ledger cannot be opened; trying again"))[0]
        alive, ready = daemon.get("/healthz")[0], daemon.get("/readyz")[0]
        subprocess.run(["mount", "-o", "remount,rw", str(small_disk)], check=True)
        daemon.wait_for("look recorded")
        code = daemon.stop()

    assert "cannot be" in told["detail"]
    assert (alive, ready, code) == (200, 503, 0)


def test_a_locked_database_throws_the_look_away_and_hides_nothing(tmp_path: Path) -> None:
    """Somebody's transaction holds the ledger: the look is thrown away and made again, and no series disappears."""
    url = f"sqlite:///{tmp_path}/watcher.db"
    config = started(tmp_path, url)
    with running(config) as daemon:
        daemon.wait_for("look recorded")
        before = series(daemon)
        other = sqlite3.connect(tmp_path / "watcher.db", isolation_level=None)
        other.execute("BEGIN IMMEDIATE")
        write_day(config.parent, [LATHE], 1)
        told = daemon.wait_for("the look was thrown away")
        during = series(daemon)
        other.execute("ROLLBACK")
        other.close()
        goes_on(daemon, config, 2)
        code = daemon.stop()

    assert "locked by another process" in told["detail"]
    assert before <= during
    assert (code, verifies(url)) == (0, True)


def series(daemon: Daemon) -> set[str]:
    """The names of all series of a scrape, with their labels."""
    lines = daemon.get("/metrics")[1].splitlines()
    return {line.rpartition(" ")[0] for line in lines if line and not line.startswith("#")}
