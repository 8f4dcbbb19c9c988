"""Where a promise or a slice stands, as sentences that a manager understands and a statistician accepts."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime
from fractions import Fraction
from typing import Final

from watcher.bounds.windows import BREACH, SUPPORT
from watcher.records import Measure, Standing, Terms
from watcher.text import safe
from watcher.wording.numbers import (
    about,
    amount,
    counted,
    day,
    duration,
    last,
    limits,
    moment,
    one_in,
    percent,
    period,
    rate,
)

RATE: Final[Mapping[Measure, str]] = {
    "error": "error",
    "miss": "miss rate",
    "false-alarm": "false-alarm rate",
    "loss": "loss",
}
"""What the tolerance bounds, after "the average"."""
_KIND: Final[Mapping[Measure, str]] = {"error": "", "miss": "positive ", "false-alarm": "negative ", "loss": ""}
_MOST: Final = "1,000,000"
"""Labels beyond which `to_decide` gives no figure."""


def sentence(standing: Standing, terms: Terms, unit: str = "sample") -> str:
    """Where a promise or slice stands, with the figures it rests on and the chance that they are wrong.

    `unit` is the noun of the configuration, singular or plural. Lower limits are rounded down, upper limits up. The limits
    since the release each hold at risk * part * share of window 0 of their own budget (method.md section 4).
    """
    parts = [_entered(standing, terms, unit), _verdict(standing, terms), *_remarks(standing, terms, unit)]
    text = " ".join(part for part in parts if part)
    return _about_slice(standing, terms) + text if standing.column else text


def headline(standing: Standing, terms: Terms) -> str:
    """The state in a few words, for a list or a subject line."""
    told = f"the promise of at most {rate(terms.tolerance)}"
    if standing.breach is not None:
        return f"{told} is broken, likeliest since {day(standing.breach.since, terms.time_zone)}"
    if standing.support is not None:
        return f"{told} is supported up to {last(standing.support.until, terms.time_zone)}"
    if not standing.labels:
        return f"{told}: nothing counted yet"
    return f"{told} is neither supported nor broken"


def name(standing: Standing) -> str:
    """The whole, or column and value of a slice, made safe."""
    return "whole" if not standing.column else f"{safe(standing.column)} = {safe(standing.value) or '(empty)'}"


def limits_chance(standing: Standing) -> tuple[str, str]:
    """The chances with which the lower and the upper limit since the release are ever wrong: ("1 in 5,000", "1 in 2,000")."""
    risk = Fraction(repr(standing.risk)) * Fraction(standing.part).limit_denominator(10**9)
    return one_in(risk * Fraction(repr(BREACH.release))), one_in(risk * Fraction(repr(SUPPORT.release)))


def flag_sentences(standing: Standing, terms: Terms) -> tuple[str, ...]:
    """One plain sentence for every flag that is up, in the order of `records.FLAGS`."""
    return tuple(_FLAGS[flag](standing, terms) for flag in _FLAGS if flag in standing.flags)


def next_steps(standing: Standing, terms: Terms | None = None) -> tuple[str, ...]:
    """What to do next, the most urgent first; empty when nothing needs doing."""
    del terms
    steps = []
    if standing.breach is not None:
        steps.append(
            "Decide with the accountable people whether the classifier may go on being used; look at the slices for where the "
            "errors lie; retrain or go back to the earlier version; acknowledge the breach with `watcher acknowledge`."
        )
    steps += [_STEPS[flag] for flag in _STEPS if flag in standing.flags]
    if standing.breach is None and standing.support is None and standing.to_decide is not None:
        if standing.to_decide.median is None:
            steps.append(
                "The labels that come in cannot decide this promise in reasonable time: see `watcher plan` for what they can "
                "decide."
            )
        elif standing.labels and "stale" not in standing.flags:
            steps.append("Go on labelling; `watcher explain` shows how the evidence stands.")
    if standing.late_labels:
        steps.append("If late labels are usual, `label_lag` is too short: give the next version a longer one.")
    return tuple(steps)


def _about_slice(standing: Standing, terms: Terms) -> str:
    part = percent(standing.part) if standing.part < 1 else "all"
    return f"{name(standing)} (judged at {part} of the risk of {one_in(terms.risk)}): "


def _entered(standing: Standing, terms: Terms, unit: str) -> str:
    noun = safe(unit, 40)
    kind = f"labelled {_KIND[terms.measure]}{noun}"
    if standing.counted_until is None:
        lag = duration(terms.label_lag)
        wait = f"a bucket counts {lag} after its end" if terms.label_lag else "a bucket counts once it is over"
        return f"No {kind} has entered the evidence yet: {wait}."
    when = period(datetime.fromtimestamp(terms.released, UTC), standing.counted_until, terms.time_zone)
    if not standing.labels:
        return f"From {when}, no {kind} entered the evidence."
    return (
        f"From {when}, {counted(standing.labels, kind)} entered the evidence, {_wrong(standing.errors, terms.measure)}."
    )


def _wrong(errors: float, measure: Measure) -> str:
    if measure == "loss":
        return f"with a total loss of {amount(errors)}"
    figure = amount(errors) if errors else "none"
    return {"error": f"{figure} of them misjudged", "miss": f"{figure} of them missed"}.get(
        measure, f"{figure} of them a false alarm"
    )


def _verdict(standing: Standing, terms: Terms) -> str:
    if standing.breach is not None:
        return f"{_broken(standing, terms)} {_life(standing, terms)}"
    if standing.support is not None:
        return f"{_supported(standing, terms)} {_life(standing, terms)}"
    promise = f"The promise of {rate(terms.tolerance)}"
    if not standing.labels:
        ground = (
            "has no release evidence to rest on" if "uncertified" in standing.flags else "rests on its release evidence"
        )
        return f"{promise} {ground}."
    return f"{promise} is neither supported nor broken: {_life(standing, terms, capital=False)}{_to_decide(standing)}"


def _broken(standing: Standing, terms: Terms) -> str:
    breach = standing.breach
    assert breach is not None
    zone, average = terms.time_zone, RATE[terms.measure]
    return (
        f"The promise of {rate(terms.tolerance)} is broken (breach {breach.number}, noticed on {moment(breach.noticed, zone)}): "
        f"over some period that ended with {last(breach.at, zone)} the average {average} was above "
        f"{percent(breach.lower, down=True, decimals=2)}; the chance that this is ever said wrongly is at most "
        f"{_own_risk(standing)}. The likeliest start is {day(breach.since, zone)}, which is a best guess and no limit."
    )


def _supported(standing: Standing, terms: Terms) -> str:
    support = standing.support
    assert support is not None
    return (
        f"The promise of {rate(terms.tolerance)} is supported: from {period(support.since, support.until, terms.time_zone)} the "
        f"average {RATE[terms.measure]} was at most {percent(support.upper, up=True, decimals=2)}; the chance that this is ever "
        f"said wrongly is at most {_own_risk(standing)}. A jump of the last days can still hide in that average."
    )


def _life(standing: Standing, terms: Terms, *, capital: bool = True) -> str:
    since = "Since" if capital else "since"
    average, (low, high) = RATE[terms.measure], (standing.life.lower, standing.life.upper)
    lower, upper = limits(low, high)
    below, above = limits_chance(standing)
    # Limits by inversion of the clustered evidence hold for a constant rate only (method.md section 5).
    steady = ", for a rate that does not change" if terms.n_max is not None else ""
    if low <= 0.0 and high >= 1.0:
        return f"{since} the release too few labels have come to limit the average {average}."
    if low <= 0.0:
        return (
            f"{since} the release the average {average} is at most {upper} (wrong with chance at most {above}{steady})."
        )
    if high >= 1.0:
        return f"{since} the release the average {average} is at least {lower} (wrong with chance at most {below}{steady})."
    return (
        f"{since} the release the average {average} lies between {lower} and {upper} (the lower limit is wrong with chance at "
        f"most {below}, the upper one {above}{steady})."
    )


def _to_decide(standing: Standing) -> str:
    if standing.to_decide is None or not standing.labels:
        return ""
    median = standing.to_decide.median
    if median is None:
        return f" More than {_MOST} further labels would be needed to decide in half of such cases."
    if median == 0:
        return ""
    return f" About {about(median)} more labels would decide in half of such cases."


def _remarks(standing: Standing, terms: Terms, unit: str) -> list[str]:
    """What a reader of this one sentence must not miss: waiting labels, a warning, silence."""
    said = [_waiting(standing, terms, unit)] if standing.provisional_labels else []
    if "warning" in standing.flags:
        said.append("An early warning stands.")
    if "stale" in standing.flags:
        silence = _silence(standing, terms)
        said.append(silence[0].upper() + silence[1:])
    return said


def _waiting(standing: Standing, terms: Terms, unit: str) -> str:
    one = standing.provisional_labels == 1
    figure = counted(standing.provisional_labels, f"further labelled {_KIND[terms.measure]}{safe(unit, 40)}")
    wrong = _wrong(standing.provisional_errors, terms.measure).replace("of them ", "")
    its, does = ("its", "does") if one else ("their", "do")
    over = (
        f"{its} label lag of {duration(terms.label_lag)} is not over"
        if terms.label_lag
        else f"{its} bucket is not over"
    )
    return f"{figure} ({wrong}) {does} not count yet: {over}."


def _silence(standing: Standing, terms: Terms) -> str:
    if standing.newest_label is None:
        return "no label has arrived since the release."
    return f"no label is newer than {day(standing.newest_label, terms.time_zone)}; nothing is known of the time since."


def _own_risk(standing: Standing) -> str:
    return one_in(Fraction(repr(standing.risk)) * Fraction(standing.part).limit_denominator(10**9))


def _warning(standing: Standing, terms: Terms) -> str:
    del standing
    every = max(1, terms.warn_every // 86_400)
    return (
        f"Early warning: the {RATE[terms.measure]} of late looks higher than {rate(terms.tolerance)}. Such a warning comes "
        f"wrongly at most once in {every:,} days on average; it is a reason to look, not a verdict."
    )


def _stale(standing: Standing, terms: Terms) -> str:
    return f"Labels have stopped: {_silence(standing, terms)}"


def _delay(standing: Standing, terms: Terms) -> str:
    del standing, terms
    return (
        "Early labels are errors at another rate than late ones: how fast a label comes depends on the outcome, so evidence "
        "from arriving labels can be wrong."
    )


def _weights(standing: Standing, terms: Terms) -> str:
    del standing, terms
    return "The mean of the weights is not 1 as planned: the sampling differs from the plan, or the weights are wrong."


def _clustered(standing: Standing, terms: Terms) -> str:
    del standing, terms
    return (
        "Errors come in clusters: days differ more than chance allows. The verdict speaks of the average over the days seen, "
        "whose ups and downs it does not smooth."
    )


def _unlisted(standing: Standing, terms: Terms) -> str:
    del standing, terms
    return "The promise is no longer in the configuration; it stays watched."


def _uncertified(standing: Standing, terms: Terms) -> str:
    del standing
    return f"No release evidence bears out {rate(terms.tolerance)} at a risk of {one_in(terms.risk)}."


_FLAGS: Final = {
    "warning": _warning,
    "stale": _stale,
    "delay-depends-on-outcome": _delay,
    "weights-off": _weights,
    "clustered": _clustered,
    "unlisted": _unlisted,
    "uncertified": _uncertified,
}
_STEPS: Final[Mapping[str, str]] = {
    "warning": "Label more of the newest samples, so that the evidence decides sooner.",
    "stale": "Find out why labels no longer arrive: until they do, nothing more can be said about the promise.",
    "delay-depends-on-outcome": 'Give the next version `count = "sealed"`, which is right however the delay behaves.',
    "weights-off": "Compare the share of every kind of sample with the plan; mend the sampling, not the weights of past labels.",
    "clustered": "If samples come in groups (one customer, one session), give the next version a `cluster` column.",
    "unlisted": "Put the promise back into the configuration, or set `retired = true` to end the watch.",
    "uncertified": "See with `watcher certify` what a hold-out sample would have to show.",
}
