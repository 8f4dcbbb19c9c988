"""Diagnostics in plain words: what is shown beside a verdict and has no influence on it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Final

from watcher.records import Standing, Terms
from watcher.text import safe
from watcher.wording.numbers import counted, day, percent

_DAY: Final = 86_400


def diagnostic_sentences(standing: Standing, terms: Terms) -> tuple[str, ...]:
    """One sentence for every diagnostic that is known; unknown ones are shown by name and value, made safe."""
    found = dict(standing.diagnostics)
    said = [tell(found, standing, terms) for tell in _TOLD]
    rest = (f"{safe(str(key))}: {safe(str(value))}." for key, value in sorted(found.items()) if key not in _KNOWN)
    return tuple(text for text in (*said, *rest) if text)


def diagnostic_lines(standing: Standing, terms: Terms) -> tuple[str, ...]:
    """The same in at most three lines: labels and their lag; what the unlabelled could change; how the labels behave."""
    found = dict(standing.diagnostics)
    lines = (
        " ".join(text for tell in tellers if (text := tell(found, standing, terms)))
        for tellers in ((_share, _age, _late), (_tipping,), (_bunched, _weight, _by_lag))
    )
    return tuple(line for line in lines if line)


def _share(found: Mapping[str, Any], standing: Standing, terms: Terms) -> str:
    del standing, terms
    share, missing = found.get("labelled_share"), found.get("unlabelled")
    if share is None:
        return ""
    rest = f"; {int(missing):,} {'is' if missing == 1 else 'are'} not" if missing else ""
    return f"{percent(float(share))} of the predictions in the evidence are labelled{rest}."


def _age(found: Mapping[str, Any], standing: Standing, terms: Terms) -> str:
    seconds = found.get("label_age_seconds")
    if seconds is None or standing.newest_label is None:
        return ""
    days = counted(int(seconds) // _DAY, "day")
    return (
        f"The newest label is of a prediction of {day(standing.newest_label, terms.time_zone)}, {days} before the look."
    )


def _tipping(found: Mapping[str, Any], standing: Standing, terms: Terms) -> str:
    del standing, terms
    point, careful = found.get("tipping_point"), found.get("tipping_point_upper")
    if point is None:
        return ""
    if point <= 0:
        return "The labelled samples alone lie above the tolerance, whatever the unlabelled ones are."
    if point > 1:
        told = "Even if every unlabelled sample were an error, the average would keep the tolerance"
    else:
        told = f"The average passes the tolerance if more than {percent(float(point), down=True)} of the unlabelled are errors"
    if careful is None or careful > 1:
        return f"{told}."
    limit = "0%" if careful <= 0 else percent(float(careful), down=True)
    return f"{told}; with the upper limit in place of the estimate, from {limit} on."


def _bunched(found: Mapping[str, Any], standing: Standing, terms: Terms) -> str:
    del standing, terms
    ratio = found.get("over_dispersion")
    if ratio is None:
        return ""
    return f"Errors a bucket vary {float(ratio):.2f} times as much as independent labels of one rate would."


def _weight(found: Mapping[str, Any], standing: Standing, terms: Terms) -> str:
    del standing, terms
    mean = found.get("mean_weight")
    return "" if mean is None else f"The mean weight of the labelled samples is {float(mean):.3f}; planned is 1."


def _by_lag(found: Mapping[str, Any], standing: Standing, terms: Terms) -> str:
    del standing, terms
    lag = found.get("error_by_lag")
    if not lag or not (lag["early_labels"] and lag["late_labels"]):
        return ""
    early, late = percent(float(lag["early"])), percent(float(lag["late"]))
    return (
        f"Of the labels that came early {early} are errors ({counted(lag['early_labels'], 'label')}), of those that came late {late} "
        f"({counted(lag['late_labels'], 'label')})."
    )


def _late(found: Mapping[str, Any], standing: Standing, terms: Terms) -> str:
    del found, terms
    late = standing.late_labels
    return f"{counted(late, 'label')} came too late to be counted." if late else ""


_TOLD: Final[tuple[Callable[[Mapping[str, Any], Standing, Terms], str], ...]] = (
    _share,
    _age,
    _late,
    _tipping,
    _bunched,
    _weight,
    _by_lag,
)
_KNOWN: Final = frozenset(
    {
        "labelled_share",
        "unlabelled",
        "label_age_seconds",
        "tipping_point",
        "tipping_point_upper",
        "over_dispersion",
        "mean_weight",
        "error_by_lag",
    }
)
