"""`watcher plan`: what a promise costs: labels and weeks until a rise is noticed, before anybody promises it."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from datetime import datetime
from pathlib import Path
from typing import Any, Final

import click
from rich.text import Text

from watcher import assembly, settings, wording
from watcher.book import discovered, first_cells
from watcher.bounds.planning import WEEK, weekly_labels
from watcher.bounds.planning import plan as make_plan
from watcher.checking import Volume, plain_labels, volumes
from watcher.cli import show
from watcher.cli.common import JSON, clock, print_json
from watcher.cli.plan_text import Asked, Planned, Wanted, draw, plans_json, print_plans
from watcher.errors import UsageError
from watcher.judging import threshold
from watcher.look import question
from watcher.records import Cell, CellCounts, Terms
from watcher.text import safe

PLANNED: Final = 12
"""Slices that get a simulation of their own; the others only what takes no time."""
FEW: Final = 200
"""Streams behind a slice's figures."""


class Span(click.ParamType[int]):
    """A duration as in the configuration: 10d, 6h, 52w."""

    name = "duration"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> int:
        """Seconds."""
        if isinstance(value, int):
            return value
        try:
            return settings.seconds(value)
        except ValueError as error:
            self.fail(str(error), param, ctx)


@click.command()
@click.argument("config", type=click.Path(path_type=Path), required=False)
@click.argument("promise", required=False)
@click.option("--tolerance", type=float, metavar="E", help="What shall be promised.")
@click.option("--risk", type=float, metavar="R", help="The chance that a breach is ever raised wrongly.")
@click.option(
    "--labels-per-week",
    "volume",
    type=float,
    metavar="N",
    help="With CONFIG PROMISE in place of the volume seen so far.",
)
@click.option("--bucket", type=Span(), metavar="D", help="Span counted together.  [default: 1d]")
@click.option(
    "--service-life", "life", type=Span(), metavar="D", help="How long the promise is watched.  [default: 52w]"
)
@click.option(
    "--label-lag", "lag", type=Span(), metavar="D", help="After which a bucket counts; weeks include it.  [default: 0d]"
)
@click.option("--window-at-least", "young", type=Span(), metavar="D", help="Windows younger than that do not count.")
@click.option("--healthy", type=float, metavar="Q", help="Error rate before the jump.  [default: two thirds of E]")
@click.option("--slice", "part", metavar="C=V", help="With CONFIG PROMISE: one slice in full.")
@click.option("--within", type=Span(), metavar="D", help="How many labels a week notice --rise within that time?")
@click.option(
    "--rise", type=float, default=2.0, show_default=True, metavar="X", help="For --within: times the tolerance."
)
@click.option("--chance", type=float, default=0.5, show_default=True, metavar="P", help="For --within: how surely.")
@click.option(
    "--streams", type=click.IntRange(100), default=1000, show_default=True, metavar="N", help="Simulated streams."
)
@click.option(
    "--chart",
    type=click.Path(path_type=Path, dir_okay=False),
    metavar="FILE",
    help="Also draw it: FILE.svg or FILE.png.",
)
@JSON
def plan(
    config: Path | None,
    promise: str | None,
    volume: float | None,
    part: str | None,
    within: int | None,
    rise: float,
    chance: float,
    healthy: float | None,
    streams: int,
    chart: Path | None,
    as_json: bool,
    **free: Any,
) -> None:
    """Labels and weeks until a rise of the error rate is noticed, the chance of a false breach, and advice.

    From --tolerance, --risk and --labels-per-week, or from CONFIG PROMISE with the volume seen so far.
    """
    if chart is not None and chart.suffix.lower() not in (".svg", ".png"):
        raise click.UsageError(f"--chart {chart}: the name must end in .svg or .png")
    notes: list[str]
    if config is None:
        asked, notes = [_free(volume, part, **free)], []
    else:
        asked, notes = _configured(config, promise, volume, part, clock(), **free)
    try:
        with _progress() as tell:
            planned = [
                _plan(one, healthy, streams if n == 0 else min(streams, FEW), n, len(asked), tell)
                for n, one in enumerate(asked)
            ]
            wanted = None if within is None else _wanted(asked[0], rise, within, chance, healthy)
    except ValueError as error:
        raise click.UsageError(str(error)) from None
    if chart is not None:
        draw(planned[0], chart)
    if as_json:
        print_json(plans_json(planned, wanted, notes))
        return
    print_plans(planned, wanted, notes)
    if chart is not None:
        show.console().print(Text(f"chart: {chart}", style="dim"))


def _free(
    volume: float | None,
    part: str | None,
    tolerance: float | None,
    risk: float | None,
    bucket: int | None,
    life: int | None,
    lag: int | None,
    young: int | None,
) -> Asked:
    missing = [
        name
        for name, value in (("--tolerance", tolerance), ("--risk", risk), ("--labels-per-week", volume))
        if value is None
    ]
    if missing:
        raise click.UsageError(f"{', '.join(missing)}: needed, or give CONFIG PROMISE")
    if part is not None:
        raise click.UsageError("--slice goes with CONFIG PROMISE; else give the slice's own risk and labels a week")
    assert tolerance is not None
    assert risk is not None
    assert volume is not None
    width = 86400 if bucket is None else bucket
    return Asked(
        "whole", None, tolerance, risk, volume, width, 52 * WEEK if life is None else life, lag or 0, young or 0
    )


def _configured(
    path: Path, promise: str | None, volume: float | None, part: str | None, now: datetime, **free: Any
) -> tuple[list[Asked], list[str]]:
    """The promise and its slices with the volume seen so far, and what must be said of it."""
    if promise is None:
        raise click.UsageError("CONFIG needs the name of a promise beside it")
    given = [f"--{name}" for name, value in free.items() if value is not None]
    if given:
        raise click.UsageError(
            f"{', '.join(given)}: follows from the promise; leave it out, or leave CONFIG PROMISE out"
        )
    config = settings.read(path)
    terms, cells, rows, at = _counts(config, promise, int(now.timestamp()))
    if terms.measure == "loss":
        raise UsageError(f"promise {promise!r}: a loss has no plan: its labels are no trials that succeed or fail")
    seen = volumes(terms, cells, rows, at)
    seen = _scaled(seen, volume)
    if not seen[0].per_week:
        raise UsageError(f"promise {promise!r}: no labels were seen yet; give --labels-per-week")
    notes = [
        f"Volume: {seen[0].labels:,} labels in {seen[0].weeks:.1f} weeks." if volume is None else "Volume: as given."
    ]
    notes += _notes(terms)
    lag = 0 if terms.count == "arriving" else terms.label_lag
    asked = [
        Asked(
            name=f"{safe(each.cell.column)} = {safe(each.cell.value) or '(empty)'}" if each.cell.column else "whole",
            cell=each.cell,
            tolerance=terms.tolerance,
            risk=threshold(terms.risk, each.cell.part)[0],
            labels_per_week=each.per_week,
            bucket=terms.bucket,
            service_life=terms.service_life,
            label_lag=lag,
            window_at_least=terms.window_at_least or 0,
        )
        for each in seen
        if each.per_week
    ]
    if part is not None:
        asked = [one for one in asked if one.cell is not None and f"{one.cell.column}={one.cell.value}" == part]
        if not asked:
            known = ", ".join(f"{safe(c.column)}={safe(c.value)}" for c in cells[1:21])
            raise UsageError(f"--slice {part!r}: not a slice of this promise with labels; known: {known or 'none'}")
    silent = [each for each in seen if not each.per_week]
    if silent:
        notes.append(
            f"{wording.counted(len(silent), 'slice')} without a label yet {'is' if len(silent) == 1 else 'are'} left out."
        )
    if len(asked) > PLANNED + 1:
        busiest = sorted(asked[1:], key=lambda one: (-one.labels_per_week, one.name))[:PLANNED]
        notes.append(
            f"Of {len(asked) - 1:,} slices the {PLANNED} with most labels are planned; --slice C=V plans another."
        )
        asked = [asked[0], *busiest]
    return asked, notes


def _scaled(seen: Sequence[Volume], volume: float | None) -> list[Volume]:
    """The volume that was given in place of the one seen; slices keep their share of it."""
    if volume is None or not seen[0].per_week:
        return [seen[0] if volume is None else replace(seen[0], per_week=volume), *seen[1:]]
    return [replace(each, per_week=each.per_week * volume / seen[0].per_week) for each in seen]


def _notes(terms: Terms) -> Iterator[str]:
    if not plain_labels(terms):
        yield (
            "The figures are for labels drawn uniformly and independently, without noise; this promise's are not: take them for "
            "the least that it costs."
        )
    if terms.count == "arriving":
        yield "Labels count as they arrive: the weeks do not include their way, which is at most the label lag."


def _counts(config: settings.Settings, promise: str, now: int) -> tuple[Terms, tuple[Cell, ...], list[CellCounts], int]:
    """What is known of a promise: from the ledger if it was looked at, else from its source."""
    try:
        with assembly.open_ledger(config, write=False) as ledger:
            stored = [term for term in ledger.terms(open_only=False) if term.terms.promise == promise]
            if stored:
                term = stored[-1]
                return term.terms, tuple(ledger.cells(term.id)), ledger.counts(term.id), ledger.newest_at()
    except UsageError as error:
        if "no ledger" not in str(error):
            raise
    tables = [table for table in config.promise if table.name == promise]
    if not tables:
        names = ", ".join(sorted({safe(table.name) for table in config.promise}))
        raise UsageError(f"promise {promise!r}: neither ledger nor configuration knows this promise; known: {names}")
    source = config.source_of(tables[-1].source)
    terms = tables[-1].terms(source)
    asked = question(terms, terms.released, now, slice_limit=source.slice_limit)
    rows = list(assembly.source_of(config, source).tally([asked])[0].cells)
    cells = first_cells(terms)
    return terms, (*cells, *discovered(cells, rows)), rows, now


def _plan(
    one: Asked, healthy: float | None, streams: int, n: int, count: int, tell: Callable[[float], None]
) -> Planned:
    found = make_plan(
        one.tolerance,
        one.risk,
        one.labels_per_week,
        bucket=one.bucket,
        service_life=one.service_life,
        window_at_least=one.window_at_least,
        healthy=healthy,
        streams=streams,
        progress=lambda done: tell((n + done) / count),
    )
    return Planned(one, found)


def _wanted(one: Asked, rise: float, within: int, chance: float, healthy: float | None) -> Wanted:
    left = within - one.label_lag
    if left <= 0:
        return Wanted(rise, within, chance, None)
    found = weekly_labels(
        one.tolerance,
        one.risk,
        rise,
        left / WEEK,
        quantile=chance,
        bucket=one.bucket,
        service_life=one.service_life,
        healthy=healthy,
    )
    return Wanted(rise, within, chance, found)


@contextmanager
def _progress() -> Iterator[Callable[[float], None]]:
    """A bar on a terminal, told the fraction done."""
    with show.progress("planning", 100) as step:
        done = 0

        def tell(fraction: float) -> None:
            nonlocal done
            while done < int(100 * fraction):
                step()
                done += 1

        yield tell
