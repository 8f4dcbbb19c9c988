"""`watcher upgrade`: nothing to do is said, a step is taken after a copy, a newer ledger is left alone."""

from __future__ import annotations

import functools
import sqlite3
from pathlib import Path

import pytest
from cli.worlds import answer, folder, run
from sqlalchemy import Connection

from watcher.ledger.store import Ledger
from watcher.ledger.tables import SCHEMA
from watcher.ledger.upgrade import upgrade


@pytest.fixture
def config(tmp_path: Path) -> Path:
    """A ledger with one look."""
    path = folder(tmp_path)
    assert run("look", path, "--at", "2026-02-01").exit_code == 0
    return path


def renumber(config: Path, number: int) -> None:
    """Let the ledger claim another schema number."""
    with sqlite3.connect(config.parent / "watcher.db") as connection:
        connection.execute("UPDATE meta SET value = ? WHERE name = 'schema'", (str(number),))
    connection.close()


def test_nothing_to_do_is_said(config: Path) -> None:
    """The present number: no copy, no change."""
    before = answer("status", config)["head"]

    assert "nothing to do" in run("upgrade", config).output
    assert answer("upgrade", config) == {"found": SCHEMA, "now": SCHEMA, "copy": None}
    assert answer("status", config)["head"] == before
    assert not list(config.parent.glob("*.schema-*"))


def test_an_older_ledger_is_copied_first_and_then_upgraded(config: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The command that the refusal names does it; the copy keeps the old number, the chain is the same."""
    renumber(config, SCHEMA - 1)
    refused = run("status", config)

    def step(connection: Connection) -> None:
        connection.exec_driver_sql("CREATE TABLE added (n INTEGER)")

    monkeypatch.setattr("watcher.cli.upgrade.climb", functools.partial(upgrade, steps={SCHEMA - 1: step}))

    assert refused.exit_code == 2
    assert "watcher upgrade" in refused.stderr
    told = run("upgrade", config).output
    copy = config.parent / f"watcher.db.schema-{SCHEMA - 1}"
    assert copy.name in "".join(told.split())
    with sqlite3.connect(copy) as connection:
        assert connection.execute("SELECT value FROM meta WHERE name = 'schema'").fetchone() == (str(SCHEMA - 1),)
    connection.close()
    assert answer("audit", config)["findings"] == []


def test_a_newer_ledger_is_left_alone(config: Path) -> None:
    """Exit 2: install the newer program."""
    renumber(config, SCHEMA + 1)
    result = run("upgrade", config)

    assert result.exit_code == 2
    assert "newer" in result.stderr


def test_a_ledger_in_use_is_not_upgraded(config: Path) -> None:
    """The holder of the lock is named, exit 1."""
    with Ledger.open(f"sqlite:///{config.parent / 'watcher.db'}") as daemon, daemon.writer():
        result = run("upgrade", config)

    assert result.exit_code == 1
    assert "held by" in result.stderr


def test_without_a_ledger_there_is_nothing_to_upgrade(tmp_path: Path) -> None:
    """Exit 2, and none is made."""
    path = folder(tmp_path)

    assert run("upgrade", path).exit_code == 2
    assert not (tmp_path / "watcher.db").exists()
