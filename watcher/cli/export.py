"""`watcher export`: what the ledger holds, as CSV files."""

from __future__ import annotations

from pathlib import Path

import click
from rich.text import Text

from watcher import assembly, settings
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, print_json
from watcher.cli.exporting import write


@click.command()
@CONFIG
@click.option("--out", type=click.Path(path_type=Path, file_okay=False), required=True, help="The folder to write to.")
@JSON
def export(config: Path, out: Path, as_json: bool) -> None:
    """Write promises, counts, verdict history, events and notices of the ledger as CSV files, beside a running daemon.

    Text that a spreadsheet would take for a formula begins with an apostrophe. Rates are fractions, evidence is in nats,
    times are RFC 3339 in UTC.
    """
    with assembly.open_ledger(settings.read(config), write=False) as ledger:
        head, files = write(ledger, out)
    if as_json:
        print_json({"look": head.look, "head": head.digest, "files": {path.name: rows for path, rows in files.items()}})
        return
    console = show.console()
    for path, rows in files.items():
        console.print(Text(f"{path}: {rows:,} rows"), soft_wrap=True)
    console.print(Text(f"as of look {head.look}, head {head.digest[:16]}…", style="dim"))
