"""`watcher rejects`: rows that could not be used, with their reason."""

from __future__ import annotations

from pathlib import Path

import click
from rich import box
from rich.table import Table
from rich.text import Text

from watcher import assembly, settings
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, print_json
from watcher.text import safe


@click.command()
@CONFIG
@click.argument("promise", required=False)
@JSON
def rejects(config: Path, promise: str | None, as_json: bool) -> None:
    """Show counts by reason and samples, at most 20 a reason, of the rows that the newest look could not use."""
    with assembly.open_ledger(settings.read(config), write=False) as ledger:
        names = [promise] if promise else sorted({term.terms.promise for term in ledger.terms()})
        found = {name: ledger.rejects(name) for name in names}
    if as_json:
        print_json(
            {
                name: {
                    "counts": dict(counts),
                    "samples": [
                        {"reason": r.reason, "file": r.file, "line": r.line, "id": r.id, "values": dict(r.values)}
                        for r in rows
                    ],
                }
                for name, (counts, rows) in found.items()
            }
        )
        return
    out = show.console()
    for name, (counts, rows) in found.items():
        told = ", ".join(f"{n:,} {reason}" for reason, n in sorted(counts.items()) if n)
        out.print(Text(f"{safe(name)}: {told or 'every row could be used'}", style="bold"))
        if not rows:
            continue
        table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
        for column in ("reason", "where", "id", "values"):
            table.add_column(Text(column))
        for row in rows:
            where = safe(row.file, 40) + (f":{row.line}" if row.line is not None else "")
            values = ", ".join(
                f"{safe(k, 20)}={safe(v, 30) if v is not None else '(empty)'}" for k, v in row.values.items()
            )
            table.add_row(*map(Text, (row.reason, where, safe(row.id or "", 30), values)))
        out.print(table)
