"""What a person reads in the terminal: sentences first, then numbers in columns."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime

from rich import box
from rich.console import Console, Group, RenderableType
from rich.padding import Padding
from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn
from rich.table import Table
from rich.text import Text

from watcher import wording
from watcher.records import Event, Failure, Head, Standing, Terms
from watcher.text import safe

STATE_STYLE = {"breached": "bold reverse", "supported": "bold", "undecided": ""}


def console(*, stderr: bool = False) -> Console:
    """A console that never reads markup out of outside text; wide enough when the output is piped."""
    made = Console(stderr=stderr, markup=False, highlight=False, emoji=False, soft_wrap=False)
    if not made.is_terminal:
        made = Console(stderr=stderr, markup=False, highlight=False, emoji=False, width=120)
    return made


def promise(standings: Sequence[Standing], terms: Terms, unit: str) -> RenderableType:
    """One promise: its sentence, its flags in words, the numbers of whole and slices."""
    whole = next(standing for standing in standings if standing.column == "")
    head = Text()
    head.append(safe(terms.promise), style="bold")
    head.append(f"  version {safe(terms.version)}  ")
    head.append(f" {whole.state} ", style=STATE_STYLE[whole.state])
    parts: list[RenderableType] = [head, Padding(Text(wording.sentence(whole, terms, unit)), (0, 0, 0, 2))]
    notable = [s for s in standings if s.column and (s.state == "breached" or "warning" in s.flags)]
    parts += [Padding(Text(wording.sentence(s, terms, unit)), (0, 0, 0, 2)) for s in notable]
    flags = [Text("• " + line) for line in wording.flag_sentences(whole, terms)]
    parts += [Padding(flag, (0, 0, 0, 2)) for flag in flags]
    shown = [Text(line, style="dim") for line in wording.diagnostic_lines(whole, terms)]
    parts += [Padding(line, (0, 0, 0, 2)) for line in shown]
    parts.append(Padding(numbers(standings), (1, 0, 0, 2)))
    steps = [Text("→ " + step) for step in _steps(standings, terms)]
    parts += [Padding(step, (0, 0, 0, 2)) for step in steps]
    return Group(*parts)


def _steps(standings: Sequence[Standing], terms: Terms) -> list[str]:
    steps: dict[str, None] = {}
    for standing in standings:
        if standing.column == "" or standing.state == "breached":
            for step in wording.next_steps(standing, terms):
                steps.setdefault(step)
    return list(steps)


def numbers(standings: Sequence[Standing]) -> Table:
    """The figures, one row a cell; the caption says what they mean."""
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for name, right in (
        ("", False),
        ("state", False),
        ("labels", True),
        ("errors", True),
        ("rate", True),
        ("since release", True),
        ("last 28 days", True),
        ("evidence", True),
        ("not yet counted", True),
    ):
        table.add_column(Text(name), justify="right" if right else "left", no_wrap=True)
    for standing in standings:
        table.add_row(*(Text(cell) for cell in _row(standing)), style="bold" if standing.column == "" else "")
    table.caption = Text(
        "rate: errors/labels. Ranges: limits that hold at all times at once, each at its part of the risk. "
        "evidence: nats against the promise / the threshold at which it is broken.",
        style="dim",
        justify="left",
    )
    table.caption_justify = "left"
    return table


def _row(standing: Standing) -> tuple[str, ...]:
    name = (
        "whole" if standing.column == "" else f"{safe(standing.column, 20)} = {safe(standing.value, 24) or '(empty)'}"
    )
    recent = standing.recent
    return (
        name,
        standing.state,
        f"{standing.labels:,}",
        wording.amount(standing.errors),
        "–" if standing.estimate is None else wording.percent(standing.estimate),
        wording.span(standing.life.lower, standing.life.upper),
        "–" if recent is None else wording.span(recent.lower, recent.upper),
        f"{standing.total:.2f} / {standing.threshold:.2f}",
        f"{standing.provisional_labels:,}",
    )


def rejected(source: str, counts: Mapping[str, Mapping[str, int]]) -> RenderableType | None:
    """What could not be used, by reason; None when everything could."""
    lines = [
        f"{safe(name)}: " + ", ".join(f"{n:,} {reason}" for reason, n in sorted(reasons.items()))
        for name, reasons in sorted(counts.items())
        if reasons
    ]
    if not lines:
        return None
    return Text(
        f"Rows of {safe(source)} that could not be used — " + "; ".join(lines) + ". `watcher rejects` shows some."
    )


def failures(failed: Iterable[Failure]) -> list[RenderableType]:
    """Sources that gave no answer."""
    return [
        Text(
            f"Source {safe(f.source)} gave no answer: {f.reason}: {safe(f.detail, 300)}. The counts stay as they were."
        )
        for f in failed
    ]


def events(happened: Sequence[Event]) -> RenderableType | None:
    """What happened in this look, in the words of wording.py."""
    if not happened:
        return None
    return Group(
        Text("In this look", style="bold"), *(Text("  " + wording.event_sentence(event)) for event in happened)
    )


def foot(head: Head, *, written: bool, kept: bool = True) -> Text:
    """Look number and chain head: what `audit --head` compares with."""
    if not kept:
        return Text("Nothing is kept: this was judged in memory only.", style="dim")
    told = "recorded as" if written else "nothing new; the ledger stays at"
    return Text(f"{told} look {head.look}, head {head.digest[:16]}…  (whole: --json)", style="dim")


def moment(epoch: int) -> datetime:
    """An aware datetime from epoch seconds."""
    return datetime.fromtimestamp(epoch, UTC)


@contextmanager
def progress(what: str, total: int | None = None) -> Iterator[Callable[[], None]]:
    """A progress bar on a terminal, nothing when piped; yields what to call after each step."""
    out = console(stderr=True)
    if not out.is_terminal:
        yield lambda: None
        return
    columns = (TextColumn("{task.description}"), BarColumn(), TextColumn("{task.completed:,}"), TimeElapsedColumn())
    with Progress(*columns, console=out, transient=True) as bar:
        task = bar.add_task(what, total=total)
        yield lambda: bar.advance(task)


def event(happened: Event) -> str:
    """One event as a sentence."""
    return wording.event_sentence(happened)
