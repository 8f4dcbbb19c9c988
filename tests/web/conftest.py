"""Ledgers that are made once a session, and a house around a copy for each test that writes."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from peers.browser import chromium
from web import world

__all__ = ["chromium"]


@pytest.fixture(scope="session")
def demo_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The ledger of the demo."""
    path = tmp_path_factory.mktemp("demo-ledger") / "watcher.db"
    world.demo_ledger(path)
    return path


@pytest.fixture(scope="session")
def hostile_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A ledger whose names attack."""
    path = tmp_path_factory.mktemp("hostile-ledger") / "watcher.db"
    world.hostile_ledger(path)
    return path


@pytest.fixture
def demo(demo_file: Path, tmp_path: Path) -> world.House:
    """A house on loopback around a copy of the demo's ledger."""
    made = world.house(Path(shutil.copy(demo_file, tmp_path / "demo.db")))
    yield made
    made.ledger.close()


@pytest.fixture
def guarded(demo_file: Path, tmp_path: Path) -> world.House:
    """The same, as it is off loopback: a token for everything."""
    made = world.house(Path(shutil.copy(demo_file, tmp_path / "guarded.db")), tokens_required=True)
    yield made
    made.ledger.close()


@pytest.fixture
def hostile(hostile_file: Path, tmp_path: Path) -> world.House:
    """A house on loopback around the hostile ledger."""
    made = world.house(Path(shutil.copy(hostile_file, tmp_path / "hostile.db")))
    yield made
    made.ledger.close()
