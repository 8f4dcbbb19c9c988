"""`watcher acknowledge`: who knows of a breach, and why it may stand."""

from __future__ import annotations

from pathlib import Path
from typing import Final

import click
from rich.text import Text

from watcher import settings
from watcher.answer import rfc3339
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, clock, print_json
from watcher.errors import LedgerBusy, UsageError
from watcher.ledger.store import Ledger
from watcher.look import acknowledge as record
from watcher.records import Head
from watcher.text import safe

_TRIES: Final = 5
"""A look that another process records between reading and writing makes the entry stale: it is simply made again."""


@click.command()
@CONFIG
@click.argument("promise")
@click.option("--breach", "number", type=click.IntRange(1), metavar="N", required=True, help="The breach's number.")
@click.option("--who", metavar="NAME", required=True, help="Who answers for it.")
@click.option("--why", metavar="TEXT", required=True, help="Why it may stand, and what is done about it.")
@click.option("--version", metavar="V", help="A version other than the newest.")
@JSON
def acknowledge(
    config: Path, promise: str, number: int, who: str, why: str, version: str | None, as_json: bool
) -> None:
    """Record in the ledger who knows of a breach of PROMISE, and why it may stand.

    This stops the daily reminder and nothing else: the breach stands, and the promise stays watched. It can be done
    beside a running daemon.
    """
    with Ledger.open(settings.read(config).ledger_url(), create=False) as ledger:
        chosen = version or _newest(ledger, promise)
        head = _recorded(ledger, promise, chosen, number, who, why)
        at = ledger.newest_at()
    if as_json:
        print_json(
            {
                "promise": promise,
                "version": chosen,
                "breach": number,
                "who": who.strip(),
                "why": why.strip(),
                "at": rfc3339(show.moment(at)),
                "look": head.look,
                "head": head.digest,
            }
        )
        return
    told = (
        f"{safe(promise)} version {safe(chosen)}: breach {number} was acknowledged by {safe(who.strip())}. It stands; "
        "the daily reminder stops."
    )
    out = show.console()
    out.print(Text(told))
    out.print(show.foot(head, written=True))


def _newest(ledger: Ledger, promise: str) -> str:
    known = [term.terms for term in ledger.terms(open_only=False)]
    versions = [terms.version for terms in known if terms.promise == promise]
    if not versions:
        names = ", ".join(repr(name) for name in sorted({terms.promise for terms in known})) or "none"
        raise UsageError(f"promise {promise!r}: the ledger knows no such promise; it knows {names}")
    return versions[-1]


def _recorded(ledger: Ledger, promise: str, version: str, number: int, who: str, why: str) -> Head:
    for _ in range(_TRIES - 1):
        try:
            return record(ledger, promise, version, number, who, why, int(clock().timestamp()))
        except LedgerBusy:
            continue
    return record(ledger, promise, version, number, who, why, int(clock().timestamp()))
