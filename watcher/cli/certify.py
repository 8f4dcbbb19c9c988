"""`watcher certify`: what may be promised at release, and how many labels that takes."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Any

import click
from rich import box
from rich.table import Table
from rich.text import Text

from watcher import wording
from watcher.bounds import release
from watcher.bounds.evidence import evidence
from watcher.bounds.hoeffding import hoeffding_labels
from watcher.cli import show
from watcher.cli.common import JSON, print_json

ONE_LOOK = "for one look at a sample whose size was fixed beforehand"


@dataclass(frozen=True, slots=True)
class Asked:
    """The options, as they were given."""

    labels: int | None
    errors: int | None
    risk: float
    models: int
    dimension: int | None
    size: int | None
    margin: float | None
    baseline_risk: float | None
    worse: int | None
    better: int | None
    tolerance: float | None
    power: float
    rate: float | None


@dataclass(frozen=True, slots=True)
class Answer:
    """What is printed: sentences, then a table whose first row is its head; and the JSON."""

    json: dict[str, Any]
    sentences: tuple[str, ...]
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


@click.command()
@click.option("--labels", type=click.IntRange(1), metavar="N", help="Labelled samples: hold-out, baseline or training.")
@click.option("--errors", type=click.IntRange(0), metavar="K", help="Errors among them.")
@click.option("--risk", type=float, required=True, metavar="R", help="Chance that the promise is wrong.")
@click.option(
    "--models",
    type=click.IntRange(1),
    default=1,
    show_default=True,
    metavar="M",
    help="How many models, fixed beforehand, were compared on the hold-out.",
)
@click.option(
    "--vc-dimension",
    "dimension",
    type=click.IntRange(1),
    metavar="D",
    help="The counts are of the training sample; the model was chosen from a class of that VC dimension.",
)
@click.option(
    "--class-size", "size", type=click.IntRange(1), metavar="C", help="The same for a class of so many models."
)
@click.option(
    "--margin",
    type=float,
    metavar="G",
    help="A promise \"at most the baseline's error + G\"; the counts are the baseline's.",
)
@click.option(
    "--baseline-risk", type=float, metavar="R0", help="The part of the risk spent on the baseline.  [default: half]"
)
@click.option(
    "--worse",
    type=click.IntRange(0),
    metavar="W",
    help="Old and new model on the same samples: only the new one was wrong.",
)
@click.option("--better", type=click.IntRange(0), metavar="B", help="Only the old one was wrong.")
@click.option(
    "--tolerance", type=float, metavar="E", help="Is it borne out? Without --labels: how many labels does it take?"
)
@click.option(
    "--power",
    type=float,
    default=0.9,
    show_default=True,
    metavar="P",
    help="With what chance those labels shall bear it out.",
)
@click.option(
    "--rate",
    type=float,
    metavar="Q",
    help="The error rate assumed for that.  [default: two thirds of E; training error 0]",
)
@JSON
def certify(as_json: bool, **given: Any) -> None:
    """What a sample bears out (--labels, --errors), or the sample that a promise takes (--tolerance).

    Exact binomial limit with Hoeffding's beside it; for a class of models from its training sample; relative to a
    baseline; for an old and a new model on the same samples.
    """
    asked = Asked(**given)
    try:
        answer = _form(asked)
    except (ValueError, OverflowError) as error:
        raise click.UsageError(str(error)) from None
    if as_json:
        print_json(answer.json)
        return
    out = show.console()
    for sentence in answer.sentences:
        out.print(Text(sentence))
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for n, name in enumerate(answer.head):
        table.add_column(Text(name), justify="left" if n in (0, len(answer.head) - 1) else "right")
    for row in answer.rows:
        table.add_row(*map(Text, row))
    out.print(table)


def _form(asked: Asked) -> Answer:
    """Which question the options ask."""
    if asked.dimension is not None and asked.size is not None:
        raise ValueError("--vc-dimension and --class-size describe the same class: give one of them")
    trained = asked.dimension is not None or asked.size is not None
    paired = asked.worse is not None or asked.better is not None
    if sum((trained, paired or asked.margin is not None, asked.models > 1)) > 1:
        raise ValueError(
            "a class of models, a margin, and --models are different forms of promise: ask for one at a time"
        )
    if paired:
        return _paired(asked)
    if asked.labels is None and asked.errors is None:
        if asked.margin is not None:
            raise ValueError("--margin needs the baseline's --labels and --errors")
        if asked.tolerance is None:
            raise ValueError(
                "give --labels and --errors (what do they bear out?) or --tolerance (how many labels does it take?)"
            )
        return _class_needed(asked, asked.tolerance) if trained else _needed(asked, asked.tolerance)
    if asked.labels is None or asked.errors is None:
        raise ValueError("--labels and --errors belong together: give both")
    if asked.margin is not None:
        return _relative(asked, asked.labels, asked.errors, asked.margin)
    if trained:
        return _class(asked, asked.labels, asked.errors)
    return _hold_out(asked, asked.labels, asked.errors)


def _hold_out(asked: Asked, labels: int, errors: int) -> Answer:
    found = release.certify(labels, errors, asked.risk, asked.models)
    best = f", the best of {asked.models:,} models" if asked.models > 1 else ""
    sentences = [
        (
            f"{wording.counted(errors, 'error')} in {wording.counted(labels, 'label')}{best}: at most {_up(found.exact)} may be promised. "
            f"The chance that the true error rate lies above that is at most {wording.one_in(asked.risk)}."
        )
    ]
    verdict = None
    if asked.tolerance is not None:
        verdict = found.bears_out(asked.tolerance)
        sentences.append(_verdict(asked.tolerance, borne=verdict))
    exact = f"exactly, {ONE_LOOK} (Clopper-Pearson)"
    rows = (("exact binomial", _up(found.exact), exact), ("Hoeffding", _up(found.hoeffding), "likewise, always wider"))
    json = {"form": "hold-out", **asdict(found), "tolerance": asked.tolerance, "borne_out": verdict}
    return Answer(json, tuple(sentences), ("bound", "may be promised", "holds"), rows)


def _class(asked: Asked, labels: int, errors: int) -> Answer:
    if asked.dimension is not None:
        found, kind = release.vc_class(labels, errors, asked.dimension, asked.risk), f"VC dimension {asked.dimension:,}"
    else:
        assert asked.size is not None
        found, kind = release.finite_class(labels, errors, asked.size, asked.risk), f"{asked.size:,} models"
    sentences = [
        (
            f"{wording.counted(errors, 'error')} in {wording.counted(labels, 'label')} of the TRAINING sample, the model chosen "
            f"from a class of {kind}: at most {_up(found.tolerance)} may be promised, wrong with chance at most {wording.one_in(asked.risk)}."
        ),
    ]
    if found.tolerance >= 1.0:
        sentences.append("That says nothing: for a class of that size a hold-out sample is the way.")
    verdict = None
    if asked.tolerance is not None:
        verdict = found.tolerance <= asked.tolerance
        sentences.append(_verdict(asked.tolerance, borne=verdict))
    whole = min(1.0, errors / labels + found.deviation)
    rows = [(found.form, _up(found.tolerance), "for whichever model of the class was chosen")]
    if asked.size is not None:
        rows.append(("Hoeffding at risk/size", _up(whole), "likewise, always wider"))
    json = {"form": "class", **asdict(found), "vc_dimension": asked.dimension, "class_size": asked.size}
    json |= {"tolerance_asked": asked.tolerance, "borne_out": verdict}
    return Answer(json, tuple(sentences), ("theorem", "may be promised", "holds"), tuple(rows))


def _relative(asked: Asked, labels: int, errors: int, margin: float) -> Answer:
    spent = asked.risk / 2.0 if asked.baseline_risk is None else asked.baseline_risk
    found = release.relative(labels, errors, margin, asked.risk, spent)
    sentences = (
        (
            f'"At most the baseline\'s error + {wording.rate(margin)}", the baseline known from {wording.counted(errors, "error")} '
            f"in {wording.counted(labels, 'label')}: promise at most {_up(found.breach_rate)} at risk {wording.one_in(found.risk)}. A "
            f"breach of that is a breach of the relative promise, wrong with chance at most {wording.one_in(asked.risk)} in all."
        ),
        f"It is supported where the error is shown to be at most {_down(found.support_rate)}.",
    )
    rows = (
        ("breach is tested against", _up(found.breach_rate), "upper limit of the baseline + margin"),
        ("support is tested against", _down(found.support_rate), "lower limit of the baseline + margin"),
    )
    json = {"form": "relative", "labels": labels, "errors": errors, "margin": margin, **asdict(found)}
    return Answer(json, sentences, ("", "rate", "what it is"), rows)


def _paired(asked: Asked) -> Answer:
    if asked.labels is None or asked.worse is None or asked.better is None:
        raise ValueError("old and new model on the same samples need --labels, --worse and --better")
    if asked.errors is not None:
        raise ValueError(
            "--errors does not go with --worse and --better: samples that both got wrong tell nothing of the difference"
        )
    margin = 0.0 if asked.margin is None else asked.margin
    statistic = release.paired_statistic(asked.labels, asked.worse, asked.better)
    rate = release.paired_rate(margin)
    above, below = (float(evidence(statistic, rate, side, design=release.PAIRS)) for side in ("above", "below"))
    lower, upper = (
        float(limit) for limit in release.paired_difference(asked.labels, asked.worse, asked.better, asked.risk)
    )
    needed, estimate = -math.log(asked.risk), (asked.worse - asked.better) / asked.labels
    told = "broken" if above >= needed else "borne out" if below >= needed else "neither broken nor borne out"
    sentences = (
        (
            f"On the same {wording.counted(asked.labels, 'sample')} the new model alone was wrong {asked.worse:,} times, the old one "
            f"alone {asked.better:,} times: new minus old is {_points(estimate)}, between {_points(lower)} and {_points(upper)} (each "
            f"limit is wrong with chance at most {wording.one_in(asked.risk)}, however often one looks)."
        ),
        f'"New error at most old error + {wording.rate(margin)}" is {told} by these samples.',
    )
    rows = (
        ("new error > old error + margin", f"{above:.2f}", f"{needed:.2f} nats decide"),
        ("new error < old error + margin", f"{below:.2f}", f"{needed:.2f} nats decide"),
    )
    json = {"form": "paired", "labels": asked.labels, "worse": asked.worse, "better": asked.better, "margin": margin}
    json |= {"risk": asked.risk, "difference": {"estimate": estimate, "lower": lower, "upper": upper}}
    json |= {"evidence": {"above": above, "below": below}, "threshold": needed, "verdict": told}
    return Answer(json, sentences, ("evidence that", "nats", ""), rows)


def _needed(asked: Asked, tolerance: float) -> Answer:
    rate = 2.0 / 3.0 * tolerance if asked.rate is None else asked.rate
    share = asked.risk / asked.models
    found = release.labels_needed(tolerance, share, asked.power, rate)
    wide = hoeffding_labels(tolerance, share, asked.power, rate)
    best = f", the best of {asked.models:,} models," if asked.models > 1 else ""
    sentences = (
        (
            f"To promise at most {_up(tolerance)} at risk {wording.one_in(asked.risk)} a hold-out{best} needs "
            f"{wording.counted(found.labels, 'label')} with at most {wording.counted(found.errors_allowed, 'error')} among them. If the "
            f"true error rate is {wording.percent(rate)} it succeeds with chance {wording.percent(found.power, down=True)}."
        ),
    )
    rows = (
        ("exact binomial", f"{found.labels:,}", f"at most {wording.counted(found.errors_allowed, 'error')}"),
        ("Hoeffding", "over 10,000,000" if wide is None else f"{wide:,}", "for the same promise"),
    )
    json = {"form": "labels-needed", "tolerance": tolerance, "risk": asked.risk, "models": asked.models, "rate": rate}
    json |= {"power_wanted": asked.power, **asdict(found), "hoeffding_labels": wide}
    return Answer(json, sentences, ("bound", "labels", ""), rows)


def _class_needed(asked: Asked, tolerance: float) -> Answer:
    rate = asked.rate or 0.0
    if not 0.0 <= rate < tolerance:
        raise ValueError(f"rate = {rate!r}: a training error from 0 to below tolerance = {tolerance!r} is allowed")
    if asked.dimension is not None:
        labels, kind = (
            release.vc_labels(asked.dimension, tolerance - rate, asked.risk),
            f"VC dimension {asked.dimension:,}",
        )
        form = "4 m(2n) exp(-n e^2/8)"
    else:
        assert asked.size is not None
        labels = release.finite_labels(asked.size, tolerance - rate, asked.risk, consistent=rate == 0.0)
        kind, form = f"{asked.size:,} models", "log(size/risk)/e" if rate == 0.0 else "log(size/risk)/(2 e^2)"
    sentences = (
        (
            f"A model chosen from a class of {kind} that makes {wording.rate(rate)} training errors may be promised to err at most "
            f"{_up(tolerance)} at risk {wording.one_in(asked.risk)} from {wording.counted(labels, 'training label')} on."
        ),
    )
    json = {"form": "class-labels-needed", "tolerance": tolerance, "risk": asked.risk, "rate": rate, "labels": labels}
    json |= {"vc_dimension": asked.dimension, "class_size": asked.size, "theorem": form}
    return Answer(json, sentences, ("theorem", "labels", ""), ((form, f"{labels:,}", ""),))


def _verdict(tolerance: float, *, borne: bool) -> str:
    told = "is borne out" if borne else "is NOT borne out: promise more, or bring more labels"
    return f"A tolerance of {wording.rate(tolerance)} {told}."


def _up(value: float) -> str:
    return wording.percent(value, up=True, decimals=_decimals(value))


def _down(value: float) -> str:
    return wording.percent(value, down=True, decimals=_decimals(value))


def _decimals(value: float) -> int:
    """Three significant digits, so that the figure may be promised as it is printed."""
    return max(0, 1 - math.floor(math.log10(100.0 * value)) + 1) if value > 0.0 else 0


def _points(value: float) -> str:
    return f"{100.0 * value:+.2f} points".replace("-", "−")
