"""`watcher report`: the weekly report as files."""

from __future__ import annotations

from pathlib import Path

import click
from rich.text import Text

from watcher import assembly, settings
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, print_json
from watcher.daemon.reporting import drawn_once, reported
from watcher.errors import UsageError
from watcher.report.files import DEFAULT, FORMATS, write
from watcher.report.week import Week
from watcher.report.weekly import Report


@click.command()
@CONFIG
@click.option("--week", "name", metavar="YYYY-WNN", help="The ISO week, for instance 2026-W48.")
@click.option("--newest", is_flag=True, help="The newest week that had ended at the newest look (so without --week).")
@click.option("--out", type=click.Path(path_type=Path, file_okay=False), required=True, help="The folder to write to.")
@click.option("--format", "formats", type=click.Choice(FORMATS), multiple=True, help="Only this; may be repeated.")
@JSON
def report(config: Path, name: str | None, newest: bool, out: Path, formats: tuple[str, ...], as_json: bool) -> None:
    """Write the report of a week into a folder: WEEK.html, .csv and .json, and .pdf where weasyprint is installed.

    It is made from the ledger alone, as of its newest look: the same ledger gives the same bytes.
    """
    if newest and name is not None:
        raise click.UsageError("--week and --newest: name one of them")
    read, week = settings.read(config), None if name is None else Week.parse(name)
    nouns = {promise: noun for (promise, _), noun in assembly.units(read).items()}
    with assembly.open_ledger(read, write=False) as ledger:
        found = reported(ledger, week, nouns, read.report.fdr)
    files, note = _written(found, out, formats)
    if as_json:
        print_json(
            {
                "week": found.week.name,
                "look": found.head.look,
                "head": found.head.digest,
                "files": [str(path) for path in files],
                "left_out": note,
            }
        )
        return
    console = show.console()
    for path in files:
        console.print(Text(str(path)), soft_wrap=True)
    if note is not None:
        console.print(Text(f"Left out: {note}"))
    console.print(
        Text(f"week {found.week.name} as of look {found.head.look}, head {found.head.digest[:16]}…", style="dim")
    )


def _written(found: Report, out: Path, formats: tuple[str, ...]) -> tuple[list[Path], str | None]:
    """The files, and why a format that nobody insisted on was left out."""
    draw = drawn_once()
    if formats:
        return write(found, out, tuple(dict.fromkeys(formats)), draw), None
    try:
        return write(found, out, FORMATS, draw), None
    except UsageError as error:
        return write(found, out, DEFAULT, draw), str(error)
