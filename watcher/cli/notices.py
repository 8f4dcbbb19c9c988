"""`watcher notices`: what left, what waits, what was given up; and sending one again."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Final

import click
from rich import box
from rich.table import Table
from rich.text import Text

from watcher import settings
from watcher.answer import notice_json
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, clock, print_json
from watcher.errors import UsageError
from watcher.ledger.store import Ledger
from watcher.records import Notice
from watcher.text import safe

STATES: Final = ("waiting", "delivered", "dead", "cancelled")
SHOWN: Final = 12
"""Characters of a key in the table; as many identify a notice on the command line as are needed."""
SHORTEST: Final = 6
_MANY: Final = 1_000_000
BY_HAND: Final = "given up by hand"


@click.command()
@CONFIG
@click.option("--route", metavar="NAME", help="Only this route.")
@click.option("--state", type=click.Choice(STATES), help="Only this state.")
@click.option("--limit", type=click.IntRange(1), default=100, show_default=True, help="The newest so many.")
@click.option("--send-again", "again", metavar="KEY", help="Let a notice wait once more, from the first try on.")
@click.option("--give-up", "given_up", metavar="KEY", help="Try a waiting notice no more.")
@JSON
def notices(
    config: Path,
    route: str | None,
    state: str | None,
    limit: int,
    again: str | None,
    given_up: str | None,
    as_json: bool,
) -> None:
    """List notices with their state, tries and answer, newest first; or send one again, or give one up.

    KEY is a notice's key or its beginning. A notice that is sent again keeps its key, so that a receiver knows it.
    """
    if again is not None and given_up is not None:
        raise click.UsageError("--send-again and --give-up: name one of them")
    url = settings.read(config).ledger_url()
    key = again if again is not None else given_up
    if key is None:
        with Ledger.open(url, write=False, create=False) as ledger:
            found = ledger.notices(route=route, state=state, limit=limit)
    else:
        with Ledger.open(url, create=False) as ledger:
            notice = _named(ledger, route, key)
            changed = _waiting_again(notice) if again is not None else _given_up(notice)
            ledger.record_answer(
                changed.route,
                changed.key,
                state=changed.state,
                answer=changed.answer,
                next_at=changed.next_at,
                tries=changed.tries,
            )
            found = [changed]
    if as_json:
        print_json([notice_json(notice) for notice in found])
    else:
        _print(found)


def _named(ledger: Ledger, route: str | None, key: str) -> Notice:
    if len(key) < SHORTEST:
        raise UsageError(f"key {key!r}: give at least its first {SHORTEST} characters")
    found = [notice for notice in ledger.notices(route=route, limit=_MANY) if notice.key.startswith(key.lower())]
    if not found:
        raise UsageError(f"key {key!r}: no notice begins with it; `watcher notices CONFIG` lists them")
    if len(found) > 1:
        raise UsageError(f"key {key!r}: {len(found)} notices begin with it; give more of it, or --route")
    return found[0]


def _waiting_again(notice: Notice) -> Notice:
    if notice.state == "cancelled":
        raise UsageError(f"notice {notice.key[:SHOWN]}: is cancelled, because its breach was withdrawn; it is not sent")
    return replace(notice, state="waiting", tries=0, next_at=clock().replace(microsecond=0))


def _given_up(notice: Notice) -> Notice:
    if notice.state != "waiting":
        raise UsageError(f"notice {notice.key[:SHOWN]}: is {notice.state}; only a waiting one can be given up")
    before = f"; before that: {notice.answer}" if notice.answer else ""
    return replace(notice, state="dead", answer=BY_HAND + before)


def _print(found: list[Notice]) -> None:
    out = show.console()
    if not found:
        out.print(Text("no notices"))
        return
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for name in ("key", "created", "route", "promise", "kind", "state", "tries", "next", "answer"):
        table.add_column(Text(name), justify="right" if name == "tries" else "left", no_wrap=name == "key")
    for notice in found:
        table.add_row(
            *map(
                Text,
                (
                    notice.key[:SHOWN],
                    f"{notice.created:%Y-%m-%d %H:%M}",
                    safe(notice.route, 24),
                    safe(notice.promise, 24) or "–",
                    notice.kind,
                    notice.state,
                    str(notice.tries),
                    f"{notice.next_at:%Y-%m-%d %H:%M}" if notice.state == "waiting" else "–",
                    safe(notice.answer or "", 80) or "–",
                ),
            )
        )
    out.print(table)
