"""`watcher notices`: the list, sending again, giving up."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from cli.worlds import HOSTILE, answer, broken, run

from watcher.ledger.store import Ledger

LATER = datetime(2026, 3, 2, tzinfo=UTC)


@pytest.fixture
def config(tmp_path: Path) -> Path:
    """A broken promise with one waiting notice on each of two routes."""
    return broken(tmp_path)


def ledger(config: Path) -> Ledger:
    """The ledger, to write to."""
    return Ledger.open(f"sqlite:///{config.parent / 'watcher.db'}")


def settle(config: Path, state: str, said: str, tries: int = 3) -> str:
    """Let the notice on `pager` have an answer; its key."""
    with ledger(config) as opened:
        key = opened.notices(route="pager")[0].key
        opened.record_answer("pager", key, state=state, answer=said, next_at=LATER + timedelta(days=9), tries=tries)
    return key


def test_the_list_tells_route_kind_state_tries_and_answer(config: Path) -> None:
    """By route and state, newest first, whole keys in JSON and their beginnings in the table."""
    key = settle(config, "delivered", "HTTP 202")
    found = answer("notices", config)
    shown = run("notices", config).output

    assert {each["route"] for each in found} == {"pager", "other"}
    assert {each["promise"] for each in found} == {"triage"}
    [delivered] = answer("notices", config, "--state", "delivered")
    assert delivered["key"] == key
    assert (delivered["tries"], delivered["answer"], delivered["next"]) == (3, "HTTP 202", None)
    assert [each["route"] for each in answer("notices", config, "--route", "other")] == ["other"]
    assert key[:12] in shown
    assert "HTTP 202" in shown
    assert answer("notices", config, "--state", "dead") == []
    assert "no notices" in run("notices", config, "--state", "dead").output


@pytest.mark.parametrize("state", ["delivered", "dead", "waiting"])
def test_sending_again_waits_from_the_first_try_and_keeps_the_answer(config: Path, state: str) -> None:
    """Due now, no tries, the same key, what was answered before stays readable; a beginning of the key is enough."""
    key = settle(config, state, "HTTP 500")
    [changed] = answer("notices", config, "--send-again", key[:10])

    assert changed["key"] == key
    assert (changed["state"], changed["tries"], changed["answer"]) == ("waiting", 0, "HTTP 500")
    now = datetime.now(UTC)
    with ledger(config) as opened:
        assert key in [notice.key for notice in opened.waiting("pager", now)]
        assert len(opened.notices()) == 2


def test_giving_up_says_that_it_was_by_hand(config: Path) -> None:
    """The notice is dead, holds up nothing and keeps the last answer; only a waiting one can be given up."""
    key = settle(config, "waiting", "HTTP 500")
    [changed] = answer("notices", config, "--give-up", key)

    assert changed["state"] == "dead"
    assert changed["answer"] == "given up by hand; before that: HTTP 500"
    with ledger(config) as opened:
        assert opened.undelivered("pager") == []
    refused = run("notices", config, "--give-up", key)
    assert refused.exit_code == 2
    assert "is dead" in refused.stderr


def test_what_cannot_be_done_is_refused_and_changes_nothing(config: Path) -> None:
    """A cancelled notice, an unknown, short or ambiguous key, both options at once."""
    key = settle(config, "cancelled", "withdrawn")
    before = answer("notices", config)
    for arguments, word in (
        (("--send-again", key), "withdrawn"),
        (("--send-again", "f" * 64), "no notice"),
        (("--send-again", key[:4]), "first 6"),
        (("--send-again", key, "--give-up", key), "one of them"),
    ):
        result = run("notices", config, *arguments)
        assert result.exit_code == 2, arguments
        assert word in result.stderr
    assert answer("notices", config) == before


def test_an_ambiguous_key_is_refused(config: Path) -> None:
    """Two notices whose keys begin alike are told apart by the route."""
    with ledger(config) as opened:
        from dataclasses import replace

        first = opened.notices(route="pager")[0]
        opened.add_notices([replace(first, route="other")])

    assert "2 notices" in run("notices", config, "--send-again", first.key).stderr
    assert run("notices", config, "--send-again", first.key, "--route", "pager").exit_code == 0


def test_a_hostile_answer_stays_on_its_line(config: Path) -> None:
    """Receivers' answers are outside text: no control character reaches the terminal."""
    settle(config, "dead", HOSTILE)
    shown = run("notices", config).output

    assert "\x1b" not in shown
    assert "\r" not in shown
    assert "\\x1b[31m" in "".join(shown.split())
