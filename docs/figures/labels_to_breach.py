"""Draw docs/figures/labels_to_breach.svg: labels until a rise is noticed, rule by rule, beside Wald's limit.

    python docs/figures/labels_to_breach.py [OUTPUT.svg]

Tolerance 0.03, risk 0.001, 70 labels a day, a look at the end of each of 300 days, the error rate constant since the
release. All but the shipped rule are exact (a dynamic programme over the counts); the shipped rule is simulated, its chance
of a false breach by importance sampling.
"""  # noqa: INP001  a script, not a package

from __future__ import annotations

import math
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import vl_convert
from scipy.stats import binom

from watcher.bounds.planning import wald_limit
from watcher.bounds.simulation import Setting, Streams, false_breach, labels_to_crossing

TOLERANCE, RISK, DAY, DAYS = 0.03, 0.001, 70, 300
RISES = (1.4, 1.5, 1.75, 2.0, 2.5, 3.0, 4.0, 5.0)
ENOUGH = 0.99
"""A mean is drawn where so large a part of the breaches falls within the 300 days."""
N = DAY * np.arange(1, DAYS + 1)


@dataclass(frozen=True, slots=True)
class Rule:
    """One way to look every day: its mean labels to a breach for each rise, and its chance of a false breach."""

    name: str
    means: tuple[float | None, ...]
    """None: over 1% is missed within 300 days."""
    false: float
    """Chance of a breach within 300 days spent exactly at the tolerance."""


def first_breach(needed: np.ndarray, rate: float) -> np.ndarray:
    """Exact chance that the breach was raised by each look: errors >= needed[i] after (i + 1) days."""
    step, alive, chances, sum_ = binom.pmf(np.arange(DAY + 1), DAY, rate), np.ones(1), [], 0.0
    for bar in needed.tolist():
        alive = np.convolve(alive, step)
        sum_ += float(alive[bar:].sum())
        alive = alive[:bar]
        chances.append(sum_)
    return np.array(chances)


def mean(chances: np.ndarray) -> float | None:
    """Mean labels, from the chance that the breach was raised by each look."""
    return float(DAY * (1 + (1 - chances[:-1]).sum())) if chances[-1] >= ENOUGH else None


def by_count(name: str, needed: np.ndarray) -> Rule:
    """A rule that breaches when the errors since the release reach a count."""
    means = tuple(mean(first_breach(needed, TOLERANCE * rise)) for rise in RISES)
    return Rule(name, means, float(first_breach(needed, TOLERANCE)[-1]))


def p_chart() -> Rule:
    """Each day by itself over its 3-sigma line."""
    line = TOLERANCE + 3 * math.sqrt(TOLERANCE * (1 - TOLERANCE) / DAY)
    over = [binom.sf(math.floor(line * DAY), DAY, rate) for rate in (TOLERANCE, *(TOLERANCE * rise for rise in RISES))]
    chances = [1 - (1 - chance) ** np.arange(1, DAYS + 1) for chance in over]
    return Rule("3-sigma p-chart of each day", tuple(mean(c) for c in chances[1:]), float(chances[0][-1]))


def shipped(streams: int) -> Rule:
    """The windowed rule as shipped, a service life of 300 days."""
    setting, rng = Setting(TOLERANCE, RISK, DAYS - 1, DAY), np.random.default_rng(1)
    found = [labels_to_crossing(Streams(setting, streams), TOLERANCE * rise, DAYS, rng) for rise in RISES]
    means = tuple(float(x[x < math.inf].mean()) if (x < math.inf).mean() >= ENOUGH else None for x in found)
    return Rule("watcher, as shipped", means, false_breach(setting, DAYS, 4 * streams, rng).chance)


def rules(streams: int = 2000) -> list[Rule]:
    """The five rules of the chart."""
    each = RISK / DAYS
    hoeffding = np.floor(N * TOLERANCE + np.sqrt(N * math.log(1 / each) / 2)).astype(int) + 1
    return [
        shipped(streams),
        by_count("Hoeffding, union bound over the looks", hoeffding),
        by_count("exact binomial, union bound over the looks", (binom.isf(each, N, TOLERANCE) + 1).astype(int)),
        by_count("exact binomial, uncorrected peeking", (binom.isf(RISK, N, TOLERANCE) + 1).astype(int)),
        p_chart(),
    ]


def chance_text(chance: float) -> str:
    """Two digits: 0.00028, 0.012, 0.78."""
    return f"{chance:.2g}" if chance >= 1e-4 else f"{chance:.1e}"


def spec(found: list[Rule]) -> dict[str, Any]:
    """The Vega-Lite chart: one line a rule, its false-breach chance in the legend, Wald's limit dashed."""
    names = [f"{rule.name}: false breach {chance_text(rule.false)}" for rule in found]
    limit = "Wald's limit for a risk of 0.001"
    rows = [
        {"rule": name, "rise": rise, "labels": labels}
        for name, rule in zip(names, found, strict=True)
        for rise, labels in zip(RISES, rule.means, strict=True)
        if labels is not None
    ]
    wald = [{"rule": limit, "rise": rise, "labels": wald_limit(TOLERANCE, RISK, TOLERANCE * rise)} for rise in RISES]
    color = {
        "field": "rule",
        "type": "nominal",
        "title": None,
        "scale": {
            "domain": [*names, limit],
            "range": ["#0b5394", "#7f6000", "#38761d", "#cc4125", "#8e7cc3", "#444444"],
        },
        "legend": {"orient": "bottom", "columns": 1, "labelLimit": 460, "symbolType": "stroke", "symbolStrokeWidth": 3},
    }
    x = {
        "field": "rise",
        "type": "quantitative",
        "title": "true error rate, in multiples of the tolerance 0.03",
        "scale": {"type": "log", "domain": [1.35, 5.2], "nice": False},
        "axis": {"values": [1.5, 2, 3, 4, 5], "format": "~g", "gridOpacity": 0.4},
    }
    y = {
        "field": "labels",
        "type": "quantitative",
        "title": "mean number of labels until the breach",
        "scale": {"type": "log", "nice": False, "domain": [40, 15000]},
        "axis": {"values": [50, 100, 200, 500, 1000, 2000, 5000, 10000], "format": "~s", "gridOpacity": 0.4},
    }
    encoding = {"x": x, "y": y, "color": color}
    line = {"type": "line", "point": {"size": 40}, "strokeWidth": 2}
    return {
        "$schema": "https://vega.github.io/schema/vega-lite/v6.json",
        "title": {
            "text": "What it costs to look every day",
            "subtitle": ["300 daily looks at 70 labels, risk 0.001; the chance of a false breach at the tolerance", ""],
            "anchor": "start",
        },
        "width": 560,
        "height": 340,
        "background": "white",
        "layer": [
            {"data": {"values": rows}, "mark": line, "encoding": encoding},
            {
                "data": {"values": [row for row in rows if row["rule"] == names[0]]},
                "mark": {**line, "strokeWidth": 5, "opacity": 0.45},
                "encoding": encoding,
            },
            {"data": {"values": wald}, "mark": {**line, "point": False, "strokeDash": [6, 4]}, "encoding": encoding},
        ],
    }


def main(output: Path) -> None:
    """Compute, print the table, write the SVG."""
    found = rules()
    sys.stdout.write("mean labels to breach for rises " + " ".join(f"{rise:g}x" for rise in RISES) + "\n")
    for rule in found:
        cells = " ".join("-" if labels is None else f"{labels:.0f}" for labels in rule.means)
        sys.stdout.write(f"{rule.name}: {cells}; false breach {chance_text(rule.false)}\n")
    output.write_text(vl_convert.vegalite_to_svg(spec(found), vl_version="6.4"), encoding="utf-8")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).with_suffix(".svg"))
