"""`watcher check`: is everything in place for a first look?"""

from __future__ import annotations

from pathlib import Path

import click
from rich.text import Text

from watcher import settings, wording
from watcher.checking import check as examine
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, clock, print_json
from watcher.cli.main import EXIT_OK, EXIT_USAGE

SIGNS = {"problem": ("problem", "bold"), "warning": ("warning", ""), "fact": ("       ", "dim")}


@click.command()
@CONFIG
@JSON
@click.pass_context
def check(ctx: click.Context, config: Path, as_json: bool) -> None:
    """Validate a configuration, reach its sources, ledger and secrets, and count usable rows; writes nothing."""
    findings = examine(settings.read(config), int(clock().timestamp()))
    problems = [finding for finding in findings if finding.level == "problem"]
    if as_json:
        print_json([{"level": f.level, "about": f.about, "text": f.text} for f in findings])
    else:
        out = show.console()
        for finding in findings:
            word, style = SIGNS[finding.level]
            out.print(Text(f"{word}  {finding.about}: {finding.text}", style=style))
        out.print(Text(f"{wording.counted(len(problems), 'problem')}." if problems else "Ready for the first look."))
    ctx.exit(EXIT_USAGE if problems else EXIT_OK)
