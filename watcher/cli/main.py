"""The command line: one group, one place where errors become messages and exit codes."""

from __future__ import annotations

import sys
from typing import Any

import click

from watcher.errors import WatcherError

EXIT_OK, EXIT_FAILURE, EXIT_USAGE, EXIT_BREACH = 0, 1, 2, 3


class _Group(click.Group):
    """Loads a command only when it is asked for, and turns this project's errors into exit codes."""

    commands_at = {  # noqa: RUF012 - read only
        "look": "watcher.cli.look:look",
        "draft": "watcher.cli.draft:draft",
        "check": "watcher.cli.check:check",
        "run": "watcher.cli.run:run",
        "status": "watcher.cli.status:status",
        "explain": "watcher.cli.explain:explain",
        "bounds": "watcher.cli.bounds:bounds",
        "certify": "watcher.cli.certify:certify",
        "plan": "watcher.cli.plan:plan",
        "risk": "watcher.cli.risk:risk",
        "rejects": "watcher.cli.rejects:rejects",
        "audit": "watcher.cli.audit:audit",
        "acknowledge": "watcher.cli.acknowledge:acknowledge",
        "notices": "watcher.cli.notices:notices",
        "rehearse": "watcher.cli.rehearse:rehearse",
        "report": "watcher.cli.report:report",
        "export": "watcher.cli.export:export",
        "backup": "watcher.cli.backup:backup",
        "upgrade": "watcher.cli.upgrade:upgrade",
        "token": "watcher.cli.token:token",
        "demo": "watcher.cli.demo:demo",
    }

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002 - the signature is click's
        return list(self.commands_at)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        place = self.commands_at.get(cmd_name)
        if place is None:
            return super().get_command(ctx, cmd_name)
        module, _, name = place.partition(":")
        found = getattr(__import__(module, fromlist=[name]), name)
        assert isinstance(found, click.Command)
        return found

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        try:
            return super().resolve_command(ctx, args)
        except click.UsageError as error:
            import difflib

            close = difflib.get_close_matches(args[0], self.commands_at, 1, 0.5) if args else []
            hint = f" Did you mean {close[0]!r}?" if close else ""
            raise click.UsageError(error.message + hint, ctx) from None

    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except WatcherError as error:
            click.echo(f"watcher: {error}", err=True)
            ctx.exit(error.exit_code)
        except BrokenPipeError:
            sys.stderr.close()
            ctx.exit(EXIT_FAILURE)


@click.group(cls=_Group, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 110})
@click.version_option(package_name="promise-watcher", prog_name="watcher")
def main() -> None:
    """Watch the promise of a released classifier: its error rate is at most eps, wrong with chance at most delta.

    Exit codes: 0 no breach, 1 failure, 2 bad usage or configuration, 3 a promise is broken.
    """
