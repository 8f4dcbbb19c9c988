"""`watcher token`: who may come in over the web, and what they may do there."""

from __future__ import annotations

from pathlib import Path

import click
from rich import box
from rich.table import Table
from rich.text import Text

from watcher import assembly, settings
from watcher.answer import rfc3339
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, clock, print_json
from watcher.ledger.tokens import ROLES, Role
from watcher.text import safe


@click.group()
@CONFIG
@click.pass_context
def token(ctx: click.Context, config: Path) -> None:
    """Make, list and revoke the tokens of page and API: make NAME --role read|act, list, revoke NAME.

    The ledger keeps a digest of each, so a token can be seen only when it is made. It works beside a running daemon.
    """
    ctx.obj = config


@token.command()
@click.argument("name")
@click.option("--role", type=click.Choice(ROLES), required=True, help="read: see; act: also acknowledge, see raw rows.")
@JSON
@click.pass_obj
def make(config: Path, name: str, role: Role, as_json: bool) -> None:
    """Draw a token for NAME and print it, once."""
    now = clock().replace(microsecond=0)
    with assembly.open_ledger(settings.read(config), write=True) as ledger:
        drawn = ledger.tokens.make(name, role, now)
    if as_json:
        print_json({"name": name, "role": role, "created": rfc3339(now), "token": drawn})
        return
    # The token alone on standard output, so that it can be piped into a keeper of secrets without being seen.
    click.echo(drawn)
    told = f"A token of the role {role} for {safe(name)}: keep it now, it is not shown again."
    show.console(stderr=True).print(Text(told))


@token.command("list")
@JSON
@click.pass_obj
def listed(config: Path, as_json: bool) -> None:
    """List names, roles, and when each token was made and revoked."""
    with assembly.open_ledger(settings.read(config), write=False) as ledger:
        found = ledger.tokens.listed()
    if as_json:
        print_json(
            [
                {"name": t.name, "role": t.role, "created": rfc3339(t.created), "revoked": rfc3339(t.revoked)}
                for t in found
            ]
        )
        return
    if not found:
        show.console().print(Text("no tokens"))
        return
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for column in ("name", "role", "made", "revoked"):
        table.add_column(Text(column))
    for t in found:
        revoked = "–" if t.revoked is None else f"{t.revoked:%Y-%m-%d %H:%M}"
        table.add_row(*map(Text, (safe(t.name), t.role, f"{t.created:%Y-%m-%d %H:%M}", revoked)))
    show.console().print(table)


@token.command()
@click.argument("name")
@JSON
@click.pass_obj
def revoke(config: Path, name: str, as_json: bool) -> None:
    """Let the token of NAME open nothing from now on; its name is not used again."""
    now = clock().replace(microsecond=0)
    with assembly.open_ledger(settings.read(config), write=True) as ledger:
        ledger.tokens.revoke(name, now)
    if as_json:
        print_json({"name": name, "revoked": rfc3339(now)})
        return
    show.console().print(Text(f"The token of {safe(name)} opens nothing any more."))
