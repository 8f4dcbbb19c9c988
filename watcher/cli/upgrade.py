"""`watcher upgrade`: a ledger of an earlier schema number becomes one of the present number, after a copy."""

from __future__ import annotations

from pathlib import Path

import click
from rich.text import Text

from watcher import settings
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, print_json
from watcher.ledger.upgrade import upgrade as climb


@click.command()
@CONFIG
@click.option("--copied", is_flag=True, help="PostgreSQL: a copy was made with pg_dump.")
@JSON
def upgrade(config: Path, copied: bool, as_json: bool) -> None:
    """Bring the ledger of CONFIG to the schema number of this program; stop the daemon first.

    An SQLite ledger is copied beside itself before anything is changed; looks and digests never change.
    """
    done = climb(settings.read(config).ledger_url(), copied=copied)
    if as_json:
        print_json({"found": done.found, "now": done.now, "copy": None if done.copy is None else str(done.copy)})
        return
    if done.found == done.now:
        told = f"The ledger has schema number {done.now} already: there is nothing to do, and nothing was changed."
    else:
        kept = "" if done.copy is None else f" The ledger as it was is kept in {done.copy}."
        told = f"The ledger went from schema number {done.found} to {done.now}.{kept} Next: `watcher audit CONFIG`."
    show.console().print(Text(told))
