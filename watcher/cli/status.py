"""`watcher status`: where things stand, from the ledger alone."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import click
from rich.text import Text

from watcher import answer, assembly, settings
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, any_breach, clock, print_json
from watcher.cli.main import EXIT_BREACH, EXIT_FAILURE, EXIT_OK
from watcher.ledger.store import Ledger
from watcher.records import Failure, Standing, StoredEvent
from watcher.text import safe

Breaches = Mapping[tuple[str, str, int], StoredEvent]
"""(promise, version, breach number) -> its first acknowledgement."""


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
        known = acknowledged(ledger)
    every = [standing for cells in standings.values() for standing in cells]
    if as_json:
        shown = {source: found for source, found in rejected.items() if found}
        found = answer.look_json(show.moment(at) if at else clock(), head, every, shown, failed)
        for told in found["promises"]:
            if told["breach"] is not None:
                who = known.get((told["promise"], told["version"], told["breach"]["number"]))
                told["breach"]["acknowledged"] = None if who is None else acknowledgement_json(who)
        print_json(found)
    else:
        out = show.console()
        for term in stored:
            out.print(
                show.promise(
                    standings[term.id], term.terms, units.get((term.terms.promise, term.terms.version), "sample")
                )
            )
            for said in _acknowledgements(standings[term.id], known):
                out.print(said)
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


def acknowledged(ledger: Ledger) -> Breaches:
    """The first acknowledgement of every breach that has one."""
    found: dict[tuple[str, str, int], StoredEvent] = {}
    for stored in reversed(ledger.events(kinds=("acknowledged",), limit=100_000)):
        event = stored.event
        found.setdefault((event.promise, event.version, int(event.facts.get("number", 0))), stored)
    return found


def acknowledgement_json(stored: StoredEvent) -> dict[str, Any]:
    """Who, when and why."""
    facts = stored.event.facts
    return {"who": facts.get("who"), "at": answer.rfc3339(stored.at), "why": facts.get("note")}


def _acknowledgements(standings: Sequence[Standing], known: Breaches) -> list[Text]:
    breaches = dict.fromkeys((s.promise, s.version, s.breach.number) for s in standings if s.breach is not None)
    lines = []
    for key in breaches:
        stored = known.get(key)
        if stored is None:
            lines.append(
                Text(f"  Breach {key[2]} has not been acknowledged: `watcher acknowledge CONFIG {safe(key[0])}`.")
            )
        else:
            facts = stored.event.facts
            who, why = safe(str(facts.get("who", ""))), safe(str(facts.get("note", "")), 200)
            lines.append(
                Text(f"  Breach {key[2]} was acknowledged by {who} on {stored.at:%-d %B %Y}: “{why}”. It stands.")
            )
    return lines
