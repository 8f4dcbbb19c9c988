"""`watcher rehearse`: history through the same look, with or without injected drift; nothing is recorded."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, Final

import click
from rich.text import Text

from watcher import answer, assembly, settings, wording
from watcher.cli import show
from watcher.cli.common import CONFIG, JSON, Moment, any_breach, clock, print_json
from watcher.cli.main import EXIT_BREACH, EXIT_OK
from watcher.errors import UsageError, WatcherError
from watcher.records import Terms
from watcher.rehearsal import Pulled, Rehearsal, Said, moments
from watcher.rehearsal import rehearse as replay
from watcher.sources.base import Source
from watcher.sources.injected import Applied, InjectedSource, Injection
from watcher.text import safe

NO_EVIDENCE: Final = (
    "This is a rehearsal: nothing was recorded or sent, and the ledger was not opened. It shows how the rule behaves on such "
    "data. It is no evidence for the promise: history that was used to choose the tolerance, the dates or the slices cannot "
    "testify for them."
)


class Drift(click.ParamType[Injection]):
    """from=2026-03-01,rate=2x[,slice=depot=Birch]: what is to happen to the error rate."""

    name = "drift"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Injection:
        """Read it; whatever does not fit is refused with an example."""
        if isinstance(value, Injection):
            return value
        text = str(value)
        head, _, part = text.partition(",slice=")
        pairs = dict(pair.partition("=")[::2] for pair in head.split(","))
        example = "write for instance from=2026-03-01,rate=2x or from=2026-03-01,rate=0.06,slice=depot=Birch"
        if set(pairs) != {"from", "rate"}:
            self.fail(f"{text!r}: {example}", param, ctx)
        column, sign, slice_value = part.partition("=")
        if (",slice=" in text) != bool(column and sign and slice_value.strip()):
            self.fail(f"{text!r}: slice needs a column and a value that is not empty; {example}", param, ctx)
        start = Moment().convert(pairs["from"], param, ctx)
        factor, rate = _rate(pairs["rate"])
        if factor is None and rate is None:
            told = f"{text!r}: rate is a multiple such as 2x, or a rate between 0 and 1 such as 0.06; {example}"
            self.fail(told, param, ctx)
        return Injection(int(start.timestamp()), factor, rate, column, slice_value.strip())


def _rate(text: str) -> tuple[float | None, float | None]:
    multiple = text.endswith("x")
    try:
        number = float(text.removesuffix("x"))
    except ValueError:
        return None, None
    if multiple:
        return (number, None) if 0 < number < float("inf") else (None, None)
    return (None, number) if 0 < number < 1 else (None, None)


class Step(click.ParamType[int]):
    """A duration such as 1d or 6h."""

    name = "duration"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> int:
        """Seconds, more than 0."""
        try:
            found = value if isinstance(value, int) else settings.seconds(value)
        except ValueError as error:
            self.fail(str(error), param, ctx)
        if found <= 0:
            self.fail(f"{value!r} must be longer than 0", param, ctx)
        return found


@click.command()
@CONFIG
@click.option("--promise", "name", metavar="NAME", help="Only this promise.")
@click.option("--since", type=Moment(), metavar="T", help="Where history begins (default: the first release).")
@click.option("--until", type=Moment(), metavar="T", help="The last look (default: now).")
@click.option("--step", type=Step(), default="1d", show_default=True, help="From look to look.")
@click.option(
    "--inject", "drift", type=Drift(), metavar="DRIFT", help="from=T,rate=2x[,slice=C=V]: errors to be added."
)
@click.option("--seed", type=click.IntRange(0), default=0, show_default=True, help="Of the injected errors.")
@click.option("--chart", type=click.Path(path_type=Path, dir_okay=False), help="Also draw the limits, as SVG.")
@JSON
@click.pass_context
def rehearse(
    ctx: click.Context,
    config: Path,
    name: str | None,
    since: datetime | None,
    until: datetime | None,
    step: int,
    drift: Injection | None,
    seed: int,
    chart: Path | None,
    as_json: bool,
) -> None:
    """Replay history through the very same look, step by step, and say when what would have been said.

    The ledger of CONFIG is neither read nor written, and nothing is sent. --inject lets the error rate rise (or fall)
    from a day on, to see how soon that would have been noticed. Exits 3 when a promise is broken at the end.
    """
    read = settings.read(config)
    end = int((until or clock()).timestamp())
    injection = (
        None if drift is None else Injection(drift.start, drift.factor, drift.rate, drift.column, drift.value, seed)
    )
    pulled, injected = _pulled(read, name, injection, end)
    first = min(each.terms.released for one in pulled for each in one.watched)
    begin = max(first, int(since.timestamp())) if since else first
    times = moments(begin, end, step)
    with show.progress("looks rehearsed", len(times)) as tick:
        found = replay(pulled, times, tick)
    applied = [each for source in injected for each in source.applied.values()]
    if chart is not None:
        _draw(found, chart)
    if as_json:
        print_json(_json(found, injection, applied, step))
    else:
        _print(found, injection, applied, assembly.units(read))
    ctx.exit(EXIT_BREACH if any_breach(found.standings) else EXIT_OK)


def _pulled(
    read: settings.Settings, name: str | None, injection: Injection | None, end: int
) -> tuple[list[Pulled], list[InjectedSource]]:
    pulled, injected = [], []
    for table in read.source:
        watched = [
            each
            for each in assembly.watched(read, table.name)
            if not each.retired and name in (None, each.terms.promise)
        ]
        if not watched:
            continue
        source: Source = assembly.source_of(read, table)
        if injection is not None:
            injected.append(InjectedSource(source, injection, end))
            source = injected[-1]
        pulled.append(Pulled(source, tuple(watched), table.slice_limit))
    if not pulled:
        known = ", ".join(sorted({repr(promise.name) for promise in read.promise if not promise.retired})) or "none"
        raise UsageError(f"--promise {name!r}: the configuration has {known}")
    return pulled, injected


def _draw(found: Rehearsal, chart: Path) -> None:
    from watcher.report.charts import bounds
    from watcher.report.render import svg

    if len(found.histories) != 1:
        raise UsageError(
            f"--chart draws one promise, and this rehearsal has {len(found.histories)}: choose with --promise"
        )
    [(key, rows)] = found.histories.items()
    try:
        chart.write_text(svg(bounds(rows, found.terms[key])), encoding="utf-8")
    except OSError as error:
        raise WatcherError(f"--chart {str(chart)!r}: cannot be written ({error.strerror})") from error


def _json(found: Rehearsal, injection: Injection | None, applied: Sequence[Applied], step: int) -> dict[str, object]:
    return {
        "rehearsal": True,
        "note": NO_EVIDENCE,
        "since": answer.rfc3339(found.since),
        "until": answer.rfc3339(found.until),
        "step": step,
        "looks": found.looks,
        "injected": None
        if injection is None
        else {
            "from": answer.rfc3339(show.moment(injection.start)),
            "slice": {"column": injection.column, "value": injection.value} if injection.column else None,
            "seed": injection.seed,
            "applied": [asdict(each) | {"first": _noticed(found, injection, each)} for each in applied],
        },
        "said": [_said_json(said) for said in found.said],
        "promises": [answer.standing_json(standing) for standing in found.standings],
        "rejected": {
            source: {name: dict(counts) for name, counts in each.items()} for source, each in found.rejected.items()
        },
    }


def _said_json(said: Said) -> dict[str, object]:
    event = said.event
    return {
        "at": answer.rfc3339(said.at),
        "kind": event.kind,
        "promise": event.promise,
        "version": event.version,
        "slice": {"column": event.column, "value": event.value} if event.column else None,
        "bucket": None if event.bucket is None else answer.rfc3339(datetime.fromtimestamp(event.bucket, UTC)),
        "facts": dict(event.facts),
        "sentence": wording.event_sentence(event, said.terms),
    }


def _noticed(found: Rehearsal, injection: Injection, applied: Applied) -> dict[str, object]:
    """Days from the start of the injected drift to the first warning and the first breach said after it."""
    first: dict[str, object] = {"warning": None, "breach": None}
    for said in reversed(found.said):
        event = said.event
        own = (event.promise, event.version) == (applied.promise, applied.version)
        after = (said.at - show.moment(injection.start)).total_seconds() / 86400
        if own and event.kind in first and after >= 0:
            first[event.kind] = {"at": answer.rfc3339(said.at), "days": after}
    return first


def _print(
    found: Rehearsal,
    injection: Injection | None,
    applied: Sequence[Applied],
    units: Mapping[tuple[str, str], str],
) -> None:
    out = show.console()
    span = f"{found.looks:,} looks from {found.since:%-d %B %Y} to {found.until:%-d %B %Y %H:%M} UTC"
    out.print(Text(f"REHEARSAL, {span}", style="bold"))
    if injection is not None:
        for each in applied:
            out.print(Text(_told(injection, each)))
    out.print()
    out.print(Text("What would have been said", style="bold"))
    for said in found.said:
        out.print(Text(f"  {said.at:%d %b %Y %H:%M}  {wording.event_sentence(said.event, said.terms)}"))
    if not found.said:
        out.print(Text("  nothing"))
    if injection is not None:
        for each in applied:
            out.print(Text(_delay(found, injection, each), style="bold"))
    out.print()
    for name, terms in found.terms.items():
        _standing(found, name, terms, units)
    for source, by_promise in found.rejected.items():
        if (line := show.rejected(source, by_promise)) is not None:
            out.print(line)
    for remark in found.remarks:
        out.print(Text("Note: " + remark))
    out.print(Text(NO_EVIDENCE, style="italic"))


def _standing(found: Rehearsal, name: tuple[str, str], terms: Terms, units: Mapping[tuple[str, str], str]) -> None:
    standings = [s for s in found.standings if (s.promise, s.version) == name]
    out = show.console()
    out.print(Text("REHEARSED, not recorded", style="dim"))
    out.print(show.promise(standings, terms, units.get(name, "sample")))
    out.print()


def _told(injection: Injection, each: Applied) -> str:
    part = f" with {safe(injection.column)} = {safe(injection.value)}" if injection.column else ""
    when = "before" if each.before else "over all of history, as nothing was labelled before"
    which = "correct" if each.worse else "wrong"
    return (
        f"Injected into {safe(each.promise)} version {safe(each.version)}: from {show.moment(injection.start):%-d %B %Y %H:%M} UTC on "
        f"each {which} label{part} is flipped with chance {each.chance:.4g}, which takes the error rate from "
        f"{wording.percent(each.errors / each.labels)} ({each.errors:,} of {each.labels:,} labels {when}) to "
        f"{wording.percent(each.target)} in the mean. Seed {injection.seed}."
    )


def _delay(found: Rehearsal, injection: Injection, each: Applied) -> str:
    first = _noticed(found, injection, each)
    told = [
        f"the first {kind} {one['days']:.0f} days after it" if isinstance(one, dict) else f"no {kind} after it"
        for kind, one in first.items()
    ]
    return f"  {safe(each.promise)}: the injected drift would have brought {', '.join(told)} (label lag included)."
