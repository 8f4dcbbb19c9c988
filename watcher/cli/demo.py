"""`watcher demo`: the invented scenario, from nothing."""

from __future__ import annotations

import hashlib
import itertools
import time
from datetime import UTC, datetime
from pathlib import Path

import click
from rich.text import Text

from watcher import answer, assembly, settings
from watcher.cli import show
from watcher.cli.common import JSON, print_json
from watcher.demo.scenario import DAY, DAYS, RELEASED
from watcher.demo.writing import write
from watcher.ledger.store import Ledger
from watcher.look import Outcome, attempt


@click.command()
@click.argument("folder", type=click.Path(path_type=Path), required=False)
@click.option("--once", is_flag=True, help="No daemon: replay at full speed and print the verdict.")
@click.option("--seed", type=click.IntRange(0), default=7, show_default=True, help="Of the invented data.")
@JSON
def demo(folder: Path | None, once: bool, seed: int, as_json: bool) -> None:
    """An invented parcel network whose damage-photo classifier breaks its promise in one depot.

    Writes data and a commented configuration into FOLDER (default: a new watcher-demo) and plays about a simulated day
    a second through the real daemon, with page and metrics, until Ctrl-C. Exits 0 although a promise breaks.
    """
    place = folder or _new_folder()
    if once:
        _once(place, seed, as_json=as_json)
        return
    if as_json:
        raise click.UsageError("--json goes with --once")
    from watcher.cli.demo_live import play

    play(place, seed)


def _new_folder() -> Path:
    names = itertools.chain(["watcher-demo"], (f"watcher-demo-{n}" for n in itertools.count(2)))
    return next(path for path in map(Path, names) if not path.exists())


def _once(place: Path, seed: int, *, as_json: bool) -> None:
    out = show.console(stderr=as_json)
    path = write(place, seed)
    config = settings.read(path)
    table = config.source[0]
    source, promises = assembly.source_of(config, table), assembly.watched(config, table.name)
    out.print(
        Text(f"The scenario and its configuration lie in {place}/; looking at it day by day, as a scheduler would.")
    )
    lag = promises[0].terms.label_lag
    happened, last = [], None
    # A drawn ledger id would enter the digests: one seed, one chain, one answer.
    with Ledger.open(config.ledger_url(), new_id=_ledger_id(seed)) as ledger, ledger.writer():
        days = range(1, DAYS + lag // DAY + 1)
        with show.progress("days replayed", len(days)) as step:
            for day in days:
                last = attempt(ledger, source, promises, RELEASED + day * DAY, time.monotonic, at_given=True)
                happened += [
                    (day, event)
                    for event in last.events
                    if event.kind in ("breach", "warning", "supported", "support-lost")
                ]
                step()
    assert last is not None
    if as_json:
        print_json(_json(last))
        return
    for day, event in happened:
        when = datetime.fromtimestamp(RELEASED + day * DAY, UTC)
        out.print(Text(f"  {when:%d %b %Y}  {show.event(event)}"))
    out.print()
    name = (last.standings[0].promise, last.standings[0].version)
    out.print(show.promise(list(last.standings), last.terms[name], assembly.units(config)[name]))
    out.print()
    out.print(
        Text(
            f"Next: watcher status {path}, watcher explain {path} damage-photos --slice depot=Cedar, watcher audit {path}"
        )
    )


def _ledger_id(seed: int) -> str:
    return hashlib.sha256(f"watcher demo {seed}".encode()).hexdigest()[:32]


def _json(last: Outcome) -> dict[str, object]:
    return answer.look_json(last.at, last.head, last.standings, {last.source: last.rejected}, last.failed)
