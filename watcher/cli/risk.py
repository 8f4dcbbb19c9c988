"""`watcher risk`: where the risk of a promise goes, and the slices that stand out now."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any

import click
from rich import box
from rich.table import Table
from rich.text import Text

from watcher import assembly, settings, wording
from watcher.book import first_cells
from watcher.bounds.budgets import BUDGETS, Name, Portion, Share, portions, shares
from watcher.bounds.multiplicity import e_bh
from watcher.bounds.weekly import weeks_of_life
from watcher.bounds.windows import restarts
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, print_json
from watcher.errors import UsageError
from watcher.judging import threshold
from watcher.records import Cell, Standing, Terms
from watcher.text import safe

SAYS = {
    "breach": "breach and lower limits",
    "support": "support and upper limits",
    "weekly": "weekly intervals",
}


@dataclass(frozen=True, slots=True)
class Found:
    """One promise version with its cells, and the slices' newest standings."""

    terms: Terms
    cells: tuple[Cell, ...]
    slices: tuple[Standing, ...]
    looked: bool


@click.command()
@CONFIG
@click.argument("promise")
@click.option("--version", metavar="V", help="A version other than the newest.")
@click.option(
    "--fdr", type=float, metavar="Q", help="False discovery rate of the list of slices.  [default: of [report]]"
)
@JSON
def risk(config: Path, promise: str, version: str | None, fdr: float | None, as_json: bool) -> None:
    """List every part of the three budgets of risk, and the slices that stand out on their current totals (e-BH)."""
    read = settings.read(config)
    found = _found(read, promise, version)
    rate = read.report.fdr if fdr is None else fdr
    try:
        chosen = e_bh([standing.total for standing in found.slices], rate)
    except ValueError as error:
        raise click.UsageError(str(error)) from None
    listed = sorted((s for s, on in zip(found.slices, chosen, strict=True) if on), key=lambda s: (-s.total, s.value))
    terms = found.terms
    own = Fraction(Decimal(repr(terms.risk)))
    every = portions(
        own,
        [(_name(cell), cell.part, cell.discovered) for cell in found.cells],
        has_slices=bool(terms.slices),
        declared=any(each.values for each in terms.slices),
    )
    split = {name: shares(name, _restarts(terms), weeks_of_life(terms.service_life)) for name in BUDGETS}
    if as_json:
        print_json(_json(found, own, every, split, listed, rate))
    else:
        _print(found, own, every, split)
        _print_list(found, listed, rate)


def _found(read: settings.Settings, promise: str, version: str | None) -> Found:
    """From the ledger; from the configuration while there was no look."""
    try:
        with assembly.open_ledger(read, write=False) as ledger:
            stored = [t for t in ledger.terms(open_only=False) if t.terms.promise == promise]
            stored = [t for t in stored if version in (None, t.terms.version)]
            if stored:
                term = stored[-1]
                standings = ledger.standings(promise=promise, version=term.terms.version)
                slices = tuple(standing for standing in standings if standing.column)
                return Found(term.terms, tuple(ledger.cells(term.id)), slices, looked=True)
    except UsageError as error:
        if "no ledger" not in str(error):
            raise
    tables = [p for p in read.promise if p.name == promise and version in (None, p.version)]
    if not tables:
        names = ", ".join(sorted({safe(p.name) for p in read.promise}))
        raise UsageError(
            f"promise {promise!r}: neither ledger nor configuration knows this promise or version; known: {names}"
        )
    terms = tables[-1].terms(read.source_of(tables[-1].source))
    return Found(terms, first_cells(terms), (), looked=False)


def _restarts(terms: Terms) -> int:
    return restarts(terms.service_life, terms.bucket)


def _name(cell: Cell) -> str:
    return f"{safe(cell.column)} = {safe(cell.value) or '(empty)'}" if cell.column else "whole"


def _json(
    found: Found,
    own: Fraction,
    every: Sequence[Portion],
    split: dict[Name, tuple[Share, ...]],
    listed: Sequence[Standing],
    fdr: float,
) -> dict[str, Any]:
    cells = [*found.cells, *[None] * (len(every) - len(found.cells))]
    budgets = []
    for name, parts in split.items():
        holders: list[dict[str, Any]] = []
        for portion, cell in zip(every, cells, strict=True):
            one: dict[str, Any] = {"name": portion.name, "kept": portion.kept, "risk": str(portion.risk)}
            if cell is not None:
                one["slice"] = {"column": cell.column, "value": cell.value} if cell.column else None
                one["threshold"] = threshold(found.terms.risk, cell.part)[1]
                one["parts"] = [
                    {
                        "name": part.name,
                        "count": part.count,
                        "each": str(portion.risk * part.each),
                        "sum": str(portion.risk * part.sum),
                    }
                    for part in parts
                ]
            holders.append(one)
        total = sum((portion.risk for portion in every), Fraction(0))
        budgets.append({"budget": name, "covers": SAYS[name], "sum": str(total), "cells": holders})
    return {
        "promise": found.terms.promise,
        "version": found.terms.version,
        "risk": found.terms.risk,
        "risk_exact": str(own),
        "looked": found.looked,
        "budgets": budgets,
        "standing_out": {
            "fdr": fdr,
            "slices": len(found.slices),
            "listed": [
                {
                    "slice": {"column": s.column, "value": s.value},
                    "total": s.total,
                    "estimate": s.estimate,
                    "state": s.state,
                }
                for s in listed
            ],
        },
    }


def _print(found: Found, own: Fraction, every: Sequence[Portion], split: dict[Name, tuple[Share, ...]]) -> None:
    out, terms = show.console(), found.terms
    out.print(Text(f"{safe(terms.promise)} version {safe(terms.version)}", style="bold"))
    out.print(
        Text(
            f"Three budgets of {own} each: breach with lower limits, support with upper limits, weekly intervals. Whatever is "
            f"said of this version, the chance that any of it is ever wrong is at most {wording.one_in(min(3 * own, Fraction(1)))}."
        )
    )
    table = _table("who", "of each budget", "its risk", "threshold (nats)")
    for n, portion in enumerate(every):
        nats = "kept" if portion.kept else f"{threshold(terms.risk, found.cells[n].part)[1]:.2f}"
        table.add_row(*map(Text, (portion.name, _fraction(portion.risk / own), _fraction(portion.risk), nats)))
    table.add_row(
        *map(Text, ("sum", _fraction(sum((p.risk for p in every), Fraction(0)) / own), str(own), "")), style="bold"
    )
    out.print(table)
    out.print()
    table = _table("each splits its risk in budget", "into", "each", "together")
    for name, parts in split.items():
        for n, part in enumerate(parts):
            count = "…" if part.count is None else f"{part.count:,}"
            told = f"{SAYS[name]}: {part.name}" if n == 0 else f"  {part.name}"
            each = f"≤ {part.each}" if part.count is None else str(part.each)
            table.add_row(*map(Text, (told, count, each, str(part.sum))))
    out.print(table)


def _print_list(found: Found, listed: Sequence[Standing], fdr: float) -> None:
    out = show.console()
    out.print()
    if not found.looked:
        out.print(Text("No look was made yet: there are no totals that slices could stand out by."))
        return
    if not found.slices:
        return
    out.print(Text("Slices that stand out now", style="bold"))
    out.print(
        Text(
            f"From the current totals of {wording.counted(len(found.slices), 'slice')} by the e-BH rule: of the slices listed an "
            f"expected share of at most {wording.rate(fdr)} is listed wrongly, however they depend on one another. The list may "
            "shrink; the state of a slice does not come from it."
        )
    )
    if not listed:
        out.print(Text("None is on it."))
        return
    table = _table("slice", "total (nats)", "rate", "state")
    for s in listed:
        rate = "–" if s.estimate is None else wording.percent(s.estimate)
        table.add_row(*map(Text, (wording.name(s), wording.nats(s.total), rate, s.state)))
    out.print(table)


def _fraction(value: Fraction) -> str:
    return f"{value} = {float(value):.3g}" if value.denominator != 1 else str(value)


def _table(*names: str) -> Table:
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for n, name in enumerate(names):
        table.add_column(Text(name), justify="left" if n == 0 else "right")
    return table
