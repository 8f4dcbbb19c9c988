"""How `watcher plan` says what it found: table, sentences, chart and JSON."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Final

from rich import box
from rich.table import Table
from rich.text import Text

from watcher import wording
from watcher.bounds.lead_time import weeks_until
from watcher.bounds.planning import NOTICED, WEEK, Delay, Plan, RisePlan, bucket_fits
from watcher.cli import show
from watcher.errors import UsageError
from watcher.records import Cell
from watcher.report import render
from watcher.report.plan_chart import DelayBar, Kind, plan_chart

KINDS: Final[tuple[Kind, ...]] = ("release", "jump")


@dataclass(frozen=True, slots=True)
class Asked:
    """One promise or slice to be planned."""

    name: str
    cell: Cell | None
    tolerance: float
    risk: float
    labels_per_week: float
    bucket: int
    service_life: int
    label_lag: int
    window_at_least: int


@dataclass(frozen=True, slots=True)
class Planned:
    """The plan of one of them."""

    asked: Asked
    plan: Plan

    def weeks(self, row: RisePlan, kind: Kind) -> tuple[float | None, float | None]:
        """Median and 90%, label lag included; the exact figure goes to the end of its bucket."""
        delay: Delay = row.from_release if kind == "release" else row.after_jump
        bucket = self.asked.bucket if kind == "release" else None
        found = [
            weeks_until(labels, self.asked.labels_per_week, self.asked.label_lag, bucket=bucket)
            for labels in (delay.median_labels, delay.p90_labels)
        ]
        return found[0], found[1]


@dataclass(frozen=True, slots=True)
class Wanted:
    """How many labels a week notice a rise soon enough."""

    rise: float
    within: int
    chance: float
    labels_per_week: int | None


def draw(planned: Planned, path: Path) -> None:
    """Write the chart to a file that ends in .svg or .png. Raises UsageError when it cannot be written."""
    bars = [
        DelayBar(row.rise, row.rate, kind, *planned.weeks(row, kind)) for row in planned.plan.rises for kind in KINDS
    ]
    spec = plan_chart(bars, planned.asked.service_life / WEEK)
    drawn = render.svg(spec).encode() if path.suffix.lower() == ".svg" else render.png(spec)
    try:
        path.write_bytes(drawn)
    except OSError as error:
        raise UsageError(f"--chart {path}: cannot be written ({error.strerror})") from None


def plans_json(planned: Sequence[Planned], wanted: Wanted | None, notes: Sequence[str]) -> dict[str, Any]:
    """The plans, the whole or the one asked for first, for programs: weeks include the label lag."""
    answer: dict[str, Any] = {"plans": [_one_json(each) for each in planned], "notes": list(notes)}
    answer["wanted"] = None if wanted is None else asdict(wanted)
    return answer


def _one_json(planned: Planned) -> dict[str, Any]:
    asked, plan = planned.asked, planned.plan
    cell = asked.cell
    found = asdict(plan) | {"label_lag": asked.label_lag, "window_at_least": asked.window_at_least}
    found["slice"] = {"column": cell.column, "value": cell.value} if cell is not None and cell.column else None
    for row, told in zip(plan.rises, found["rises"], strict=True):
        for key, kind in zip(("from_release", "after_jump"), KINDS, strict=True):
            median, p90 = planned.weeks(row, kind)
            told[key] |= {"median_weeks": median, "p90_weeks": p90}
            if told[key]["noticed"] != told[key]["noticed"]:
                told[key]["noticed"] = None
    found["bucket_fits"] = _fits(planned)
    return found


def _fits(planned: Planned) -> bool:
    asked = planned.asked
    return bucket_fits(asked.tolerance, asked.risk, asked.labels_per_week, asked.bucket, asked.service_life)


def print_plans(planned: Sequence[Planned], wanted: Wanted | None, notes: Sequence[str]) -> None:
    """Sentences and tables for a person."""
    out, first = show.console(), planned[0]
    asked, plan = first.asked, first.plan
    out.print(
        Text(
            f"A promise of at most {wording.rate(asked.tolerance)} at risk {wording.one_in(asked.risk)}, "
            f"{asked.labels_per_week:,.0f} labels a week in buckets of {wording.duration(asked.bucket)}, watched for "
            f"{wording.duration(asked.service_life)}: {plan.life_labels:,} labels in all.",
            style="bold",
        )
    )
    for note in notes:
        out.print(Text(note))
    out.print(_table(first))
    for sentence in _sentences(first):
        out.print(Text(sentence))
    if wanted is not None:
        out.print(Text(_told(wanted, first.asked)))
    if len(planned) > 1:
        out.print()
        out.print(_slices(planned[1:]))


def _table(planned: Planned) -> Table:
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for name in (
        "rise",
        "error rate",
        "no test\nbefore",
        "too high from release\nlabels (90%)",
        "\nweeks (90%)",
        "a jump later\nlabels (90%)",
        "\nweeks (90%)",
    ):
        table.add_column(Text(name), justify="right")
    for row in planned.plan.rises:
        cells = [f"{row.rise:g}x", wording.percent(row.rate), f"{row.limit:,.0f}"]
        for kind, delay in zip(KINDS, (row.from_release, row.after_jump), strict=True):
            cells.append(_pair(delay.median_labels, delay.p90_labels, "{:,}"))
            cells.append(_pair(*planned.weeks(row, kind), "{:.1f}"))
        table.add_row(*map(Text, cells))
    table.caption = Text(
        "Median and, in brackets, what nine in ten cases stay below; > life: longer than a service life. Weeks include the label lag. "
        "no test before: Wald's limit for the mean, in labels. Too high from release: exact and, as it counts the window since "
        "the release alone, cautious. A jump later: the rule as shipped, simulated.",
        style="dim",
        justify="left",
    )
    return table


def _pair(median: float | None, p90: float | None, form: str) -> str:
    if median is None:
        return "> life"
    return f"{form.format(median)} ({'> life' if p90 is None else form.format(p90)})"


def _sentences(planned: Planned) -> Iterator[str]:
    asked, plan = planned.asked, planned.plan
    false = plan.false_breach
    yield (
        f"A false breach within a service life spent exactly AT {wording.rate(asked.tolerance)}: chance {false.chance:.2g} (standard "
        f"error {false.error:.1g}); promised is at most {asked.risk:.3g}."
    )
    if plan.smallest_rise is None:
        yield "No rise can be noticed within the service life: these labels are too few for this promise."
    else:
        rate = min(1.0, plan.smallest_rise * asked.tolerance)
        yield (
            f"The smallest rise, there since the release, that is noticed within the service life with chance "
            f"{wording.rate(NOTICED)}: {plan.smallest_rise:.2f}x, an error rate of {wording.percent(rate, up=True)}."
        )
    yield _bucket(planned)


def _bucket(planned: Planned) -> str:
    asked, widest = planned.asked, planned.plan.widest_bucket
    told = f"A bucket of {wording.duration(asked.bucket)} holds some {asked.labels_per_week * asked.bucket / WEEK:,.0f} labels"
    if _fits(planned):
        return f"{told}: few enough not to delay anything."
    if widest is None:
        return f"{told}; even an hour holds so many that a doubled rate waits for the end of its bucket: take the narrowest you can."
    return (
        f"{told}, so that a doubled rate waits for the end of its bucket: {wording.duration(widest)} or less is better."
    )


def _told(wanted: Wanted, asked: Asked) -> str:
    aim = f"To notice a jump to {wanted.rise:g}x within {wording.duration(wanted.within)} with chance {wording.rate(wanted.chance)}"
    if wanted.labels_per_week is not None:
        return f"{aim}, {wanted.labels_per_week:,} labels a week are needed (label lag included in the time)."
    if wanted.within - asked.label_lag < asked.bucket:
        return f"{aim}: no number of labels does it, as label lag and bucket alone take {wording.duration(asked.label_lag + asked.bucket)}."
    return f"{aim}: more than ten million labels a week would be needed."


def _slices(planned: Sequence[Planned]) -> Table:
    rises = (1.5, 2.0, 3.0)
    table = Table(
        box=box.SIMPLE_HEAD,
        pad_edge=False,
        show_edge=False,
        title=Text("Slices, each at its part of the risk: weeks until a jump is noticed, median (90%)"),
        title_justify="left",
    )
    for n, name in enumerate(("slice", "risk", "labels a week", *(f"{rise:g}x" for rise in rises), "smallest rise")):
        table.add_column(Text(name), justify="left" if n == 0 else "right")
    for each in planned:
        rows = {row.rise: row for row in each.plan.rises}
        weeks = [_pair(*each.weeks(rows[rise], "jump"), "{:.1f}") if rise in rows else "–" for rise in rises]
        least = each.plan.smallest_rise
        table.add_row(
            *map(
                Text, (each.asked.name, wording.one_in(each.asked.risk), f"{each.asked.labels_per_week:,.0f}", *weeks)
            ),
            Text("none" if least is None else f"{least:.2f}x"),
        )
    return table
