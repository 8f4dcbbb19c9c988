"""Folders with rows, a configuration and a ledger, and how the tests call commands on them."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from click.testing import CliRunner, Result
from look.rows import configuration, write, year

from watcher.cli import main

HOSTILE = "=cmd|' /C calc'!A0\x1b[31m</script>\r\nBcc: x@example.invalid"
"""A slice value as an attacker would write it: a formula, a control sequence, markup, a mail header."""
ROUTES = """
[[route]]
name = "pager"
kind = "log"
[[route]]
name = "other"
kind = "log"
"""


def run(*arguments: str | Path) -> Result:
    """One command."""
    return CliRunner().invoke(main, [str(argument) for argument in arguments])


def answer(*arguments: str | Path, code: int = 0) -> Any:
    """One command's JSON."""
    result = run(*arguments, "--json")

    assert code == result.exit_code, result.output + result.stderr
    return json.loads(result.stdout)


def folder(path: Path, *, jump: int | None = None, hostile: bool = False, extra: str = ROUTES) -> Path:
    """A configuration and 30 days of rows; after day `jump` errors triple at site b; `hostile`: that site's name is hostile."""
    rows = year(12, 30, 120, late=False, rate=0.03 if jump is not None else 0.01, jump=jump)
    if hostile:
        rows = [(*row[:4], HOSTILE if row[4] == "b" else row[4], *row[5:]) for row in rows]
    write(path / "rows.csv", rows)
    config = path / "watcher.toml"
    config.write_text(configuration(extra=extra), encoding="utf-8")
    return config


def broken(path: Path) -> Path:
    """The same, looked at once on day 55: the promise is broken."""
    config = folder(path, jump=5)

    assert run("look", config, "--at", "2026-03-01").exit_code == 3
    return config
