"""`watcher look`: one look at the sources of a configuration, or a draft verdict on a single file."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Sequence
from datetime import datetime
from pathlib import Path

import click
from rich.text import Text

from watcher import answer, assembly, settings
from watcher.cli import show
from watcher.cli.common import JSON, Moment, any_breach, clock, print_json
from watcher.cli.main import EXIT_BREACH, EXIT_FAILURE, EXIT_OK
from watcher.drafting import Guess, configuration, guess
from watcher.errors import SchemaMismatch, UsageError
from watcher.ledger.store import Ledger
from watcher.look import ClockWentBack, Outcome, attempt


@click.command()
@click.argument("target", type=click.Path(path_type=Path), metavar="CONFIG|FILE")
@click.option("--at", type=Moment(), metavar="T", help="Look as of this time; later rows and labels are not seen.")
@click.option("--dry-run", is_flag=True, help="Judge without writing to the ledger.")
@click.option(
    "--tolerance", type=float, metavar="E", help="With a data FILE: the promised error rate; nothing is kept."
)
@click.option("--risk", type=float, metavar="R", help="With a data FILE: the accepted chance of a false alarm (0.01).")
@JSON
@click.pass_context
def look(
    ctx: click.Context,
    target: Path,
    at: datetime | None,
    dry_run: bool,
    tolerance: float | None,
    risk: float | None,
    as_json: bool,
) -> None:
    """Pull the labelled samples, judge, record, and say where every promise stands.

    CONFIG is a TOML file. A CSV FILE with --tolerance is judged in memory with guessed columns, and
    nothing is kept.
    """
    if target.suffix.lower() == ".toml":
        if tolerance is not None or risk is not None:
            raise click.UsageError("--tolerance and --risk go with a data FILE; a configuration has its own")
        outcomes, ledger, units = _configured(target, at, dry_run=dry_run)
    else:
        outcomes, ledger, units = _drafted(target, at, tolerance, risk, quiet=as_json)
    with ledger:
        if as_json:
            print_json(_json(outcomes))
        else:
            _print(outcomes, units, kept=target.suffix.lower() == ".toml")
    standings = [standing for outcome in outcomes for standing in outcome.standings]
    failed = any(outcome.failed for outcome in outcomes)
    ctx.exit(EXIT_BREACH if any_breach(standings) else EXIT_FAILURE if failed else EXIT_OK)


def _configured(
    path: Path, at: datetime | None, *, dry_run: bool
) -> tuple[list[Outcome], Ledger, dict[tuple[str, str], str]]:
    config, now = settings.read(path), at or clock()
    if at is not None and at > clock() and not dry_run:
        raise UsageError(f"--at {at.isoformat()} lies after this machine's clock: only with --dry-run")
    ledger = _dry_ledger(config) if dry_run else assembly.open_ledger(config, write=True)
    try:
        with contextlib.nullcontext() if dry_run else ledger.writer():
            outcomes = [
                _one(config, table, ledger, now, at_given=at is not None, keep=not dry_run) for table in config.source
            ]
    except ClockWentBack as error:
        if at is not None:
            raise UsageError(f"--at: {error}") from None
        raise
    return outcomes, ledger, assembly.units(config)


def _dry_ledger(config: settings.Settings) -> Ledger:
    """The ledger to read beside whoever writes it; before the first look an empty one in memory."""
    try:
        return assembly.open_ledger(config, write=False)
    except UsageError as error:
        if "ledger" not in str(error) or isinstance(error, SchemaMismatch):
            raise
        return Ledger.memory()


def _one(
    config: settings.Settings, table: settings.SourceTable, ledger: Ledger, now: datetime, *, at_given: bool, keep: bool
) -> Outcome:
    return attempt(
        ledger,
        assembly.source_of(config, table),
        assembly.watched(config, table.name),
        int(now.timestamp()),
        time.monotonic,
        at_given=at_given,
        keep=keep,
        routes=assembly.routings(config),
        slice_limit=table.slice_limit,
    )


def _drafted(
    path: Path, at: datetime | None, tolerance: float | None, risk: float | None, *, quiet: bool
) -> tuple[list[Outcome], Ledger, dict[tuple[str, str], str]]:
    if tolerance is None:
        raise click.UsageError(
            f"{path} is a data file: say what was promised, for instance --tolerance 0.05; or give a .toml"
        )
    found, text = draft_file(path, tolerance, risk)
    if found.missing:
        raise UsageError(
            f"{path}: " + "; ".join(found.notes) + ". `watcher draft FILE` writes a configuration to complete"
        )
    config = settings.parse(text, path.resolve().parent, {}, "draft")
    if not quiet:
        for note in found.notes:
            show.console(stderr=True).print(Text("guessed: " + note, style="dim"))
    ledger, table = Ledger.memory(), config.source[0]
    now = int((at or clock()).timestamp())
    source, promises = assembly.source_of(config, table), assembly.watched(config, table.name)
    return (
        [attempt(ledger, source, promises, now, time.monotonic, at_given=at is not None)],
        ledger,
        assembly.units(config),
    )


def draft_file(path: Path, tolerance: float | None = None, risk: float | None = None) -> tuple[Guess, str]:
    """The guess about a data file and the configuration that follows from it."""
    from watcher.sources import open_source
    from watcher.sources.base import SourceSpec

    kind = "parquet" if path.suffix.lower() in (".parquet", ".pq") else "csv"
    source = open_source(SourceSpec(name="labels", kind=kind, path=path.name, base=path.resolve().parent))  # type: ignore[arg-type]
    found = guess(source.survey())
    return found, configuration(found, kind=kind, place={"path": path.name}, tolerance=tolerance, risk=risk)


def _json(outcomes: Sequence[Outcome]) -> dict[str, object]:
    last = outcomes[-1]
    return answer.look_json(
        last.at,
        last.head,
        [standing for outcome in outcomes for standing in outcome.standings],
        {outcome.source: outcome.rejected for outcome in outcomes if outcome.rejected},
        [failure for outcome in outcomes for failure in outcome.failed],
    )


def _print(outcomes: Sequence[Outcome], units: dict[tuple[str, str], str], *, kept: bool) -> None:
    out = show.console()
    for outcome in outcomes:
        names = list(dict.fromkeys((s.promise, s.version) for s in outcome.standings))
        for name in names:
            cells = [s for s in outcome.standings if (s.promise, s.version) == name]
            out.print(show.promise(cells, outcome.terms[name], units.get(name, "sample")))
            out.print()
        for part in (
            show.events(outcome.events),
            show.rejected(outcome.source, outcome.rejected),
            *show.failures(outcome.failed),
            *(Text("Note: " + remark) for remark in outcome.remarks),
        ):
            if part is not None:
                out.print(part)
    out.print(show.foot(outcomes[-1].head, written=any(outcome.written for outcome in outcomes), kept=kept))
