"""`watcher acknowledge`: recorded beside a writer, shown everywhere, and it changes nothing else."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import pytest
from cli.worlds import answer, broken, run

from watcher.daemon.posting import _unacknowledged
from watcher.errors import LedgerBusy
from watcher.ledger.store import Ledger

WHO = ("--breach", "1", "--who", "A. Keeper", "--why", "camera is being exchanged")


@pytest.fixture
def config(tmp_path: Path) -> Path:
    """A promise that is broken."""
    return broken(tmp_path)


def test_it_is_recorded_while_another_process_holds_the_ledger(config: Path) -> None:
    """Who, why and when enter the chain although the daemon's lock is held; the reminder has nothing left to say."""
    url = f"sqlite:///{config.parent / 'watcher.db'}"
    with Ledger.open(url) as daemon, daemon.writer():
        assert len(_unacknowledged(daemon)) == 1
        before = daemon.head().look
        found = answer("acknowledge", config, "triage", *WHO)
        assert _unacknowledged(daemon) == []

    assert found["look"] == before + 1
    assert (found["breach"], found["version"], found["who"]) == (1, "1", "A. Keeper")
    assert datetime.fromisoformat(found["at"]) > datetime(2026, 3, 1, tzinfo=UTC)
    assert answer("audit", config)["findings"] == []


def test_the_breach_still_stands_and_status_tells_who(config: Path) -> None:
    """State, totals and counts are what they were; text and JSON of status show the acknowledgement."""
    before = answer("status", config, code=3)
    assert "has not been acknowledged" in run("status", config).output
    assert {p["breach"]["acknowledged"] for p in before["promises"] if p["breach"]} == {None}
    answer("acknowledge", config, "triage", *WHO)
    after = answer("status", config, code=3)

    shown = run("status", config).output
    assert "Breach 1 was acknowledged by A. Keeper" in shown
    assert "camera is being exchanged" in shown
    told = [p["breach"].pop("acknowledged") for p in after["promises"] if p["breach"]]
    assert {(t["who"], t["why"]) for t in told} == {("A. Keeper", "camera is being exchanged")}
    for each in before["promises"]:
        if each["breach"]:
            del each["breach"]["acknowledged"]
    assert before["promises"] == after["promises"]


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (("nobody", *WHO), "'triage'"),
        (("triage", "--breach", "2", *WHO[2:]), "standing: 1"),
        (("triage", *WHO, "--version", "9"), "'9'"),
        (("triage", "--breach", "1", "--who", " ", "--why", "x"), "who"),
        (("triage", "--breach", "1", "--who", "x"), "--why"),
    ],
)
def test_what_does_not_fit_is_refused_with_what_would(config: Path, arguments: tuple[str, ...], word: str) -> None:
    """Exit 2, the known name or number, and nothing is written."""
    before = answer("status", config, code=3)["head"]
    result = run("acknowledge", config, *arguments)

    assert result.exit_code == 2
    assert word in result.stderr
    assert answer("status", config, code=3)["head"] == before


def test_without_a_ledger_none_is_made(tmp_path: Path, config: Path) -> None:
    """A mistyped configuration must not leave an empty ledger behind."""
    other = tmp_path / "other.toml"
    other.write_text(config.read_text(encoding="utf-8").replace("watcher.db", "none.db"), encoding="utf-8")

    assert run("acknowledge", other, "triage", *WHO).exit_code == 2
    assert not (tmp_path / "none.db").exists()


def test_a_look_that_comes_between_does_not_lose_it(config: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """When the source moved on between reading and writing, the entry is made again behind the new look."""
    commit, failures = Ledger.commit, iter([LedgerBusy("moved on"), LedgerBusy("moved on")])

    def moved_on(self: Ledger, entry: object, **more: object) -> object:
        for failure in failures:
            raise failure
        return commit(self, entry, **more)  # type: ignore[arg-type]

    monkeypatch.setattr(Ledger, "commit", moved_on)

    assert run("acknowledge", config, "triage", *WHO).exit_code == 0
