"""`watcher audit`: does the ledger verify, and do its counts still give its verdicts?"""

from __future__ import annotations

from pathlib import Path

import click
from rich.text import Text

from watcher import assembly, settings
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, print_json
from watcher.cli.main import EXIT_FAILURE, EXIT_OK
from watcher.ledger.audit import audit as verify
from watcher.records import Head
from watcher.replay import Replay
from watcher.text import safe


@click.command()
@CONFIG
@click.option(
    "--head", metavar="NUMBER:DIGEST", help="A look number and head digest kept elsewhere, from a notice or report."
)
@JSON
@click.pass_context
def audit(ctx: click.Context, config: Path, head: str | None, as_json: bool) -> None:
    """Verify the chain of looks and re-derive every verdict from the counts.

    Without --head a tail that was cut off, or a chain that was rewritten as a whole, cannot be seen.
    """
    wanted = None
    if head is not None:
        number, _, digest = head.partition(":")
        if not number.isdigit() or len(digest) != 64:
            raise click.UsageError(f"--head {head!r}: write NUMBER:DIGEST, a look number and 64 hex digits")
        wanted = Head(int(number), digest)
    with assembly.open_ledger(settings.read(config), write=False) as ledger, show.progress("looks re-derived") as step:
        result = verify(ledger, head=wanted, replay=Replay(step))
    if as_json:
        print_json(
            {
                "looks": result.looks,
                "rederived": result.rederived,
                "other_method": result.other_method,
                "not_rederived": result.not_rederived,
                "head": str(result.head),
                "findings": [{"table": f.table, "key": f.key, "what": f.what} for f in result.findings],
            }
        )
    else:
        out = show.console()
        for finding in result.findings:
            out.print(Text(f"{finding.table} {safe(finding.key)}: {safe(finding.what, 300)}"))
        verb = "does not verify" if result.findings else "verifies"
        out.print(Text(f"The ledger {verb}: {result.looks} looks, {result.rederived} re-derived, head {result.head}"))
        if wanted is None:
            out.print(
                Text("Not seen without --head NUMBER:DIGEST: a cut tail, a chain rewritten as a whole.", style="dim")
            )
    ctx.exit(EXIT_FAILURE if result.findings else EXIT_OK)
