"""`watcher token`: shown once, stored as a digest, listed, revoked."""

from __future__ import annotations

from pathlib import Path

import pytest
from cli.worlds import HOSTILE, answer, folder, run

from watcher.ledger.store import Ledger
from watcher.ledger.tokens import PREFIX


@pytest.fixture
def config(tmp_path: Path) -> Path:
    """A configuration without a ledger: tokens may be made before the first look."""
    return folder(tmp_path)


def opened(config: Path) -> Ledger:
    """The ledger, to read."""
    return Ledger.open(f"sqlite:///{config.parent / 'watcher.db'}", write=False)


def test_a_token_is_printed_once_alone_and_stored_as_a_digest(config: Path) -> None:
    """Standard output is the token and nothing else; no file of the ledger holds it; it opens what its role says."""
    result = run("token", config, "make", "board", "--role", "read")
    token = result.stdout.strip()

    assert result.exit_code == 0
    assert token.startswith(PREFIX)
    assert "not shown again" in result.stderr
    assert token not in result.stderr
    for file in config.parent.glob("watcher.db*"):
        assert token.encode() not in file.read_bytes()
    assert token not in run("token", config, "list").output
    with opened(config) as ledger:
        found = ledger.tokens.verify(token)
        assert found is not None
        assert (found.name, found.role) == ("board", "read")


def test_a_revoked_token_opens_nothing_and_stays_listed(config: Path) -> None:
    """With the time; its name is not used again."""
    token = answer("token", config, "make", "desk", "--role", "act")["token"]
    answer("token", config, "revoke", "desk")
    [listed] = answer("token", config, "list")

    with opened(config) as ledger:
        assert ledger.tokens.verify(token) is None
    assert listed["name"] == "desk"
    assert listed["revoked"] is not None
    assert "token" not in listed
    assert run("token", config, "make", "desk", "--role", "act").exit_code == 2
    assert run("token", config, "revoke", "desk").exit_code == 2


def test_it_works_while_the_daemon_holds_the_ledger(config: Path) -> None:
    """Made and revoked under another process's lock."""
    with Ledger.open(f"sqlite:///{config.parent / 'watcher.db'}") as daemon, daemon.writer():
        assert run("token", config, "make", "a", "--role", "read").exit_code == 0
        assert run("token", config, "revoke", "a").exit_code == 0


@pytest.mark.parametrize(
    "arguments",
    [
        ("make", "x"),
        ("make", "x", "--role", "root"),
        ("make", "", "--role", "read"),
        ("revoke", "nobody"),
        (),
        ("burn",),
    ],
)
def test_what_makes_no_sense_is_refused(config: Path, arguments: tuple[str, ...]) -> None:
    """No role, an unknown role, no name, an unknown name, no word, an unknown word: exit 2."""
    assert run("token", config, *arguments).exit_code == 2


def test_names_are_shown_safely(config: Path) -> None:
    """A name with control characters reaches the terminal escaped."""
    assert run("token", config, "make", HOSTILE[:60], "--role", "read").exit_code == 0
    shown = run("token", config, "list")

    assert "\x1b" not in shown.output
    assert "no tokens" not in shown.output
