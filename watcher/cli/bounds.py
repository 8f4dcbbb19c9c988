"""`watcher bounds`: what N labels with K errors say."""

from __future__ import annotations

import json
import math

import click
from rich import box
from rich.table import Table
from rich.text import Text

import watcher
from watcher import wording
from watcher.cli import show


@click.command()
@click.option("--labels", type=click.IntRange(0), required=True, metavar="N", help="Labels counted.")
@click.option("--errors", type=click.IntRange(0), required=True, metavar="K", help="Errors among them.")
@click.option(
    "--risk", type=float, default=0.05, show_default=True, metavar="R", help="Chance that the interval is wrong."
)
@click.option("--tolerance", type=float, metavar="E", help="Also: the evidence for and against this error rate.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def bounds(labels: int, errors: int, risk: float, tolerance: float | None, as_json: bool) -> None:
    """The interval that holds at all times at once, and the exact one for a single look planned beforehand."""
    try:
        always, once = watcher.confidence_bounds(labels, errors, risk), watcher.exact_bounds(labels, errors, risk)
        pair = (
            None
            if tolerance is None
            else tuple(float(watcher.evidence(labels, errors, tolerance, side=side)) for side in ("above", "below"))
        )
    except ValueError as error:
        raise click.UsageError(str(error)) from None
    needed = math.log(1 / risk)
    if as_json:
        answer = {
            "labels": labels,
            "errors": errors,
            "risk": risk,
            "estimate": errors / labels if labels else None,
            "always": {"lower": float(always.lower), "upper": float(always.upper)},
            "exact": {"lower": float(once.lower), "upper": float(once.upper)},
            "threshold": needed,
            "tolerance": tolerance,
            "evidence": None if pair is None else {"above": pair[0], "below": pair[1]},
        }
        click.echo(json.dumps(answer, indent=2))
        return
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for name in ("interval", "lower", "upper", "holds"):
        table.add_column(name, justify="left" if name in ("interval", "holds") else "right")
    table.add_row(
        "at all times at once",
        wording.percent(float(always.lower), down=True),
        wording.percent(float(always.upper), up=True),
        "however often somebody looks, also when the rate drifts",
    )
    table.add_row(
        "exact, one look",
        wording.percent(float(once.lower), down=True),
        wording.percent(float(once.upper), up=True),
        "once, at a number of labels fixed beforehand (Clopper-Pearson)",
    )
    out = show.console()
    chance = wording.one_in(risk)
    out.print(Text(f"{labels:,} labels, {errors:,} errors: each interval is wrong with chance at most {chance}."))
    out.print(table)
    if pair is not None and tolerance is not None:
        out.print(
            Text(
                f"Evidence that the rate lies above {wording.percent(tolerance)}: {pair[0]:.2f} nats; below it: {pair[1]:.2f} "
                f"nats. {needed:.2f} nats decide at risk {wording.one_in(risk)}."
            )
        )
