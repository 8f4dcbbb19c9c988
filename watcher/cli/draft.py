"""`watcher draft`: a commented configuration to start from."""

from __future__ import annotations

from pathlib import Path

import click

from watcher.drafting import configuration, guess
from watcher.errors import UsageError
from watcher.sources import open_source
from watcher.sources.base import SourceSpec


@click.command()
@click.argument("place", metavar="FILE-OR-URL")
@click.option("--table", metavar="T", help="With a URL: the table, or schema.table.")
def draft(place: str, table: str | None) -> None:
    """Look at the columns of a CSV file or of a database table and write a configuration to standard output.

    Lines marked with an arrow need a decision.
    """
    if "://" in place:
        if table is None:
            raise click.UsageError("a URL needs --table, the table that holds the samples")
        source = open_source(SourceSpec(name="labels", kind="database", url=place, table=table))
        click.echo(
            configuration(guess(source.survey()), kind="database", place={**_url(place), "table": table}), nl=False
        )
        return
    from watcher.cli.look import draft_file

    path = Path(place)
    if not path.exists():
        raise UsageError(f"{place}: no such file; give a CSV file, or the URL of a database with --table")
    _, text = draft_file(path)
    click.echo(text, nl=False)


def _url(place: str) -> dict[str, str]:
    """A url with a password does not go into the file: a variable takes its place."""
    from urllib.parse import urlsplit

    return {"url_env": "WATCHER_SOURCE_URL"} if urlsplit(place).password else {"url": place}
