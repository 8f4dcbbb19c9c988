"""`watcher status`: where things stand, from the ledger alone."""

from __future__ import annotations

from pathlib import Path

import click
from rich.text import Text

from watcher import answer, assembly, settings
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, any_breach, clock, print_json
from watcher.cli.main import EXIT_BREACH, EXIT_FAILURE, EXIT_OK
from watcher.records import Failure


@click.command()
@CONFIG
@JSON
@click.pass_context
def status(ctx: click.Context, config: Path, as_json: bool) -> None:
    """Say where every promise stood at the newest look; asks no source and writes nothing."""
    read = settings.read(config)
    units = assembly.units(read)
    with assembly.open_ledger(read, write=False) as ledger:
        stored = ledger.terms()
        standings = {
            term.id: ledger.standings(promise=term.terms.promise, version=term.terms.version) for term in stored
        }
        failed: list[Failure] = []
        rejected: dict[str, dict[str, dict[str, int]]] = {}
        for table in read.source:
            state = ledger.source_state(table.name)
            if state.failing_since is not None:
                failed.append(Failure(table.name, state.reason or "", state.detail or "", state.failing_since))
            names = [term.terms.promise for term in stored if term.terms.source == table.name]
            rejected[table.name] = {name: counts for name in names if (counts := ledger.rejects(name)[0])}
        head, at = ledger.head(), ledger.newest_at()
    every = [standing for cells in standings.values() for standing in cells]
    if as_json:
        shown = {source: found for source, found in rejected.items() if found}
        print_json(answer.look_json(show.moment(at) if at else clock(), head, every, shown, failed))
    else:
        out = show.console()
        for term in stored:
            out.print(
                show.promise(
                    standings[term.id], term.terms, units.get((term.terms.promise, term.terms.version), "sample")
                )
            )
            out.print()
        for source, by_promise in rejected.items():
            if (line := show.rejected(source, by_promise)) is not None:
                out.print(line)
        for line in show.failures(failed):
            out.print(line)
        if head.look:
            out.print(
                Text(f"newest look {head.look} at {show.moment(at).isoformat()}, head {head.digest[:16]}…", style="dim")
            )
        else:
            out.print(Text("no look was made yet: `watcher look CONFIG`"))
    ctx.exit(EXIT_BREACH if any_breach(every) else EXIT_FAILURE if failed else EXIT_OK)
