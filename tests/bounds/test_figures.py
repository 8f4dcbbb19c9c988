"""The chart of docs/: its numbers and its specification."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import altair as alt
import pytest
import vl_convert

SCRIPT = Path(__file__).parents[2] / "docs" / "figures" / "labels_to_breach.py"


@pytest.fixture(scope="module")
def chart() -> ModuleType:
    """The script that draws the chart."""
    description = importlib.util.spec_from_file_location("labels_to_breach", SCRIPT)
    module = importlib.util.module_from_spec(description)
    sys.modules["labels_to_breach"] = module
    description.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def rules(chart: ModuleType) -> list:
    """The five rules, fewer streams than for the printed chart."""
    return chart.rules(streams=400)


def test_means_of_the_rules(chart: ModuleType, rules: list) -> None:
    """The exact rules agree with the 400 streams of method.md section 1 (s.e. 3%), the shipped one is near the exact one."""
    at = {rule.name: dict(zip(chart.RISES, rule.means, strict=True)) for rule in rules}

    assert at["Hoeffding, union bound over the looks"][1.5] is None
    assert at["Hoeffding, union bound over the looks"][3.0] == pytest.approx(1793, rel=0.1)
    assert at["exact binomial, union bound over the looks"][2.0] == pytest.approx(917, rel=0.1)
    assert at["exact binomial, uncorrected peeking"][2.0] == pytest.approx(491, rel=0.1)
    assert at["3-sigma p-chart of each day"][2.0] == pytest.approx(579, rel=0.1)
    assert at["watcher, as shipped"][2.0] == pytest.approx(
        at["exact binomial, union bound over the looks"][2.0], rel=0.1
    )


def test_false_breaches_of_the_rules(rules: list) -> None:
    """Only peeking and the p-chart exceed the risk of 0.001."""
    false = {rule.name: rule.false for rule in rules}

    assert [name for name, chance in false.items() if chance > 0.001] == [
        "exact binomial, uncorrected peeking",
        "3-sigma p-chart of each day",
    ]
    assert false["3-sigma p-chart of each day"] == pytest.approx(0.78, abs=0.01)
    assert false["exact binomial, uncorrected peeking"] == pytest.approx(0.0138, abs=0.001)


def test_specification_is_valid_and_drawn(chart: ModuleType, rules: list) -> None:
    """The specification obeys the Vega-Lite schema and becomes an SVG that names every rule."""
    spec = chart.spec(rules)

    alt.LayerChart.from_dict(spec)
    svg = vl_convert.vegalite_to_svg(spec, vl_version="6.4")

    assert all(rule.name in svg for rule in rules)
    assert SCRIPT.with_suffix(".svg").read_text(encoding="utf-8").startswith("<svg")
