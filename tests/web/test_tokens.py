"""Tokens: seen once, stored as a digest, of a role, revoked for good."""

from __future__ import annotations

import hashlib
import sqlite3
from datetime import UTC, datetime

import pytest

from watcher.errors import UsageError
from watcher.ledger.store import Ledger
from watcher.ledger.tokens import PREFIX

NOW = datetime(2026, 7, 6, tzinfo=UTC)


@pytest.fixture
def ledger(tmp_path):
    """An empty ledger in a file."""
    with Ledger.open(f"sqlite:///{tmp_path / 'w.db'}") as made:
        yield made


def test_a_token_is_nowhere_in_the_ledger(ledger, tmp_path):
    """The file holds its SHA-256 and not the token; it is drawn anew each time and begins recognisably."""
    token, other = ledger.tokens.make("maria", "act", NOW), ledger.tokens.make("board", "read", NOW)
    with sqlite3.connect(tmp_path / "w.db") as connection:
        rows = connection.execute("SELECT * FROM token").fetchall()
    connection.close()

    assert token != other
    assert token.startswith(PREFIX)
    assert len(token) >= len(PREFIX) + 43  # 256 bits in base64
    assert hashlib.sha256(token.encode()).hexdigest() in str(rows)
    assert token not in str(rows)


def test_a_token_is_known_by_itself_until_it_is_revoked(ledger):
    """Verified with its name and role; unknown, changed or overlong ones and revoked ones are nobody's."""
    token = ledger.tokens.make("maria", "act", NOW)
    found = ledger.tokens.verify(token)
    strangers = [
        token[:-1],
        token + "x",
        token.upper(),
        token.removeprefix(PREFIX),
        "",
        PREFIX,
        PREFIX + "x" * 10_000,
        "\ud800",
    ]

    assert (found.name, found.role, found.created) == ("maria", "act", NOW)
    assert [ledger.tokens.verify(each) for each in strangers] == [None] * len(strangers)
    ledger.tokens.revoke("maria", NOW)
    assert ledger.tokens.verify(token) is None
    assert [(t.name, t.revoked) for t in ledger.tokens.listed()] == [("maria", NOW)]


@pytest.mark.parametrize(
    ("name", "role"), [("maria", "act"), ("", "act"), ("  ", "read"), ("x" * 81, "read"), ("new", "admin")]
)
def test_what_cannot_be_made_is_refused(ledger, name, role):
    """A name in use (revoked ones stay in use), an empty or overlong name, and an unknown role."""
    ledger.tokens.make("maria", "read", NOW)
    ledger.tokens.revoke("maria", NOW)
    with pytest.raises(UsageError):
        ledger.tokens.make(name, role, NOW)
