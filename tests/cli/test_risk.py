"""`watcher risk`: every part of every budget, exact sums, and the list of slices that stand out now."""

from __future__ import annotations

import json
import math
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result
from look.rows import configuration, write, year

from watcher.cli import main


def _run(*arguments: str | Path) -> Result:
    return CliRunner().invoke(main, [str(argument) for argument in arguments])


def _json(*arguments: str | Path) -> Any:
    result = _run("risk", *arguments, "--json")

    assert result.exit_code == 0, result.output + result.stderr
    return json.loads(result.stdout)


@pytest.fixture(scope="module")
def looked(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Sites a and b declared, c discovered; b breaks the promise."""
    folder = tmp_path_factory.mktemp("risk")
    write(folder / "rows.csv", year(12, 30, 90, late=False, rate=0.02, jump=5))
    path = folder / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    assert _run("look", path, "--at", "2026-02-12").exit_code == 3
    return path


def test_the_parts_of_each_budget_add_up_to_the_risk(looked: Path) -> None:
    """Every part added as a fraction: windows or weeks within each cell, cells and what is kept within the budget."""
    found = _json(looked, "triage")

    assert [budget["budget"] for budget in found["budgets"]] == ["breach", "support", "weekly"]
    for budget in found["budgets"]:
        total = Fraction(0)
        for cell in budget["cells"]:
            own = Fraction(cell["risk"])
            total += own
            parts = cell.get("parts", [])
            assert cell["kept"] or sum(Fraction(part["sum"]) for part in parts) == own
            assert all(
                part["count"] is None or part["count"] * Fraction(part["each"]) == Fraction(part["sum"])
                for part in parts
            )
        assert total == Fraction(1, 100) == Fraction(found["risk_exact"]) == Fraction(budget["sum"])


def test_cells_have_the_parts_and_thresholds_they_are_judged_by(looked: Path) -> None:
    """method.md section 8: whole 1/2, two declared values 1/5 each, the first discovered 1/20, 1/20 kept; as in `status`."""
    cells = _json(looked, "triage")["budgets"][0]["cells"]
    judged = json.loads(_run("status", looked, "--json").stdout)["promises"]

    assert [Fraction(cell["risk"]) * 100 for cell in cells] == [
        Fraction(x) for x in ("1/2", "1/5", "1/5", "1/20", "1/20")
    ]
    assert cells[-1]["name"] == "slice values not discovered yet"
    thresholds = {json.dumps(cell["slice"]): cell["threshold"] for cell in cells if not cell["kept"]}
    assert thresholds == pytest.approx({json.dumps(p["slice"]): p["threshold"] for p in judged}, abs=2e-9)
    assert thresholds["null"] == pytest.approx(math.log(200))


def test_restarts_and_weeks_are_those_of_the_service_life(looked: Path) -> None:
    """52 weeks of daily buckets: J = 363 restarts; W = 53 weeks, two sides each."""
    breach, _, weekly = _json(looked, "triage")["budgets"]

    assert [part["count"] for part in breach["cells"][0]["parts"]] == [1, 363, None]
    assert [part["count"] for part in weekly["cells"][0]["parts"]] == [106, None]


def test_slices_stand_out_by_their_current_totals(looked: Path) -> None:
    """The e-BH list by hand: the k largest, k the largest number with k-th largest total >= log(K/(fdr k))."""
    judged = [p for p in json.loads(_run("status", looked, "--json").stdout)["promises"] if p["slice"]]
    found = _json(looked, "triage")["standing_out"]
    totals = sorted((p["total"] for p in judged), reverse=True)
    k = max((i for i in range(1, 4) if totals[i - 1] >= math.log(3 / (0.05 * i))), default=0)

    assert found["fdr"] == 0.05
    assert [one["total"] for one in found["listed"]] == totals[:k]
    assert found["listed"][0]["slice"] == {"column": "site", "value": "b"}
    assert _json(looked, "triage", "--fdr", "1e-300")["standing_out"]["listed"] == []
    printed = " ".join(_run("risk", looked, "triage").output.split())
    assert "at most 5% is listed wrongly" in printed
    assert "site = b" in printed


def test_before_the_first_look_the_configuration_is_told(tmp_path: Path) -> None:
    """The same list from the terms as they will be frozen; nothing stands out yet, nothing is written."""
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    found = _json(path, "triage")

    assert not found["looked"]
    assert [Fraction(cell["risk"]) * 100 for cell in found["budgets"][0]["cells"]] == [
        Fraction(x) for x in ("1/2", "1/5", "1/5", "1/10")
    ]
    assert found["standing_out"]["listed"] == []
    assert "No look was made yet" in _run("risk", path, "triage").output
    assert list(tmp_path.iterdir()) == [path]


def test_without_slices_the_whole_has_everything(tmp_path: Path) -> None:
    """One portion."""
    path = tmp_path / "watcher.toml"
    path.write_text(configuration().replace('slices = { site = ["a", "b"] }', ""), encoding="utf-8")

    assert [cell["risk"] for cell in _json(path, "triage")["budgets"][0]["cells"]] == ["1/100"]


@pytest.mark.parametrize("arguments", [("nobody",), ("triage", "--version", "9"), ("triage", "--fdr", "2")])
def test_what_is_unknown_or_impossible_is_refused(looked: Path, arguments: tuple[str, ...]) -> None:
    """Exit 2."""
    assert _run("risk", looked, *arguments).exit_code == 2


@pytest.mark.parametrize("command", [("status",), ("explain", "triage"), ("look", "--at", "2026-02-12")])
def test_diagnostics_stand_beside_the_verdict(looked: Path, command: tuple[str, ...]) -> None:
    """Labelled share and age of the newest label, tipping point and over-dispersion as plain sentences, for the whole."""
    name, *rest = command
    printed = " ".join(_run(name, looked, *rest).output.split())
    whole = json.loads(_run("status", looked, "--json").stdout)["promises"][0]["diagnostics"]

    assert f"{100 * whole['labelled_share']:.1f}% of the predictions in the evidence are labelled" in printed
    assert "before the look." in printed
    assert "unlabelled" in printed
    assert f"Errors a bucket vary {whole['over_dispersion']:.2f} times as much" in printed
