"""`watcher explain`: how a verdict came about."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path

import click
from rich import box
from rich.table import Table
from rich.text import Text

from watcher import answer, assembly, settings, wording
from watcher.book import build, table
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, print_json
from watcher.errors import UsageError
from watcher.explanation import Explanation, Window
from watcher.explanation import explain as lay_open
from watcher.judging import Book
from watcher.ledger.store import Ledger
from watcher.records import Standing
from watcher.replay import Replay
from watcher.text import safe


@click.command()
@CONFIG
@click.argument("promise")
@click.option("--slice", "part", metavar="C=V", help="A slice value instead of the whole, for instance depot=Birch.")
@click.option("--version", metavar="V", help="A version other than the newest.")
@click.option("--look", "number", type=click.IntRange(1), metavar="N", help="As of an earlier look.")
@click.option("--all", "every", is_flag=True, help="Every window, not only those that matter most.")
@JSON
def explain(
    config: Path,
    promise: str,
    part: str | None,
    version: str | None,
    number: int | None,
    every: bool,
    as_json: bool,
) -> None:
    """Lay a verdict open, from the ledger alone: counts, windows, shares, thresholds, enough to redo it by hand."""
    with assembly.open_ledger(settings.read(config), write=False) as ledger:
        book = _book(ledger, promise, version, number)
        key = _key(book, part)
        standings = ledger.standings(promise=promise, version=book.terms.version) if number is None else []
    found = lay_open(book, key)
    if as_json:
        print_json(_json(found, book, key))
    else:
        _print(found, book, key, every=every)
        for standing in standings:
            if (standing.column, standing.value) == key:
                _print_diagnostics(standing, book)


def _book(ledger: Ledger, promise: str, version: str | None, number: int | None) -> Book:
    stored = [
        t for t in ledger.terms(open_only=False) if t.terms.promise == promise and version in (None, t.terms.version)
    ]
    if not stored:
        names = sorted({term.terms.promise for term in ledger.terms(open_only=False)})
        raise UsageError(
            f"promise {promise!r}: the ledger knows no such promise or version; it knows {', '.join(names) or 'none'}"
        )
    term = stored[-1]
    if number is not None:
        return Replay.until(ledger, number).book(term.terms.promise, term.terms.version)
    counts, until = table(ledger.counts(term.id)), term.sealed_until
    return build(term.terms, term.digest, ledger.cells(term.id), counts, until, until, ledger.memories(term.id))


def _key(book: Book, part: str | None) -> tuple[str, str]:
    if part is None:
        return ("", "")
    column, sign, value = part.partition("=")
    known = [cell.key for cell in book.cells if cell.column]
    if not sign or (column, value) not in known:
        names = ", ".join(f"{c}={v}" for c, v in known[:20])
        raise UsageError(f"--slice {part!r}: not a slice of this promise; known: {names or 'none'}")
    return (column, value)


def _json(found: Explanation, book: Book, key: tuple[str, str]) -> dict[str, object]:
    terms = book.terms
    return {
        "promise": terms.promise,
        "version": terms.version,
        "slice": {"column": key[0], "value": key[1]} if key[0] else None,
        "tolerance": terms.tolerance,
        "until": answer.rfc3339(found.until),
        "restarts": found.restarts,
        "risk": found.risk,
        "threshold": found.threshold,
        "total": found.total,
        "remainder": found.remainder,
        "rate_above": found.rate_above,
        "rate_below": found.rate_below,
        "windows": [asdict(window) | {"since": answer.rfc3339(window.since)} for window in found.windows],
    }


def _print(found: Explanation, book: Book, key: tuple[str, str], *, every: bool) -> None:
    terms, out = book.terms, show.console()
    name = f"{safe(key[0])} = {safe(key[1])}" if key[0] else "whole"
    out.print(
        Text(
            f"{safe(terms.promise)} version {safe(terms.version)}, {name}, up to {found.until:%d %B %Y %H:%M} UTC",
            style="bold",
        )
    )
    out.print(
        Text(
            f"Every one of {found.buckets} bucket starts since the release begins a window that ends now. total = log( sum of "
            f"share x exp(evidence above {wording.percent(found.rate_above)}) + {found.remainder:.4g} for windows not started ) = "
            f"{found.total:.6f} nats, rounded down; the promise is broken at log(1/{found.risk:.4g}) = {found.threshold:.6f}."
        )
    )
    chosen = found.windows if every else sorted(_notable(found.windows), key=lambda window: window.index)
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for head in (
        "window",
        "since",
        "labels",
        "errors",
        "rate",
        "share",
        "above",
        "share x exp",
        "below",
        "supports at",
    ):
        table.add_column(head, justify="left" if head == "since" else "right")
    for window in chosen:
        rate = wording.percent(window.errors / window.labels) if window.labels else "–"
        table.add_row(
            *map(
                Text,
                (
                    str(window.index),
                    f"{window.since:%Y-%m-%d %H:%M}",
                    f"{window.labels:,}",
                    wording.amount(window.errors),
                    rate,
                    f"{window.share:.3g}",
                    f"{window.above:.4f}",
                    f"{window.part:.4g}" if window.counted else "too young",
                    f"{window.below:.4f}",
                    f"{window.needed:.4f}",
                ),
            )
        )
    out.print(table)
    if len(chosen) < len(found.windows):
        rest = sum(window.part for window in found.windows) - sum(window.part for window in chosen)
        left = len(found.windows) - len(chosen)
        out.print(Text(f"The other {left} windows add {rest:.4g} in all (--all lists them).", style="dim"))
    out.print(
        Text(
            "evidence(n, k; m) = log sum_g w_g exp(lambda_g k - n log(1 - m + m exp(lambda_g))): window 0 with the mixture over "
            "0.001..3, the others with that of restarts; docs/method.md gives both.",
            style="dim",
        )
    )


def _print_diagnostics(standing: Standing, book: Book) -> None:
    """What is shown beside the verdict and had no influence on it."""
    for line in wording.diagnostic_lines(standing, book.terms):
        show.console().print(Text(line, style="dim"))


def _notable(windows: tuple[Window, ...]) -> set[Window]:
    """The first, the last, those that add most to the total and those nearest to supporting the promise."""
    heaviest = sorted(windows, key=lambda window: -window.part)[:8]
    nearest = sorted(windows, key=lambda window: window.needed - window.below)[:4]
    return {*windows[:1], *windows[-1:], *heaviest, *nearest}
