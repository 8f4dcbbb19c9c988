"""`watcher backup`: a consistent copy of the ledger, also while the daemon writes it."""

from __future__ import annotations

from pathlib import Path

import click
from rich.text import Text

from watcher import settings
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, print_json
from watcher.errors import UsageError
from watcher.ledger.engine import file_of, parse_url
from watcher.ledger.store import Ledger
from watcher.ledger.upgrade import backup as copy


@click.command()
@CONFIG
@click.argument("file", type=click.Path(path_type=Path))
@JSON
def backup(config: Path, file: Path, as_json: bool) -> None:
    """Copy the ledger of CONFIG into FILE, which must not exist; a running daemon need not stop.

    The head that is printed is that of the copy: kept elsewhere, it is what `watcher audit --head` compares with. A
    PostgreSQL ledger is copied by its own tools (pg_dump).
    """
    source = file_of(parse_url(settings.read(config).ledger_url()))
    if source is None:
        raise UsageError("a PostgreSQL ledger is copied by its own tools: run pg_dump, which gives a consistent copy")
    if not file.parent.is_dir():
        raise UsageError(f"FILE {str(file)!r}: its folder does not exist; make the folder first")
    copy(source, file)
    # The copy is opened once: what cannot be read is no backup, and only its own head is sure to be in it.
    with Ledger.open(f"sqlite:///{file.resolve()}", write=False, create=False) as ledger:
        head, size = ledger.head(), ledger.size_bytes()
    if as_json:
        print_json({"file": str(file), "bytes": size, "look": head.look, "head": head.digest})
        return
    out = show.console()
    out.print(Text(f"Copied into {file}: {size:,} bytes, up to look {head.look}."))
    out.print(Text(f"head {head}", style="dim"), soft_wrap=True)
